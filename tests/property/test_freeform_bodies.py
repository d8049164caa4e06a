"""Random smooth bodies at random anchors: every accepted sheet passes the four tests by routines of other libraries."""

from collections import Counter
from pathlib import Path

import numpy as np
import pytest
import trimesh
from scipy.spatial import cKDTree

from morph.core.errors import GeometryError
from morph.settings.job import FreeformSettings, SeenFrom
from morph.surface.lay import make_freeform
from tests.surface import bodies

N = 12_000
EXPECTED = {
    "sheet-larger-than-surface",
    "depth-past-focus",
    "surface-edge-under-sheet",
    "sheet-off-surface",
    "sheet-folds",
    "sheet-meets-itself",
    "surface-too-coarse",
    "depth-meets-other-face",
    "up-along-normal",
    "metal-side-unclear",
    "surface-too-small",
}


def random_body(rng):
    """A height field of a paraboloid and up to six bumps."""
    bend = rng.uniform(-1 / 160.0, 1 / 160.0, 2)
    bumps = [
        (rng.uniform(-5, 5), *rng.uniform((-50, -35), (50, 35)), rng.uniform(50, 600))
        for _ in range(rng.integers(0, 7))
    ]

    def height(x, y):
        total = bend[0] * x**2 + bend[1] * y**2
        for tall, cx, cy, wide in bumps:
            total = total + tall * np.exp(-((x - cx) ** 2 + (y - cy) ** 2) / wide)
        return total

    return height


def independent_faults(sheet, mesh, normals_up, depth):
    """Names of the tests an accepted sheet fails, from its points alone."""
    carrier, rng = sheet.carrier, np.random.default_rng(1)
    width, height = carrier.size_mm
    x, y = np.linspace(0, width, 61), np.linspace(0, height, 45)
    grid = np.column_stack([np.repeat(x, 45), np.tile(y, 61)])
    points = carrier.point_mm(grid, depth).reshape(61, 45, 3)
    found = []
    body = trimesh.Trimesh(mesh.vertices_mm, mesh.triangles, process=False)
    sample = rng.uniform((0, 0), (width, height), (400, 2))
    _, distance, triangle = trimesh.proximity.closest_point(body, carrier.point_mm(sample, depth))
    if np.abs(distance - depth).max() > 0.2:
        found.append("off")
    normal = np.cross(points[1:, :-1] - points[:-1, :-1], points[:-1, 1:] - points[:-1, :-1])
    _, _, below = trimesh.proximity.closest_point(body, points[:-1, :-1].reshape(-1, 3)[::7])
    if ((normal.reshape(-1, 3)[::7] * body.face_normals[below]).sum(axis=1) * normals_up <= 0).any():
        found.append("folded")
    flat, space = cKDTree(grid), cKDTree(points.reshape(-1, 3))
    near = space.query_pairs(0.4 * min(x[1], y[1]), output_type="ndarray")
    if len(near) and (np.linalg.norm(grid[near[:, 0]] - grid[near[:, 1]], axis=1) > 8.0).any():
        found.append("double")
    assert flat.n == space.n
    stretch = np.linalg.svd(np.eye(2) - depth * carrier.shape_operator(sample), compute_uv=False)
    turned = np.linalg.det(np.eye(2) - depth * carrier.shape_operator(sample))
    if turned.min() <= 0 or stretch.min() <= 0:
        found.append("focus")
    assert len(triangle) == len(sample)
    return found


def run(seeds):
    seen = Counter()
    for seed in seeds:
        rng = np.random.default_rng(seed)
        height = random_body(rng)
        mesh = bodies.parametric(bodies.height_field(height), (-75.0, 75.0), (-55.0, 55.0), N, seed)
        place, angle, depth = rng.uniform((-25, -15), (25, 15)), rng.uniform(0, 2 * np.pi), rng.uniform(4.0, 16.0)
        z = float(height(*place))
        size = tuple(rng.uniform((40, 30), (80, 55)))
        how = FreeformSettings(
            Path("body.stl"), (*place, z), (np.cos(angle), np.sin(angle), 0.0), (*place, z - 6.0), depth_mm=depth
        )
        try:
            sheet = make_freeform(how, mesh, size, SeenFrom.PART, depth)
        except GeometryError as error:
            assert error.code in EXPECTED, f"seed {seed}: {error}"
            seen[error.code] += 1
            continue
        faults = independent_faults(sheet, mesh, 1.0, depth)
        assert not faults, f"seed {seed}: accepted, but {faults}"
        seen["accepted"] += 1
    print(dict(seen))
    return seen


def test_twenty_random_bodies():
    seen = run(range(500, 520))
    assert seen["accepted"] >= 8


@pytest.mark.slow
def test_three_hundred_random_bodies():
    seen = run(range(1000, 1300))
    assert seen["accepted"] >= 120 and len(seen) >= 3
