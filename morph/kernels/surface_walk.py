"""Walking straight over a triangle mesh: the straightest line from a point, unfolded edge by edge.

Each walk is its own loop, so the bytes do not depend on threads. A walk stops where the mesh ends.
Method: straightest geodesics of Polthier and Schmies (1998) away from vertices (from memory); a walk that
meets a vertex goes through whichever of its triangles the rounding picks.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from morph.core.arrays import Floats, Ints

ARRIVED, AT_BORDER, LOST = 0, 1, 2


@njit(cache=True)
def _corner_shares(v: Floats, t: Ints, normal: Floats, px: float, py: float, pz: float, share: Floats) -> None:
    """Fills the three barycentric coordinates of (px, py, pz) in triangle t (3,), not scaled to sum 1."""
    for k in range(3):
        a, b = t[(k + 1) % 3], t[(k + 2) % 3]
        ex, ey, ez = v[b, 0] - v[a, 0], v[b, 1] - v[a, 1], v[b, 2] - v[a, 2]
        gx = normal[1] * ez - normal[2] * ey
        gy = normal[2] * ex - normal[0] * ez
        gz = normal[0] * ey - normal[1] * ex
        share[k] = (px - v[a, 0]) * gx + (py - v[a, 1]) * gy + (pz - v[a, 2]) * gz


@njit(cache=True)
def _turn_about_edge(v: Floats, a: int, b: int, here: Floats, there: Floats, p: Floats, d: Floats) -> None:
    """Moves p onto edge a-b and turns direction d from the plane with normal `here` into that of `there`, in place."""
    ex, ey, ez = v[b, 0] - v[a, 0], v[b, 1] - v[a, 1], v[b, 2] - v[a, 2]
    length = np.sqrt(ex * ex + ey * ey + ez * ez)
    if length > 0.0:
        ex, ey, ez = ex / length, ey / length, ez / length
    s = (p[0] - v[a, 0]) * ex + (p[1] - v[a, 1]) * ey + (p[2] - v[a, 2]) * ez
    s = min(max(s, 0.0), length)
    p[0], p[1], p[2] = v[a, 0] + s * ex, v[a, 1] + s * ey, v[a, 2] + s * ez
    along = d[0] * ex + d[1] * ey + d[2] * ez
    mx = ey * here[2] - ez * here[1]
    my = ez * here[0] - ex * here[2]
    mz = ex * here[1] - ey * here[0]
    across = d[0] * mx + d[1] * my + d[2] * mz
    nx = ey * there[2] - ez * there[1]
    ny = ez * there[0] - ex * there[2]
    nz = ex * there[1] - ey * there[0]
    d[0], d[1], d[2] = along * ex + across * nx, along * ey + across * ny, along * ez + across * nz
    size = np.sqrt(d[0] * d[0] + d[1] * d[1] + d[2] * d[2])
    if size > 0.0:
        d[0], d[1], d[2] = d[0] / size, d[1] / size, d[2] / size


@njit(cache=True)
def _into_plane(normal: Floats, d: Floats) -> bool:
    """Makes d a unit vector of the plane with `normal`, in place; False when nothing is left of it."""
    out = d[0] * normal[0] + d[1] * normal[1] + d[2] * normal[2]
    x, y, z = d[0] - out * normal[0], d[1] - out * normal[1], d[2] - out * normal[2]
    size = np.sqrt(x * x + y * y + z * z)
    if not size > 1e-300:
        return False
    d[0], d[1], d[2] = x / size, y / size, z / size
    return True


@njit(cache=True)
def _exit_edge(
    v: Floats, t: Ints, normal: Floats, came: int, p: Floats, d: Floats, share: Floats, rate: Floats
) -> tuple[int, float]:
    """Returns through which edge (opposite corner k) a walk leaves triangle t (3,), and after which way (mm)."""
    _corner_shares(v, t, normal, p[0], p[1], p[2], share)
    _corner_shares(v, t, normal, p[0] + d[0], p[1] + d[1], p[2] + d[2], rate)
    out, way = -1, np.inf
    for k in range(3):
        falling = share[k] - rate[k]
        if k != came and falling > 1e-14 * abs(share[0] + share[1] + share[2]):
            gone = max(share[k], 0.0) / falling
            if gone < way:
                out, way = k, gone
    return out, way


@njit(cache=True)
def walk_many(
    vertices: Floats,
    triangles: Ints,
    neighbour: Ints,
    normals: Floats,
    most_steps: int,
    triangle: Ints,
    point: Floats,
    direction: Floats,
    left: Floats,
    outcome: Ints,
) -> None:
    """Walks every point straight on, in place.

    Args:
        vertices: (n, 3) mm.
        triangles: (m, 3).
        neighbour: (m, 3) triangle across the edge opposite each corner, negative at a border.
        normals: (m, 3) unit, consistently oriented.
        most_steps: more edges than this count as lost.
        triangle: (k,) where each walk starts, becomes where it ends.
        point: (k, 3) likewise.
        direction: (k, 3) start direction of any length, becomes the unit direction on arrival.
        left: (k,) way to go in mm, becomes what was left when the walk stopped.
        outcome: (k,) becomes ARRIVED, AT_BORDER or LOST.
    """
    share, rate = np.empty(3), np.empty(3)
    for i in range(len(triangle)):
        f, way_left, came = triangle[i], left[i], -1
        p, d = point[i], direction[i]
        outcome[i] = ARRIVED
        if not way_left > 0.0 or not _into_plane(normals[f], d):
            left[i] = 0.0
            continue
        outcome[i] = LOST
        for _ in range(most_steps):
            out, way = _exit_edge(vertices, triangles[f], normals[f], came, p, d, share, rate)
            if out < 0 or way >= way_left:
                for c in range(3):
                    p[c] += d[c] * way_left
                way_left, outcome[i] = 0.0, ARRIVED
                break
            for c in range(3):
                p[c] += d[c] * way
            way_left -= way
            g = neighbour[f, out]
            if g < 0:
                outcome[i] = AT_BORDER
                break
            a, b = triangles[f, (out + 1) % 3], triangles[f, (out + 2) % 3]
            _turn_about_edge(vertices, a, b, normals[f], normals[g], p, d)
            came = 0
            for k in range(3):
                if triangles[g, k] != a and triangles[g, k] != b:
                    came = k
            f = g
        triangle[i], left[i] = f, way_left
