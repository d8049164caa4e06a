"""Edge collapses on meshes whose right answer is known, and their promises measured again by plain numpy."""

import numpy as np
import pytest
import trimesh

from morph.core.progress import SILENT
from morph.geometry.mesh import Mesh, measure_condition
from morph.kernels.collapse import gather_ring, pair_edges, sharpest, try_collapse
from morph.solid.simplify import _twins, simplify

TOLERANCE_MM = 0.008


def grid_box(n):
    """The unit cube with every side cut into 2 n^2 triangles."""
    box = trimesh.creation.box((1.0, 1.0, 1.0))
    while len(box.faces) < 12 * n * n:
        box = box.subdivide()
    return box.vertices.copy(), np.asarray(box.faces, np.int64)


def corners_deg(vertices, triangles):
    corner = vertices[triangles]
    out = []
    for k in range(3):
        one, two = corner[:, (k + 1) % 3] - corner[:, k], corner[:, (k + 2) % 3] - corner[:, k]
        out.append(np.degrees(np.arctan2(np.linalg.norm(np.cross(one, two), axis=1), (one * two).sum(axis=1))))
    return np.array(out).T


def those_left(rows):
    assert ((rows >= 0) == (rows[:, :1] >= 0)).all()
    return rows[rows[:, 0] >= 0]


def test_sharpest_is_the_tangent_of_the_least_angle():
    rng = np.random.default_rng(1)
    for _ in range(50):
        v = rng.normal(size=(3, 3))
        assert sharpest(v, 0, 1, 2) == pytest.approx(np.tan(np.radians(corners_deg(v, np.array([[0, 1, 2]])).min())))


def test_flat_sides_lose_their_inner_vertices_and_corners_stay():
    vertices, triangles = grid_box(8)
    left = those_left(simplify(vertices, triangles, np.zeros(len(vertices), bool), TOLERANCE_MM, SILENT))
    assert len(left) < 0.35 * len(triangles)
    used = np.unique(left)
    assert measure_condition(Mesh(vertices[used], np.searchsorted(used, left))).closed
    assert trimesh.Trimesh(vertices, left, process=False).volume == pytest.approx(1.0, abs=1e-12)
    assert (np.abs(vertices[used]) == 0.5).all(axis=1).sum() == 8
    assert corners_deg(vertices, left).min() >= 14.99


@pytest.mark.parametrize("shape", ["ball", "ring"])
def test_a_round_body_moves_by_at_most_the_tolerance(shape):
    body = (
        trimesh.creation.icosphere(subdivisions=5, radius=3.0)
        if shape == "ball"
        else trimesh.creation.torus(6.0, 2.0, 120, 60)
    )
    vertices, triangles = body.vertices.copy(), np.asarray(body.faces, np.int64)
    left = those_left(simplify(vertices, triangles, np.zeros(len(vertices), bool), TOLERANCE_MM, SILENT))
    assert len(left) < 0.75 * len(triangles)
    used = np.unique(left)
    condition = measure_condition(Mesh(vertices[used], np.searchsorted(used, left)))
    assert condition.closed and condition.genus == (0 if shape == "ball" else 1)
    after = trimesh.Trimesh(vertices, left, process=False)
    gone = np.setdiff1d(np.arange(len(vertices)), used)
    _, away, _ = trimesh.proximity.closest_point(after, vertices[gone[::7]])
    assert away.max() <= TOLERANCE_MM + 1e-9
    assert corners_deg(vertices, left).min() >= min(14.99, corners_deg(vertices, triangles).min())


def test_vertices_to_keep_stay():
    vertices, triangles = grid_box(4)
    keep = np.zeros(len(vertices), bool)
    keep[::3] = True
    rows = simplify(vertices, triangles, keep, TOLERANCE_MM, SILENT)
    assert rows.shape == triangles.shape
    left = those_left(rows)
    assert np.isin(np.flatnonzero(keep), left).all()
    assert (simplify(vertices, triangles, keep, 0.0, SILENT) == triangles).all()


def test_a_collapse_that_folds_or_leaves_the_surface_is_refused():
    """A pyramid's tip, 0.5 above its base ring, may not be drawn into the ring; at 0.005 it may."""
    angle = 2.0 * np.pi * np.arange(6) / 6.0
    for height, allowed in ((0.5, False), (0.005, True)):
        ring_mm = np.column_stack([np.cos(angle), np.sin(angle), np.zeros(6)])
        vertices = np.vstack([ring_mm, [[0.0, 0.0, height], [0.0, 0.0, -2.0]]])
        top = [[k, (k + 1) % 6, 6] for k in range(6)]
        triangles = np.array(top + [[(k + 1) % 6, k, 7] for k in range(6)])
        twin = _twins(triangles, 8)
        start, out = triangles.ravel().copy(), np.full(8, -1)
        out[start] = np.arange(len(start))
        ring, halves = np.empty(32, np.int64), np.empty(32, np.int64)
        n = gather_ring(6, start, twin, out, ring, halves)
        assert n == 6 and sorted(ring[:6]) == list(range(6))
        corner, away = try_collapse(vertices, start, ring, halves, n, 0, 0.01, TOLERANCE_MM)
        assert (corner > 0.0) == allowed
        if allowed:
            assert away == pytest.approx(height, rel=1e-9)


def test_an_open_mesh_is_left_as_it_is():
    triangles = np.array([[0, 1, 2], [0, 2, 3]])
    assert _twins(triangles, 4) is None
    assert simplify(np.eye(4, 3), triangles, np.zeros(4, bool), 1.0, SILENT) is triangles


def test_half_edges_are_paired_as_sorting_pairs_them():
    body = trimesh.creation.icosphere(subdivisions=2)
    triangles = np.asarray(body.faces, np.int64)
    twin = np.empty(triangles.size, np.int64)
    assert pair_edges(triangles, len(body.vertices), twin)
    start, end = triangles.ravel(), np.roll(triangles, -1, axis=1).ravel()
    assert (start[twin] == end).all() and (end[twin] == start).all()
    assert not pair_edges(triangles[1:], len(body.vertices), twin[3:])
    assert not pair_edges(np.vstack([triangles, triangles[:1]]), len(body.vertices), np.empty(triangles.size + 3, int))
    assert not pair_edges(triangles[:, ::-1][:1], len(body.vertices), twin[:3])
    assert not pair_edges(triangles[:0], len(body.vertices), twin[:0])
