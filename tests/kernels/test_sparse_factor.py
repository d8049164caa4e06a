"""The sparse factor against a dense one written out in numpy, on small networks."""

import numpy as np
import pytest

from morph.kernels.sparse_factor import analyse, assemble, factor, solve_factored

pytestmark = pytest.mark.quick


def dense_factor(matrix):
    """L (unit diagonal) and D of a positive definite matrix, column by column."""
    n = len(matrix)
    lower, pivot = np.eye(n), np.zeros(n)
    for j in range(n):
        pivot[j] = matrix[j, j] - (lower[j, :j] ** 2 * pivot[:j]).sum()
        for i in range(j + 1, n):
            lower[i, j] = (matrix[i, j] - (lower[i, :j] * lower[j, :j] * pivot[:j]).sum()) / pivot[j]
    return lower, pivot


def small_network(seed):
    """Pattern (column starts, rows, slots), conductances and the dense matrix of up to 12 nodes tied to a fixed one."""
    random = np.random.default_rng(seed)
    n = int(random.integers(1, 13))
    first = np.concatenate([np.arange(n), random.integers(0, n, 2 * n)])
    second = np.concatenate([np.full(n, -1), random.integers(0, n, 2 * n)])  # -1: the fixed node
    conductance = random.uniform(0.1, 10.0, 3 * n)
    matrix, entries = np.zeros((n, n)), {(k, k) for k in range(n)}
    for a, b, g in zip(first, second, conductance, strict=True):
        if a == b:
            continue
        matrix[a, a] += g
        if b >= 0:
            matrix[b, b] += g
            matrix[a, b] -= g
            matrix[b, a] -= g
            entries.add((max(a, b), min(a, b)))
    ordered = sorted(entries)
    place = {entry: k for k, entry in enumerate(ordered)}
    column_start = np.searchsorted([c for c, _ in ordered], np.arange(n + 1)).astype(np.int64)
    row = np.array([r for _, r in ordered], dtype=np.int64)
    slot = np.full((3 * n, 3), -1, dtype=np.int64)
    for e, (a, b) in enumerate(zip(first, second, strict=True)):
        if a != b:
            slot[e, 0] = place[a, a]
            if b >= 0:
                slot[e, 1:] = place[b, b], place[max(a, b), min(a, b)]
    return column_start, row, slot, conductance, matrix


@pytest.mark.parametrize("seed", range(12))
def test_factor_and_solution_are_the_dense_ones(seed):
    column_start, row, slot, conductance, matrix = small_network(seed)
    n = len(matrix)
    value = np.empty(len(row))
    assemble(slot, conductance, value)
    parent, start = analyse(column_start, row)
    below, lower, pivot = np.zeros(start[-1], dtype=np.int64), np.zeros(start[-1]), np.ones(n)
    assert factor(column_start, row, value, parent, start, below, lower, pivot) == -1
    dense_lower, dense_pivot = dense_factor(matrix)
    got = np.eye(n)
    for j in range(n):
        got[below[start[j] : start[j + 1]], j] = lower[start[j] : start[j + 1]]
    assert pivot == pytest.approx(dense_pivot, rel=1e-10)
    assert got == pytest.approx(dense_lower, abs=1e-10)
    right = np.random.default_rng(seed + 100).normal(size=n)
    x = right.copy()
    solve_factored(start, below, lower, pivot, x)
    assert matrix @ x == pytest.approx(right, abs=1e-9)


def test_a_matrix_that_is_not_positive_definite_names_its_column():
    column_start, row = np.array([0, 1, 3], dtype=np.int64), np.array([0, 0, 1], dtype=np.int64)
    parent, start = analyse(column_start, row)
    arrays = np.zeros(start[-1], dtype=np.int64), np.zeros(start[-1]), np.ones(2)
    assert factor(column_start, row, np.array([1.0, 2.0, 1.0]), parent, start, *arrays) == 1
