"""Fewer triangles: vertices drawn into a neighbour where the surface moves by less than a tolerance.

Half-edge h starts at corner h of the flat triangle list; `twin[h]` runs the other way along the same edge.
A vertex is given up only if the new triangles around its place keep their direction, their corners do not get
sharper than LEAST_ANGLE (or than they were), and it lies within the tolerance of them, what its neighbourhood
has moved before included. Vertices never move, so those on creases stay exact.

Against manifold3d's simplify on the same surface of 670 000 triangles: see tests/bench.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from morph.core.arrays import Floats, Ints

MOST_NEIGHBOURS = 32
LEAST_COSINE = 0.8
"""A triangle may turn by at most this (cosine) when a corner moves."""

LEAST_ANGLE_TANGENT = 0.2679
"""Tangent of 15 degrees: new corners are at least this wide, or as wide as the sharpest corner they replace."""


@njit(cache=True, nogil=True, error_model="numpy")
def sharpest(v: Floats, a: int, b: int, c: int) -> float:
    """Returns the tangent of the smallest angle of triangle a b c: at its shortest side's opposite corner."""
    ab = 0.0
    bc = 0.0
    ca = 0.0
    for k in range(3):
        ab += (v[b, k] - v[a, k]) ** 2
        bc += (v[c, k] - v[b, k]) ** 2
        ca += (v[a, k] - v[c, k]) ** 2
    least = min(ab, bc, ca)
    x1, y1, z1 = v[b, 0] - v[a, 0], v[b, 1] - v[a, 1], v[b, 2] - v[a, 2]
    x2, y2, z2 = v[c, 0] - v[a, 0], v[c, 1] - v[a, 1], v[c, 2] - v[a, 2]
    x, y, z = y1 * z2 - z1 * y2, z1 * x2 - x1 * z2, x1 * y2 - y1 * x2
    # tan = area / dot of the two longer sides, whose dot is half the sum of their squares less the third
    return np.sqrt(x * x + y * y + z * z) / max(0.5 * (ab + bc + ca) - least, 1e-300)


@njit(cache=True, nogil=True, error_model="numpy")
def try_collapse(
    v: Floats, start: Ints, ring: Ints, halves: Ints, n_ring: int, at: int, angle: float, spare: float
) -> tuple[float, float]:
    """Returns the sharpest new corner (tangent, negative if not allowed) and how far vertex u leaves the surface.

    `ring[:n_ring]` are the neighbours of u in order and `halves` the half-edges to them; u would go to `ring[at]`.
    """
    u = start[halves[0]]
    goal = ring[at]
    best = 1e30
    away = 1e30
    for k in range(n_ring):
        a = ring[k]
        b = ring[(k + 1) % n_ring]
        if a == goal or b == goal:
            continue
        x1, y1, z1 = v[a, 0] - v[goal, 0], v[a, 1] - v[goal, 1], v[a, 2] - v[goal, 2]
        x2, y2, z2 = v[b, 0] - v[goal, 0], v[b, 1] - v[goal, 1], v[b, 2] - v[goal, 2]
        nx, ny, nz = y1 * z2 - z1 * y2, z1 * x2 - x1 * z2, x1 * y2 - y1 * x2
        x3, y3, z3 = v[a, 0] - v[u, 0], v[a, 1] - v[u, 1], v[a, 2] - v[u, 2]
        x4, y4, z4 = v[b, 0] - v[u, 0], v[b, 1] - v[u, 1], v[b, 2] - v[u, 2]
        ox, oy, oz = y3 * z4 - z3 * y4, z3 * x4 - x3 * z4, x3 * y4 - y3 * x4
        size2 = nx * nx + ny * ny + nz * nz
        turn = nx * ox + ny * oy + nz * oz
        if turn <= 0.0 or turn * turn < LEAST_COSINE * LEAST_COSINE * size2 * (ox * ox + oy * oy + oz * oz):
            return -1.0, 0.0
        best = min(best, sharpest(v, goal, a, b))
        if best < angle:
            return -1.0, 0.0
        px, py, pz = v[u, 0] - v[goal, 0], v[u, 1] - v[goal, 1], v[u, 2] - v[goal, 2]
        # is u above this triangle? shares of the corners a and b
        share_b = ((y1 * pz - z1 * py) * nx + (z1 * px - x1 * pz) * ny + (x1 * py - y1 * px) * nz) / size2
        share_a = ((py * z2 - pz * y2) * nx + (pz * x2 - px * z2) * ny + (px * y2 - py * x2) * nz) / size2
        if share_a >= -1e-3 and share_b >= -1e-3 and share_a + share_b <= 1.001:
            away = min(away, abs(px * nx + py * ny + pz * nz) / np.sqrt(size2))
    if away > spare:
        return -1.0, 0.0
    return best, away


@njit(cache=True, nogil=True)
def gather_ring(u: int, start: Ints, twin: Ints, out: Ints, ring: Ints, halves: Ints) -> int:
    """Writes the neighbours of vertex u in order, and the half-edges to them; returns how many, 0 when too many."""
    h = out[u]
    n = 0
    while True:
        if n == MOST_NEIGHBOURS:
            return 0
        base = h - h % 3
        ring[n] = start[base + (h + 1) % 3]
        halves[n] = h
        n += 1
        h = twin[base + (h + 2) % 3]
        if h == out[u]:
            return n


@njit(cache=True, nogil=True)
def join_vertices(h: int, start: Ints, twin: Ints, out: Ints, halves: Ints, n_ring: int) -> None:
    """Draws the start of half-edge h into its end; both triangles beside it go (their corners become -1)."""
    goal = start[h - h % 3 + (h + 1) % 3]
    for k in range(n_ring):
        start[halves[k]] = goal
    other = twin[h]
    for side in (h, other):
        base = side - side % 3
        one = base + (side + 1) % 3
        two = base + (side + 2) % 3
        apex = start[two]
        a, b = twin[one], twin[two]
        twin[a] = b
        twin[b] = a
        out[apex] = a if start[a] == apex else b
        out[goal] = b if start[a] == apex else a
    for side in (h, other):
        base = side - side % 3
        for k in range(3):
            start[base + k] = -1


@njit(cache=True, nogil=True)
def pair_edges(triangles: Ints, n_vertices: int, twin: Ints) -> bool:
    """Writes the opposite of each half-edge to `twin (3 m,)`; returns whether each has exactly one.

    Half-edges are gathered by the vertex they start from; the opposite of one starts where it ends.
    """
    first = np.zeros(n_vertices + 1, np.int64)
    m = len(triangles)
    for t in range(m):
        for k in range(3):
            first[triangles[t, k] + 1] += 1
    for i in range(n_vertices):
        first[i + 1] += first[i]
    free = first[:-1].copy()
    half = np.empty(3 * m, np.int64)
    goal = np.empty(3 * m, np.int64)
    for t in range(m):
        for k in range(3):
            at = free[triangles[t, k]]
            half[at] = 3 * t + k
            goal[at] = triangles[t, (k + 1) % 3]
            free[triangles[t, k]] = at + 1
    closed = m > 0
    for i in range(n_vertices):
        for q in range(first[i], first[i + 1]):
            j = goal[q]
            same = 0
            for p in range(first[i], first[i + 1]):
                same += goal[p] == j
            back = 0
            twin[half[q]] = -1
            for p in range(first[j], first[j + 1]):
                if goal[p] == i:
                    back += 1
                    twin[half[q]] = half[p]
            if same != 1 or back != 1 or i == j:
                closed = False
    return closed


@njit(cache=True, nogil=True, error_model="numpy")
def collapse_edges(
    first: int,
    last: int,
    vertices: Floats,
    start: Ints,
    twin: Ints,
    out: Ints,
    locked: NDArray[np.uint8],
    moved: Floats,
    tolerance_mm: float,
) -> int:
    """Tries the vertices first..last - 1 once, in order; returns how many were given up.

    `start (3 m,)` vertex of each corner, -1 where its triangle is gone; `twin (3 m,)`; `out (n,)` a half-edge from each
    vertex, -1 where it is gone; `locked (n,)` 1 for vertices to keep; `moved (n,)` how far the surface has
    moved around each, in mm. All are changed in place.
    """
    ring = np.empty(MOST_NEIGHBOURS, np.int64)
    halves = np.empty(MOST_NEIGHBOURS, np.int64)
    beside = np.empty(MOST_NEIGHBOURS, np.int64)
    unused = np.empty(MOST_NEIGHBOURS, np.int64)
    given_up = 0
    for u in range(first, last):
        if out[u] < 0 or locked[u]:
            continue
        n = gather_ring(u, start, twin, out, ring, halves)
        if n < 3:
            continue
        angle = LEAST_ANGLE_TANGENT
        for k in range(n):
            angle = min(angle, sharpest(vertices, u, ring[k], ring[(k + 1) % n]))
        spare = tolerance_mm - moved[u]
        best = -1
        widest = 0.0
        shift = 0.0
        for at in range(n):
            corner, away = try_collapse(vertices, start, ring, halves, n, at, angle, spare)
            if corner > widest:
                m = gather_ring(ring[at], start, twin, out, beside, unused)
                common = 0
                for i in range(m):
                    for j in range(n):
                        common += beside[i] == ring[j]
                if m < 3 or common != 2:
                    continue
                best, widest, shift = at, corner, away
        if best < 0:
            continue
        for k in range(n):
            moved[ring[k]] = max(moved[ring[k]], moved[u] + shift)
        join_vertices(halves[best], start, twin, out, halves, n)
        out[u] = -1
        given_up += 1
    return given_up
