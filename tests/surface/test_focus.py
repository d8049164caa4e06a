"""Where an offset is impossible: curvature times depth from the mesh against the exact height field, with scan noise."""

from pathlib import Path

import numpy as np
import pytest

from morph.settings.job import FreeformSettings
from morph.surface.guide import make_guide
from morph.surface.offset import offset_surface
from tests.surface import bodies

HALF = np.array([57.0, 37.0])


def exact_curvature(x, y, h=1e-3):
    """The larger principal curvature, positive where convex, of z = ridges(x, y) by differences of the formula."""
    f = bodies.ridges
    fx, fy = (f(x + h, y) - f(x - h, y)) / (2 * h), (f(x, y + h) - f(x, y - h)) / (2 * h)
    fxx = (f(x + h, y) - 2 * f(x, y) + f(x - h, y)) / h**2
    fyy = (f(x, y + h) - 2 * f(x, y) + f(x, y - h)) / h**2
    fxy = (f(x + h, y + h) - f(x + h, y - h) - f(x - h, y + h) + f(x - h, y - h)) / (4 * h**2)
    w = np.sqrt(1 + fx**2 + fy**2)
    gauss = (fxx * fyy - fxy**2) / w**4
    mean = -((1 + fx**2) * fyy - 2 * fx * fy * fxy + (1 + fy**2) * fxx) / (2 * w**3)
    return mean + np.sqrt(np.maximum(mean**2 - gauss, 0.0))


@pytest.mark.parametrize("depth", [25.0, 35.0])
@pytest.mark.parametrize(("noise", "least"), [(0.0, 0.95), (0.03, 0.9)])
def test_precision_and_recall_of_the_focus(noise, least, depth):
    mesh = bodies.ridged_cap(50_000, 17, noise=noise)
    anchor = mesh.vertices_mm[np.linalg.norm(mesh.vertices_mm, axis=1).argmin()]
    how = FreeformSettings(Path("cap.stl"), tuple(anchor), (0, 1, 0), (0, 0, -9), depth_mm=depth)
    guide = make_guide(mesh, how, tuple(2 * HALF), depth)
    focal = offset_surface(guide, depth).focal
    points = guide.face.mesh.vertices_mm
    inside = (np.abs(points[:, :2]) < HALF).all(axis=1)
    said = focal[inside] >= 1.0
    true = exact_curvature(*points[inside, :2].T) * depth >= 1.0
    assert 0.02 < true.mean() < 0.3
    precision, recall = (said & true).sum() / said.sum(), (said & true).sum() / true.sum()
    print(f"noise {noise} depth {depth}: precision {precision:.3f} recall {recall:.3f} reach {guide.reach_mm:.2f}")
    assert precision >= least and recall >= least
