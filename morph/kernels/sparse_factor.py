"""Factor and solve sparse symmetric positive definite systems: the pressures of a pipe network, L D L^T.

The pattern is analysed once, the numbers change at every round of a solve. Up-looking rows by the
elimination tree (T. A. Davis, Direct Methods for Sparse Linear Systems, 2006, chapter 4); the
caller orders the unknowns so that few entries fill in. Matrices hold their upper triangle by
columns, the diagonal entry included.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from morph.core.arrays import Floats, Ints


@njit(cache=True)
def analyse(column_start: Ints, row: Ints) -> tuple[Ints, Ints]:
    """Returns the parent (n,) of each unknown in the elimination tree (-1: a root) and the starts (n + 1,) of L."""
    n = len(column_start) - 1
    parent = np.full(n, -1, np.int64)
    seen = np.full(n, -1, np.int64)
    start = np.zeros(n + 1, np.int64)
    for k in range(n):
        seen[k] = k
        for p in range(column_start[k], column_start[k + 1]):
            i = row[p]
            while i < k and seen[i] != k:
                if parent[i] < 0:
                    parent[i] = k
                start[i + 1] += 1
                seen[i] = k
                i = parent[i]
    for k in range(n):
        start[k + 1] += start[k]
    return parent, start


@njit(cache=True)
def assemble(slot: Ints, conductance: Floats, value: Floats) -> None:
    """Writes the matrix of a network: every pipe adds to its two diagonals and takes from the entry between them.

    Args:
        slot: (m, 3) places in `value` of first diagonal, second diagonal, entry between; -1 for none.
        conductance: (m,) flow per pressure of each pipe.
        value: (nnz,) entries of the upper triangle, overwritten.
    """
    value[:] = 0.0
    for e in range(len(slot)):
        g = conductance[e]
        if slot[e, 0] >= 0:
            value[slot[e, 0]] += g
        if slot[e, 1] >= 0:
            value[slot[e, 1]] += g
        if slot[e, 2] >= 0:
            value[slot[e, 2]] -= g


@njit(cache=True)
def factor(
    column_start: Ints, row: Ints, value: Floats, parent: Ints, start: Ints, below: Ints, lower: Floats, pivot: Floats
) -> int:
    """Writes L (rows `below`, numbers `lower`, unit diagonal left out) and D (`pivot`); returns -1, or the bad column.

    A pivot that is not positive stops the factorisation: the matrix is not positive definite.
    """
    n = len(column_start) - 1
    work = np.zeros(n)
    path = np.empty(n, np.int64)
    seen = np.full(n, -1, np.int64)
    filled = start[:n].copy()
    for k in range(n):
        top = n
        seen[k] = k
        for p in range(column_start[k], column_start[k + 1]):
            i = row[p]
            work[i] += value[p]
            length = 0
            while seen[i] != k:
                path[length] = i
                length += 1
                seen[i] = k
                i = parent[i]
            while length > 0:
                top -= 1
                length -= 1
                path[top] = path[length]
        diagonal = work[k]
        work[k] = 0.0
        for t in range(top, n):
            i = path[t]
            y = work[i]
            work[i] = 0.0
            end = filled[i]
            for p in range(start[i], end):
                work[below[p]] -= lower[p] * y
            entry = y / pivot[i]
            diagonal -= entry * y
            below[end] = k
            lower[end] = entry
            filled[i] = end + 1
        if not diagonal > 0.0:
            return k
        pivot[k] = diagonal
    return -1


@njit(cache=True)
def solve_factored(start: Ints, below: Ints, lower: Floats, pivot: Floats, x: Floats) -> None:
    """Overwrites the right-hand side `x (n,)` by the solution of L D L^T x = b."""
    n = len(pivot)
    for j in range(n):
        xj = x[j]
        for p in range(start[j], start[j + 1]):
            x[below[p]] -= lower[p] * xj
    for j in range(n - 1, -1, -1):
        xj = x[j] / pivot[j]
        for p in range(start[j], start[j + 1]):
            xj -= lower[p] * x[below[p]]
        x[j] = xj
