"""Strict crossings against every pair by numpy, and by hand."""

import numpy as np
import pytest

from morph.geometry.crossings import measure_crossings, measure_crossings_of
from morph.geometry.mesh import Mesh
from morph.kernels.crossing import triangles_cross


def twin(mesh):
    """Every pair: does any edge of one pass through the inside of the other (solving for the three weights)?"""

    def pierces(p, q, a, b, c):
        matrix = np.column_stack([q - p, a - b, a - c])
        if abs(np.linalg.det(matrix)) < 1e-12:
            return False
        t, u, v = np.linalg.solve(matrix, a - p)
        return 0 < t < 1 and u > 0 and v > 0 and u + v < 1

    corner, pairs, crossed = mesh.vertices_mm[mesh.triangles], 0, set()
    for i in range(len(corner)):
        for j in range(i + 1, len(corner)):
            if len(set(mesh.triangles[i]) & set(mesh.triangles[j])) >= 2:
                continue
            if any(
                pierces(one[k], one[(k + 1) % 3], *two)
                for one, two in ((corner[i], corner[j]), (corner[j], corner[i]))
                for k in range(3)
            ):
                pairs += 1
                crossed |= {i, j}
    return pairs, crossed


@pytest.mark.parametrize(("seed", "n"), [(0, 40), (1, 25), (2, 9), (3, 2)])
def test_random_triangles(seed, n):
    rng = np.random.default_rng(seed)
    corner = rng.uniform(0, 4, (n, 1, 3)) + rng.uniform(-1, 1, (n, 3, 3))
    mesh = Mesh(corner.reshape(-1, 3), np.arange(3 * n).reshape(-1, 3))
    found = measure_crossings(mesh)
    pairs, crossed = twin(mesh)
    assert found.pairs == pairs and set(np.flatnonzero(found.crossed)) == crossed
    if n >= 25:
        assert pairs > 0


def test_by_hand():
    v = np.array([[0.0, 0, 0], [4, 0, 0], [0, 4, 0], [1, 1, -1], [1, 1, 1], [9, 9, 1], [1, 1, 0], [2, 2, 5], [3, 1, 5]])

    def cross(one, two):
        return bool(triangles_cross(v, *one, *two))

    assert cross((0, 1, 2), (3, 4, 5))  # an edge through the inside
    assert cross((3, 4, 5), (0, 1, 2))
    assert not cross((0, 1, 2), (6, 7, 8))  # a corner on the plane only touches
    assert not cross((0, 1, 2), (0, 1, 4))  # a shared edge
    assert not cross((0, 1, 2), (0, 7, 8))  # a shared corner, the rest above


def test_two_triangles_with_a_shared_corner_can_cross():
    v = np.array([[0.0, 0, 0], [4, 0, 0], [0, 4, 0], [3, 1, -1], [1, 1, 2.0], [3, 3, 1]])
    assert triangles_cross(v, 0, 1, 2, 0, 3, 4)
    assert not triangles_cross(v, 0, 1, 2, 0, 4, 5)


def test_flat_meshes_do_not_cross():
    x, y = np.meshgrid(np.arange(6.0), np.arange(6.0))
    v = np.column_stack([x.ravel(), y.ravel(), 0.0 * x.ravel()])
    k = np.array([i * 6 + j for i in range(5) for j in range(5)])
    mesh = Mesh(v, np.vstack([np.column_stack([k, k + 1, k + 7]), np.column_stack([k, k + 7, k + 6])]))
    assert measure_crossings(mesh).pairs == 0
    assert measure_crossings(Mesh(v, np.zeros((0, 3), int))).pairs == 0


@pytest.mark.parametrize("seed", range(4))
def test_crossings_of_some_are_those_of_all_that_have_one_of_them(seed):
    """Every crossing with an asked triangle is found; none is made up; none asked, none found."""
    rng = np.random.default_rng(seed)
    corner = rng.uniform(0, 6, (60, 1, 3)) + rng.uniform(-1, 1, (60, 3, 3))
    mesh = Mesh(corner.reshape(-1, 3), np.arange(180).reshape(-1, 3))
    every = set(np.flatnonzero(measure_crossings(mesh).crossed))
    for share in (0.05, 0.3, 1.0):
        asked = rng.uniform(size=60) < share
        found = measure_crossings_of(mesh, asked)
        marked = set(np.flatnonzero(found.crossed))
        wanted = set()
        for i in np.flatnonzero(asked):
            partners = {
                j for j in range(60) if j != i and triangles_cross(mesh.vertices_mm, *mesh.triangles[[i, j]].ravel())
            }
            wanted |= partners | ({int(i)} if partners else set())
        assert wanted <= marked <= every
        if share == 1.0:
            assert marked == every and found.pairs == measure_crossings(mesh).pairs > 0
    assert measure_crossings_of(mesh, np.zeros(60, bool)).pairs == 0
