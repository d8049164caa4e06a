"""The band of triangles between two closed rows of vertices, as even as it can be.

Every band between the two rows is a path through a grid, one step per vertex of either row; the cheapest path is
found by dynamic programming (H. Fuchs, Z. M. Kedem and S. P. Uselton, Optimal surface reconstruction from planar
contours, 1977; from memory). A step costs the squared length of the edge it adds, and FOLD more where its triangle looks inwards.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from morph.core.arrays import Floats, Ints

FOLD = 1e6

NOTCH_COSINE = -0.6
"""Two edges of a row that meet at less than 127 degrees are a notch."""


@njit(cache=True, nogil=True)
def looks_out(a: Floats, b: Floats, c: Floats, centre: Floats, axis: Floats) -> bool:
    """Returns whether triangle a b c looks away from the line through `centre` along unit `axis`."""
    x1, y1, z1 = b[0] - a[0], b[1] - a[1], b[2] - a[2]
    x2, y2, z2 = c[0] - a[0], c[1] - a[1], c[2] - a[2]
    nx, ny, nz = y1 * z2 - z1 * y2, z1 * x2 - x1 * z2, x1 * y2 - y1 * x2
    mx = (a[0] + b[0] + c[0]) / 3.0 - centre[0]
    my = (a[1] + b[1] + c[1]) / 3.0 - centre[1]
    mz = (a[2] + b[2] + c[2]) / 3.0 - centre[2]
    along = mx * axis[0] + my * axis[1] + mz * axis[2]
    across = nx * (mx - along * axis[0]) + ny * (my - along * axis[1]) + nz * (mz - along * axis[2])
    return across > 0.0


@njit(cache=True, nogil=True)
def zip_rows(vertices: Floats, lower: Ints, upper: Ints, centre: Floats, axis: Floats, triangles: Ints) -> bool:
    """Joins two closed rows of vertices that run counter-clockwise about `axis`, `upper` further along it.

    `lower (m,)` and `upper (n,)` number rows of `vertices`, and the edge between their first entries is in the band.
    `triangles (m + n, 3)` receives it, looking away from the line through `centre`. Returns whether none is folded.
    """
    m = len(lower)
    n = len(upper)
    cost = np.full((m + 1, n + 1), 1e30)
    cost[0, 0] = 0.0
    by_lower = np.zeros((m + 1, n + 1), np.uint8)
    for i in range(m + 1):
        for j in range(n + 1):
            if i == 0 and j == 0:
                continue
            low = vertices[lower[i % m]]
            high = vertices[upper[j % n]]
            edge = (low[0] - high[0]) ** 2 + (low[1] - high[1]) ** 2 + (low[2] - high[2]) ** 2
            if i > 0:
                step = cost[i - 1, j] + edge
                if not looks_out(vertices[lower[i - 1]], low, high, centre, axis):
                    step += FOLD
                if step < cost[i, j]:
                    cost[i, j] = step
                    by_lower[i, j] = 1
            if j > 0:
                step = cost[i, j - 1] + edge
                if not looks_out(low, high, vertices[upper[j - 1]], centre, axis):
                    step += FOLD
                if step < cost[i, j]:
                    cost[i, j] = step
                    by_lower[i, j] = 0
    i, j = m, n
    at = m + n
    while at > 0:
        at -= 1
        if by_lower[i, j]:
            i -= 1
            triangles[at, 0] = lower[i]
            triangles[at, 1] = lower[(i + 1) % m]
            triangles[at, 2] = upper[j % n]
        else:
            j -= 1
            triangles[at, 0] = lower[i % m]
            triangles[at, 1] = upper[(j + 1) % n]
            triangles[at, 2] = upper[j]
    return bool(cost[m, n] < FOLD)


@njit(cache=True, nogil=True)
def fill_notches(
    vertices: Floats, row: Ints, kept: int, is_lower: bool, centre: Floats, axis: Floats, triangles: Ints
) -> tuple[int, int]:
    """Fills the notches of a closed row of vertices with one triangle each; the first `kept` vertices are not given up.

    A notch is a vertex at which two edges meet at an angle of less than NOTCH_COSINE towards the band; `row (m,)` as `zip_rows` takes it,
    lower or upper, is shortened in place. Returns how many vertices are left and how many of `triangles (m, 3)` were made.
    """
    left = len(row)
    made = 0
    changed = True
    while changed and left > 3:
        changed = False
        i = kept
        while i < left and left > 3:
            a, b, c = row[i - 1 if i > 0 else left - 1], row[i], row[(i + 1) % left]
            dot = 0.0
            one = 0.0
            two = 0.0
            for x in range(3):
                u = vertices[a, x] - vertices[b, x]
                v = vertices[c, x] - vertices[b, x]
                dot += u * v
                one += u * u
                two += v * v
            if dot > NOTCH_COSINE * np.sqrt(one * two):
                first, last = (a, c) if is_lower else (c, a)
                if looks_out(vertices[first], vertices[b], vertices[last], centre, axis):
                    triangles[made, 0] = first
                    triangles[made, 1] = b
                    triangles[made, 2] = last
                    made += 1
                    for k in range(i, left - 1):
                        row[k] = row[k + 1]
                    left -= 1
                    changed = True
                    continue
            i += 1
    return left, made
