"""Least squares onto planes against numpy, and crease vertices of a known ridge."""

import dataclasses

import numpy as np
import pytest

from morph.body.section import SectionRule
from morph.core.progress import SILENT
from morph.kernels.crease import step_to_planes
from morph.settings.job import SectionShape
from morph.solid.crease import _crease_vertices, _Split, _with_splits
from morph.solid.extract import extract_surface
from morph.solid.field import sample_field
from morph.solid.sweep import make_sweep
from tests.solid import plans


@pytest.mark.parametrize("seed", range(5))
def test_the_step_is_the_regularised_least_squares_solution(seed):
    rng = np.random.default_rng(seed)
    n = 9
    normals = rng.normal(size=(n, 3))
    normals /= np.linalg.norm(normals, axis=1)[:, None]
    planes, weights, point = (
        np.column_stack([normals, rng.normal(size=n)]),
        rng.uniform(0.2, 1.0, n),
        rng.normal(size=3),
    )
    step, hold = np.empty(3), 0.01
    cosine = step_to_planes(point, planes, weights, n, hold, step)
    root = np.sqrt(weights)[:, None]
    system = np.vstack([root * normals, np.sqrt(hold * weights.sum()) * np.eye(3)])
    right = np.concatenate([root[:, 0] * (planes[:, 3] - normals @ point), np.zeros(3)])
    assert step == pytest.approx(np.linalg.lstsq(system, right, rcond=None)[0], abs=1e-9)
    between = normals @ normals.T
    assert cosine == pytest.approx(between[np.tril_indices(n, -1)].min())


def test_three_planes_of_a_corner_meet_there():
    planes = np.array([[1.0, 0.0, 0.0, 2.0], [0.0, 1.0, 0.0, -1.0], [0.0, 0.0, 1.0, 0.5]])
    step = np.empty(3)
    step_to_planes(np.zeros(3), planes, np.ones(3), 3, 1e-9, step)
    assert step == pytest.approx([2.0, -1.0, 0.5], abs=1e-6)


def test_vertices_of_ridge_cells_lie_on_the_ridge():
    """A flat roofed channel along a slanted line: its ridge is the line r / cos b above it."""
    a, b = np.array([12.0, 12.0, 12.0]), np.array([46.0, 29.0, 12.0])
    plan = plans.plan_of([plans.branch("B1", "N1", "N2", plans.sampled([a, b], 6.0), 6.0)])
    plan = dataclasses.replace(plan, section=SectionRule(SectionShape.ROOFED, 47.0))
    field = sample_field(make_sweep(plan), 0.3, SILENT)
    surface = extract_surface(field, SILENT)
    chosen, placed, _ = _crease_vertices(field, surface, 0.93, SILENT)
    way = (b - a) / np.linalg.norm(b - a)
    along = (placed - a) @ way
    inner = (along > 4.0) & (along < np.linalg.norm(b - a) - 4.0)
    off = placed - a - along[:, None] * way - np.array([0.0, 0.0, 3.0 / np.cos(np.radians(47.0))])
    assert inner.sum() > 50
    assert np.linalg.norm(off[inner], axis=1).max() < 1e-3
    assert np.linalg.norm(surface.vertices[chosen] - placed, axis=1).max() < 2.0 * 0.3


def test_split_edges_keep_a_mesh_closed_whatever_edges_are_cut():
    vertices = np.array([[0.0, 0, 0], [4, 0, 0], [0, 4, 0], [0, 0, 4]])
    triangles = np.array([[0, 2, 1], [0, 1, 3], [1, 2, 3], [0, 3, 2]])
    edges = np.array([[0, 1], [0, 2], [0, 3], [1, 2], [1, 3], [2, 3]])
    from morph.geometry.mesh import Mesh, measure_condition, mesh_volume_mm3

    for choice in range(64):
        cut = edges[[(choice >> k) & 1 == 1 for k in range(6)]]
        middle = vertices[cut].mean(axis=1)
        more, parts = _with_splits(vertices, triangles, _Split(cut, middle))
        assert measure_condition(Mesh(more, parts)).closed
        assert mesh_volume_mm3(Mesh(more, parts)) == pytest.approx(64.0 / 6.0)
        assert len(parts) == 4 + 2 * len(cut)
