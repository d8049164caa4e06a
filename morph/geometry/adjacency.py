"""Which triangles meet at which edges, and what is wrong with the edges of a surface.

A surface may be open. Its triangles are consistently oriented when two that share an edge run along it
in opposite directions.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints, frozen_ints, unit_rows
from morph.geometry.mesh import Mesh, triangle_normals

BORDER = -1
"""Neighbour of an edge that has one triangle only."""


@dataclass(frozen=True, slots=True, eq=False)
class Adjacency:
    """Neighbours over edges.

    Args:
        neighbour: (m, 3) triangle across the edge opposite each corner, BORDER where there is none.
        crowded: (k, 2) vertex pairs of edges with more than two triangles.
        same_way: (k, 2) vertex pairs of edges along which two triangles run the same way.
    """

    neighbour: Ints
    crowded: Ints
    same_way: Ints

    def __post_init__(self) -> None:
        for name, width in (("neighbour", 3), ("crowded", 2), ("same_way", 2)):
            object.__setattr__(self, name, frozen_ints(name, getattr(self, name), (None, width)))


def make_adjacency(triangles: Ints) -> Adjacency:
    """Returns which triangles of `triangles (m, 3)` share edges; an edge with more than two has no neighbours."""
    m = len(triangles)
    half = np.concatenate([triangles[:, [1, 2]], triangles[:, [2, 0]], triangles[:, [0, 1]]])
    owner = np.tile(np.arange(m, dtype=np.int64), 3)
    key = half.min(axis=1) * (int(triangles.max()) + 1 if m else 1) + half.max(axis=1)
    order = np.argsort(key, kind="stable")
    key = key[order]
    first = np.flatnonzero(np.r_[True, key[1:] != key[:-1]]) if m else np.zeros(0, np.int64)
    count = np.diff(np.r_[first, len(order)])
    pair = first[count == 2]
    one, two = order[pair], order[pair + 1]
    flat = np.full(3 * m, BORDER, dtype=np.int64)
    flat[one], flat[two] = owner[two], owner[one]
    crowded = half[order[first[count > 2]]]
    same_way = half[one[half[one, 0] == half[two, 0]]]
    return Adjacency(np.ascontiguousarray(flat.reshape(3, m).T), np.sort(crowded, axis=1), np.sort(same_way, axis=1))


def vertex_normals(mesh: Mesh) -> Floats:
    """Returns the unit normals (n, 3) of the vertices, triangle normals weighted by their angle there.

    The weight makes the normal independent of how the surface is cut into triangles (Thuermer and Wuethrich 1998)
    and its sign tells inside from outside (Baerentzen and Aanaes 2005). An unused vertex has normal 0.
    """
    normals, _ = triangle_normals(mesh)
    corner = mesh.vertices_mm[mesh.triangles]
    total = np.zeros_like(mesh.vertices_mm)
    for k in range(3):
        one = unit_rows(corner[:, (k + 1) % 3] - corner[:, k])
        two = unit_rows(corner[:, (k + 2) % 3] - corner[:, k])
        angle = 2.0 * np.arctan2(np.linalg.norm(one - two, axis=1), np.linalg.norm(one + two, axis=1))
        for c in range(3):
            total[:, c] += np.bincount(mesh.triangles[:, k], angle * normals[:, c], len(total))
    return unit_rows(total)


def border_loops(triangles: Ints, adjacency: Adjacency) -> list[Ints]:
    """Returns the borders as loops of vertices (each (k,)), in the direction of their triangles, longest list first.

    A vertex where two borders meet splits them in the order of its triangles.
    """
    triangle, corner = np.nonzero(adjacency.neighbour == BORDER)
    start = triangles[triangle, (corner + 1) % 3]
    end = triangles[triangle, (corner + 2) % 3]
    following: dict[int, list[int]] = {}
    for k in np.lexsort((end, start))[::-1].tolist():
        following.setdefault(int(start[k]), []).append(k)
    used = np.zeros(len(start), dtype=np.bool_)
    loops: list[Ints] = []
    for first in np.lexsort((end, start)).tolist():
        if used[first]:
            continue
        loop, k = [], first
        while True:
            used[k] = True
            loop.append(int(start[k]))
            options = [j for j in following.get(int(end[k]), []) if not used[j]]
            if not options:
                break
            k = options[-1]
        loops.append(np.array(loop, dtype=np.int64))
    return sorted(loops, key=lambda loop: (-len(loop), int(loop.min())))
