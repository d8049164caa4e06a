"""Least-squares polynomials to the points around a place of a surface: height, normal, curvature and scatter.

Method: a polynomial height over the tangent plane (osculating jet, Cazals and Pouget 2005, from memory), fitted
twice, the second time over the plane the first fit found. Points are weighted by (1 - (rho / reach)^2)^2.
Places are independent of each other, so the bytes do not depend on threads.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from morph.core.arrays import Floats, Ints

N_TERMS = 15
LEAST_POINTS = 14
"""Fewer points than this around a place: the fit is a quadric instead of a cubic, or none at all below 8."""
ENOUGH_POINTS = 45
"""From here on the fit is a quartic: a tight bump is not flattened by the terms that are left out."""
LEAST_QUADRIC = 8
SINGULAR = 1e-7
"""Least pivot over diagonal: below it the points do not tell the term (rows of points in a line)."""
FACING = 0.2
"""Points whose normal has less than this cosine with the place's own belong to another side of the body."""
FITS = 4
"""Fits per place: each one lays its plane along what the one before it found."""


@njit(cache=True)
def _solve(a: Floats, b: Floats, n: int) -> bool:
    """Solves the symmetric positive system a (n, n) x = b (n,) in place of b by Cholesky; False when it is singular."""
    for i in range(n):
        for j in range(i + 1):
            s = a[i, j]
            for k in range(j):
                s -= a[i, k] * a[j, k]
            if i == j:
                if not s > SINGULAR * a[i, i]:
                    return False
                a[i, i] = np.sqrt(s)
            else:
                a[i, j] = s / a[j, j]
    for i in range(n):
        for k in range(i):
            b[i] -= a[i, k] * b[k]
        b[i] /= a[i, i]
    for i in range(n - 1, -1, -1):
        for k in range(i + 1, n):
            b[i] -= a[k, i] * b[k]
        b[i] /= a[i, i]
    return True


@njit(cache=True)
def _tangents(n: Floats, frame: Floats) -> None:
    """Fills frame (3, 3) with two unit tangents and the unit normal n (3,)."""
    size = np.sqrt(n[0] * n[0] + n[1] * n[1] + n[2] * n[2])
    z0, z1, z2 = n[0] / size, n[1] / size, n[2] / size
    if abs(z0) < 0.7:
        x0, x1, x2 = 0.0, z2, -z1
    else:
        x0, x1, x2 = -z2, 0.0, z0
    size = np.sqrt(x0 * x0 + x1 * x1 + x2 * x2)
    x0, x1, x2 = x0 / size, x1 / size, x2 / size
    frame[0, 0], frame[0, 1], frame[0, 2] = x0, x1, x2
    frame[1, 0], frame[1, 1], frame[1, 2] = z1 * x2 - z2 * x1, z2 * x0 - z0 * x2, z0 * x1 - z1 * x0
    frame[2, 0], frame[2, 1], frame[2, 2] = z0, z1, z2


@njit(cache=True)
def _fit_once(
    near: Floats, count: int, q: Floats, reach: float, frame: Floats, a: Floats, b: Floats, term: Floats
) -> tuple[int, float]:
    """Fits heights over `frame` about q (3,) into b; returns the terms used (0: no fit) and the scatter in mm."""
    n = 6 if count < LEAST_POINTS else 10 if count < ENOUGH_POINTS else 15
    if count < LEAST_QUADRIC:
        return 0, 0.0
    a[:n, :n] = 0.0
    b[:n] = 0.0
    total, squares = 0.0, 0.0
    for k in range(count):
        dx, dy, dz = near[k, 0] - q[0], near[k, 1] - q[1], near[k, 2] - q[2]
        x = (dx * frame[0, 0] + dy * frame[0, 1] + dz * frame[0, 2]) / reach
        y = (dx * frame[1, 0] + dy * frame[1, 1] + dz * frame[1, 2]) / reach
        w = (dx * frame[2, 0] + dy * frame[2, 1] + dz * frame[2, 2]) / reach
        weight = max(1.0 - (dx * dx + dy * dy + dz * dz) / (reach * reach), 0.0) ** 2
        term[0], term[1], term[2], term[3], term[4], term[5] = 1.0, x, y, x * x, x * y, y * y
        term[6], term[7], term[8], term[9] = x * x * x, x * x * y, x * y * y, y * y * y
        if n == 15:
            term[10], term[11], term[12] = x * x * x * x, x * x * x * y, x * x * y * y
            term[13], term[14] = x * y * y * y, y * y * y * y
        for i in range(n):
            b[i] += weight * term[i] * w
            for j in range(i + 1):
                a[i, j] += weight * term[i] * term[j]
        total += weight
        squares += weight * w * w
    right, whole = b[:n].copy(), a[:6, :6].copy()
    if not _solve(a, b, n):
        # too few rows of points for the higher terms: the quadric alone
        n = 6
        a[:6, :6] = whole
        b[:6] = right[:6]
        b[6:] = 0.0
        if not _solve(a, b, n):
            return 0, 0.0
    for i in range(n):
        squares -= b[i] * right[i]
    freedom = max(1.0 - n / count, 0.1)
    return n, reach * np.sqrt(max(squares, 0.0) / (total * freedom))


@njit(cache=True)
def _gather(
    points: Floats,
    point_normals: Floats,
    cell_first: Ints,
    cell_order: Ints,
    low: Floats,
    cell: float,
    cells: Ints,
    q: Floats,
    n0: Floats,
    r: float,
    stride: int,
    near: Floats,
) -> int:
    """Returns how many points lie within r of q (3,) and face like n0 (3,); every `stride`-th goes into near."""
    lo, hi = np.empty(3, np.int64), np.empty(3, np.int64)
    for c in range(3):
        lo[c] = max(int((q[c] - r - low[c]) / cell), 0)
        hi[c] = min(int((q[c] + r - low[c]) / cell), cells[c] - 1)
    seen = 0
    for c0 in range(lo[0], hi[0] + 1):
        for c1 in range(lo[1], hi[1] + 1):
            row = (c0 * cells[1] + c1) * cells[2]
            for s in range(cell_first[row + lo[2]], cell_first[row + hi[2] + 1]) if hi[2] >= lo[2] else range(0):
                k = cell_order[s]
                dx, dy, dz = points[k, 0] - q[0], points[k, 1] - q[1], points[k, 2] - q[2]
                if dx * dx + dy * dy + dz * dz >= r * r:
                    continue
                m = point_normals[k]
                if m[0] * n0[0] + m[1] * n0[1] + m[2] * n0[2] <= FACING:
                    continue
                if seen % stride == 0 and seen // stride < len(near):
                    near[seen // stride] = points[k]
                seen += 1
    return seen


@njit(cache=True)
def fit_many(
    points: Floats,
    point_normals: Floats,
    cell_first: Ints,
    cell_order: Ints,
    low: Floats,
    cell: float,
    cells: Ints,
    place: Floats,
    place_normal: Floats,
    reach: Floats,
    most_near: int,
    result: Floats,
) -> None:
    """Fits a cubic around each place.

    Args:
        points: (n, 3) surface points.
        point_normals: (n, 3); points that face away from the place are left out.
        cell_first: the points of cube c of a search grid are cell_order[cell_first[c]:cell_first[c + 1]].
        cell_order: (n,) the points sorted by cube.
        low: (3,) lowest corner of the grid.
        cell: edge of its cubes in mm.
        cells: (3,) how many cubes along each axis.
        place: (k, 3).
        place_normal: (k, 3) first guesses.
        reach: (k,) in mm.
        most_near: of more points than this every so many are taken.
        result: (k, 12) becomes height of the surface over the place along the new normal (mm), that normal (3),
            second derivatives xx, xy, yy (1/mm) over the tangents, the first tangent (3), scatter (mm) and the
            points used (0: no fit).
    """
    near = np.empty((most_near, 3))
    frame, a, b, term = np.empty((3, 3)), np.empty((N_TERMS, N_TERMS)), np.empty(N_TERMS), np.empty(N_TERMS)
    for i in range(len(place)):
        q, n0, r = place[i], place_normal[i], reach[i]
        near_by = (points, point_normals, cell_first, cell_order, low, cell, cells, q, n0, r)
        count = _gather(*near_by, 1, near)
        if count > most_near:
            stride = (count + most_near - 1) // most_near
            count = (_gather(*near_by, stride, near) + stride - 1) // stride
        _tangents(n0, frame)
        used, scatter = 0, 0.0
        for turn in range(FITS):
            used, scatter = _fit_once(near, count, q, r, frame, a, b, term)
            if used == 0 or turn == FITS - 1 or b[1] * b[1] + b[2] * b[2] < 1e-24:
                break
            _tangents(frame[2] - b[1] * frame[0] - b[2] * frame[1], frame)
        result[i, 11] = count if used > 0 else 0
        if used > 0:
            result[i, 0] = r * b[0]
            result[i, 1:4] = frame[2]
            result[i, 4], result[i, 5], result[i, 6] = 2.0 * b[3] / r, b[4] / r, 2.0 * b[5] / r
            result[i, 7:10] = frame[0]
            result[i, 10] = scatter
