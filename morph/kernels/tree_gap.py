"""The smallest gap between two surfaces: triangles of one against the tree of the other, edges included."""

from __future__ import annotations

import numpy as np
from numba import njit

from morph.core.arrays import Floats, Ints
from morph.kernels.tree_build import STACK
from morph.kernels.tree_walk import nearest_on_triangle


@njit(cache=True)
def _segment_gap(
    a: Floats, i: int, j: int, b: Floats, k: int, m: int
) -> tuple[float, float, float, float, float, float, float]:
    """Returns the squared gap of edges a[i]-a[j] and b[k]-b[m] and their nearest points (corner rows of 3)."""
    ux, uy, uz = a[3 * j] - a[3 * i], a[3 * j + 1] - a[3 * i + 1], a[3 * j + 2] - a[3 * i + 2]
    vx, vy, vz = b[3 * m] - b[3 * k], b[3 * m + 1] - b[3 * k + 1], b[3 * m + 2] - b[3 * k + 2]
    wx, wy, wz = a[3 * i] - b[3 * k], a[3 * i + 1] - b[3 * k + 1], a[3 * i + 2] - b[3 * k + 2]
    uu, uv, vv = ux * ux + uy * uy + uz * uz, ux * vx + uy * vy + uz * vz, vx * vx + vy * vy + vz * vz
    uw, vw = ux * wx + uy * wy + uz * wz, vx * wx + vy * wy + vz * wz
    den = uu * vv - uv * uv
    s = min(max((uv * vw - vv * uw) / den, 0.0), 1.0) if den > 1e-18 * uu * vv else 0.0
    t = min(max((uv * s + vw) / vv, 0.0), 1.0) if vv > 0.0 else 0.0
    s = min(max((uv * t - uw) / uu, 0.0), 1.0) if uu > 0.0 else 0.0
    px, py, pz = a[3 * i] + s * ux, a[3 * i + 1] + s * uy, a[3 * i + 2] + s * uz
    qx, qy, qz = b[3 * k] + t * vx, b[3 * k + 1] + t * vy, b[3 * k + 2] + t * vz
    return (px - qx) ** 2 + (py - qy) ** 2 + (pz - qz) ** 2, px, py, pz, qx, qy, qz


@njit(cache=True)
def _triangle_gap(a: Floats, b: Floats, best: float, pair: Floats) -> float:
    """Returns the smaller of `best` and the squared gap of triangles a, b (9,); writes the points to pair (6,)."""
    for c in range(3):
        x, y, z = a[3 * c], a[3 * c + 1], a[3 * c + 2]
        qx, qy, qz = nearest_on_triangle(b, x, y, z)
        gap = (qx - x) ** 2 + (qy - y) ** 2 + (qz - z) ** 2
        if gap < best:
            best = gap
            pair[0], pair[1], pair[2], pair[3], pair[4], pair[5] = x, y, z, qx, qy, qz
        x, y, z = b[3 * c], b[3 * c + 1], b[3 * c + 2]
        qx, qy, qz = nearest_on_triangle(a, x, y, z)
        gap = (qx - x) ** 2 + (qy - y) ** 2 + (qz - z) ** 2
        if gap < best:
            best = gap
            pair[0], pair[1], pair[2], pair[3], pair[4], pair[5] = qx, qy, qz, x, y, z
    for c in range(3):
        for d in range(3):
            gap, px, py, pz, qx, qy, qz = _segment_gap(a, c, (c + 1) % 3, b, d, (d + 1) % 3)
            if gap < best:
                best = gap
                pair[0], pair[1], pair[2], pair[3], pair[4], pair[5] = px, py, pz, qx, qy, qz
    return best


@njit(cache=True)
def smallest_gap(
    node_box: Floats, node_child: Ints, node_count: Ints, corners: Floats, queries: Floats, limit: float, pair: Floats
) -> float:
    """Returns the smallest gap between the tree and the triangles `queries (k, 9)`, inf when above `limit`.

    Crossing triangles have a gap of 0 only where an edge meets an edge or a corner a face; surfaces
    that cross are found by their centrelines first. `pair (6,)` gets the nearest points (query, tree).
    """
    stack = np.empty(STACK, np.int64)
    best = limit * limit
    found = False
    for i in range(len(queries)):
        q = queries[i]
        stack[0] = 0
        n_stack = 1
        while n_stack > 0:
            n_stack -= 1
            node = stack[n_stack]
            gap = 0.0
            for a in range(3):
                low, high = min(q[a], q[3 + a], q[6 + a]), max(q[a], q[3 + a], q[6 + a])
                side = max(node_box[node, a] - high, low - node_box[node, 3 + a], 0.0)
                gap += side * side
            if gap > best:
                continue
            if node_count[node] == 0:
                stack[n_stack] = node_child[node] + 1
                stack[n_stack + 1] = node_child[node]
                n_stack += 2
                continue
            for k in range(node_child[node], node_child[node] + node_count[node]):
                smaller = _triangle_gap(q, corners[k], best, pair)
                if smaller < best:
                    best = smaller
                    found = True
    return np.sqrt(best) if found else np.inf
