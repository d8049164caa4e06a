"""Bands between two rows of vertices against every band there is, and notches by hand."""

import itertools

import numpy as np
import pytest

from morph.kernels.zipper import fill_notches, looks_out, zip_rows

CENTRE, AXIS = np.zeros(3), np.array([0.0, 0.0, 1.0])


def ring(angles, height, radius=1.0):
    return np.column_stack([radius * np.cos(angles), radius * np.sin(angles), np.full(len(angles), height)])


def every_cost(vertices, lower, upper):
    """Sum of squared new edges of every order of steps whose triangles all look away from the axis."""
    m, n = len(lower), len(upper)
    for ups in itertools.combinations(range(m + n), n):
        i = j = 0
        cost, fine = 0.0, True
        for step in range(m + n):
            a, b = vertices[lower[i % m]], vertices[upper[j % n]]
            if step in ups:
                j += 1
                corner = (a, vertices[upper[j % n]], b)
            else:
                i += 1
                corner = (a, vertices[lower[i % m]], b)
            normal, middle = np.cross(corner[1] - corner[0], corner[2] - corner[0]), np.mean(corner, axis=0)
            fine &= normal[0] * middle[0] + normal[1] * middle[1] > 0.0
            cost += ((vertices[lower[i % m]] - vertices[upper[j % n]]) ** 2).sum()
        if fine:
            yield cost


@pytest.mark.parametrize("seed", range(6))
def test_the_band_is_the_cheapest_of_all(seed):
    rng = np.random.default_rng(seed)
    m, n = 6, 5
    low = ring(np.sort(rng.uniform(0.0, 6.0, m)), 0.1 * rng.uniform(size=m))
    high = ring(np.sort(rng.uniform(0.0, 6.0, n)), 0.8)
    vertices, lower, upper = np.vstack([low, high]), np.arange(m), m + np.arange(n)
    band = np.empty((m + n, 3), np.int64)
    costs = list(every_cost(vertices, lower, upper))
    assert zip_rows(vertices, lower, upper, CENTRE, AXIS, band) == bool(costs)
    edges = np.sort(np.concatenate([band[:, [0, 1]], band[:, [1, 2]], band[:, [2, 0]]]), axis=1)
    across = np.unique(edges[(edges[:, 0] < m) & (edges[:, 1] >= m)], axis=0)
    if costs:
        assert ((vertices[across[:, 0]] - vertices[across[:, 1]]) ** 2).sum() == pytest.approx(min(costs))
        for a, b, c in band:
            assert looks_out(vertices[a], vertices[b], vertices[c], CENTRE, AXIS)


def test_a_band_uses_each_edge_of_both_rows_once():
    m, n = 40, 17
    vertices = np.vstack([ring(2 * np.pi * np.arange(m) / m, 0.0), ring(2 * np.pi * np.arange(n) / n, 0.3)])
    band = np.empty((m + n, 3), np.int64)
    assert zip_rows(vertices, np.arange(m), m + np.arange(n), CENTRE, AXIS, band)
    directed = {(int(t[k]), int(t[(k + 1) % 3])) for t in band for k in range(3)}
    assert len(directed) == 3 * (m + n)
    assert all((k, (k + 1) % m) in directed for k in range(m))
    assert all((m + (k + 1) % n, m + k) in directed for k in range(n))


def test_a_row_that_runs_backwards_folds():
    vertices = np.vstack([ring(-2 * np.pi * np.arange(8) / 8, 0.0), ring(2 * np.pi * np.arange(8) / 8, 0.3)])
    assert not zip_rows(vertices, np.arange(8), 8 + np.arange(8), CENTRE, AXIS, np.empty((16, 3), np.int64))


@pytest.mark.parametrize("is_lower", [True, False])
def test_notches_are_filled_and_teeth_are_left(is_lower):
    """Sixteen vertices, one of them deep below its neighbours (a notch), one a little above them (a tooth)."""
    angle, height = 2 * np.pi * np.arange(16) / 16, np.zeros(16)
    height[5], height[11] = -0.6, 0.1
    vertices = ring(angle, height if is_lower else -height)
    row, made = np.arange(16), np.empty((16, 3), np.int64)
    left, n = fill_notches(vertices, row, 0, is_lower, CENTRE, AXIS, made)
    assert (left, n) == (15, 1)
    assert 5 not in row[:left].tolist() and 11 in row[:left].tolist()
    a, b, c = made[0].tolist()
    assert (a, b, c) == ((4, 5, 6) if is_lower else (6, 5, 4))
    kept = np.roll(np.arange(16), -5)
    assert fill_notches(vertices, kept, 1, is_lower, CENTRE, AXIS, made) == (16, 0)
