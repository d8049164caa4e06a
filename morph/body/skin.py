"""The skin of a mesh blank: its triangles in named regions, with signed distances to each of them.

Distances are exact to the triangles (geometry/tree.py). The sign is that of the whole body: a point is in the
metal when it lies behind the angle-weighted normal at its nearest skin point (Baerentzen and Aanaes, "Signed
distance computation using the angle weighted pseudonormal", IEEE Transactions on Visualization and
Computer Graphics 11, 2005); where that is a close call, because slivers have no trustworthy normal, the first
skin met on three rays decides. The last answers are kept, because every face is asked for distance and normal.
"""

from __future__ import annotations

import hashlib
from collections import OrderedDict
from dataclasses import dataclass
from functools import lru_cache
from typing import TypeVar

import numpy as np

from morph.core.arrays import Bools, Floats, Ints, frozen_ints, unit_rows
from morph.geometry.mesh import Mesh, triangle_normals
from morph.geometry.tree import TriangleTree, cast_rays, closest_points, make_tree

ON_SKIN_MM = 0.01
"""Points this near to the skin count as in the metal: a flat face is flat to half of this, and rounding is below it."""

AT_EDGE = 1e-7
"""A nearest point with a barycentric coordinate below this lies on an edge."""

CLOSE_CALL = 0.3
"""Cosine between the way from the skin and its normal below which rays decide."""

KEPT_ANSWERS = 12
RAYS = unit_rows(np.array([[0.5377, 0.7213, 0.4363], [-0.8112, 0.3157, 0.4921], [0.1934, -0.6127, -0.7663]]))
"""Three directions along no edge of anything drawn by hand."""

Value = TypeVar("Value")
Key = tuple[int, bytes]
WHOLE = -1
Nearest = tuple[Floats, Ints, Floats]
"""Distance (k,), triangle (k,) of the skin, and the nearest point (k, 3)."""


@dataclass(frozen=True, slots=True, eq=False)
class Skin:
    """A closed mesh facing outwards, each triangle in a named region.

    Args:
        mesh: the finished body.
        region: (m,) index into `names` of each triangle; every region has at least one.
        names: of the regions.
    """

    mesh: Mesh
    region: Ints
    names: tuple[str, ...]

    def __post_init__(self) -> None:
        n = len(self.mesh.triangles)
        object.__setattr__(self, "region", frozen_ints("region", self.region, (n,), below=len(self.names)))

    def nearest(self, region: int, xyz_mm: Floats) -> Nearest:
        """Returns the nearest point of a region (WHOLE: of the skin) to each of points (k, 3)."""
        return _answers(self).nearest(region, xyz_mm)

    def in_metal(self, xyz_mm: Floats) -> Bools:
        """Returns which of points (k, 3) lie in the metal or within ON_SKIN_MM of the skin."""
        return _answers(self).in_metal(xyz_mm)

    def crossings(self, region: int, start_mm: Floats, axis: Floats) -> list[float]:
        """Returns where the line from `start_mm (3,)` along unit `axis (3,)` meets a region, in mm along it."""
        return _answers(self).crossings(region, start_mm, axis)


class _Answers:
    """The trees of a skin, its pseudonormals, and the last answers."""

    def __init__(self, skin: Skin) -> None:
        mesh = skin.mesh
        self._rows = {WHOLE: np.arange(len(mesh.triangles))}
        self._trees: dict[int, TriangleTree] = {WHOLE: make_tree(mesh)}
        for k in range(len(skin.names)):
            self._rows[k] = np.flatnonzero(skin.region == k)
            self._trees[k] = make_tree(Mesh(mesh.vertices_mm, mesh.triangles[self._rows[k]]))
        self._corners = mesh.vertices_mm[mesh.triangles]
        self._normals = triangle_normals(mesh)[0]
        self._edge_normals = _edge_normals(mesh, self._normals)
        self._vertex_normals = _vertex_normals(mesh, self._normals)[mesh.triangles]
        self._size = float(np.ptp(mesh.vertices_mm, axis=0).max())
        self._nearest: OrderedDict[Key, Nearest] = OrderedDict()
        self._inside: OrderedDict[Key, Bools] = OrderedDict()

    def nearest(self, region: int, xyz_mm: Floats) -> Nearest:
        key = (region, _digest(xyz_mm))
        if key not in self._nearest:
            distance, triangle, point = closest_points(self._trees[region], xyz_mm)
            _keep(self._nearest, key, (distance, self._rows[region][triangle], point))
        return self._nearest[key]

    def in_metal(self, xyz_mm: Floats) -> Bools:
        key = (WHOLE, _digest(xyz_mm))
        if key not in self._inside:
            distance, triangle, point = self.nearest(WHOLE, xyz_mm)
            away = xyz_mm - point
            safe = np.where(distance > 0.0, distance, 1.0)
            cosine = np.einsum("ij,ij->i", away, self._pseudonormals(triangle, point)) / safe
            inside = cosine < 0.0
            unsure = (np.abs(cosine) < CLOSE_CALL) & (distance > ON_SKIN_MM)
            if unsure.any():
                inside[unsure] = self._in_metal_by_rays(xyz_mm[unsure])
            _keep(self._inside, key, inside | (distance <= ON_SKIN_MM))
        return self._inside[key]

    def _pseudonormals(self, triangle: Ints, point: Floats) -> Floats:
        """Returns the unit normals (k, 3) of the face, edge or vertex on which points (k, 3) of triangles (k,) lie."""
        a, b, c = (self._corners[triangle, k] for k in range(3))
        cross = [np.cross(two - point, one - point) for one, two in ((c, b), (a, c), (b, a))]
        share = np.stack([np.linalg.norm(row, axis=1) for row in cross], axis=1)  # opposite a, b, c
        total = share.sum(axis=1)
        share = share / np.where(total > 0.0, total, 1.0)[:, None]
        low = share < AT_EDGE
        normal = self._normals[triangle].copy()
        # on the edge opposite corner k: side k + 1 of the triangle
        for k in range(3):
            on = low[:, k]
            normal[on] = self._edge_normals[triangle[on], (k + 1) % 3]
        for k in range(3):
            on = share[:, k] > 1.0 - 2.0 * AT_EDGE
            normal[on] = self._vertex_normals[triangle[on], k]
        return normal

    def _in_metal_by_rays(self, xyz_mm: Floats) -> Bools:
        votes = np.zeros(len(xyz_mm), np.int64)
        for ray in RAYS:
            _, triangle = cast_rays(self._trees[WHOLE], xyz_mm, np.broadcast_to(ray, xyz_mm.shape))
            votes += (triangle >= 0) & (self._normals[triangle] @ ray > 0.0)
        return np.asarray(2 * votes > len(RAYS), dtype=np.bool_)

    def crossings(self, region: int, start_mm: Floats, axis: Floats) -> list[float]:
        middle = self._corners.reshape(-1, 3).mean(axis=0)
        first = float((middle - start_mm) @ axis) - 2.0 * self._size - 1.0
        found: list[float] = []
        at = first
        while True:
            origin = (start_mm + at * axis)[None, :]
            distance, triangle = cast_rays(self._trees[region], origin, axis[None, :], 1e-6)
            if triangle[0] < 0:
                return found
            at += float(distance[0])
            found.append(at)


@lru_cache(maxsize=4)
def _answers(skin: Skin) -> _Answers:
    return _Answers(skin)


def _digest(xyz_mm: Floats) -> bytes:
    return hashlib.blake2b(np.ascontiguousarray(xyz_mm).tobytes(), digest_size=16).digest()


def _keep(kept: OrderedDict[Key, Value], key: Key, value: Value) -> None:
    kept[key] = value
    while len(kept) > KEPT_ANSWERS:
        kept.popitem(last=False)


def _edge_normals(mesh: Mesh, normals: Floats) -> Floats:
    """Returns the mean unit normal (m, 3, 3) of the two triangles at each side, side k from corner k to the next."""
    m = len(mesh.triangles)
    start, end = mesh.triangles.T.reshape(-1), np.roll(mesh.triangles, -1, axis=1).T.reshape(-1)
    n = len(mesh.vertices_mm)
    key, back = start * n + end, end * n + start
    order = np.argsort(key, kind="stable")
    twin = order[np.searchsorted(key[order], back)]
    side = np.arange(3 * m)
    both = normals[side % m] + normals[twin % m]
    return np.ascontiguousarray(unit_rows(both).reshape(3, m, 3).transpose(1, 0, 2))


def _vertex_normals(mesh: Mesh, normals: Floats) -> Floats:
    """Returns the unit normals (n, 3) of the vertices, each triangle weighted by its angle there."""
    corner = mesh.vertices_mm[mesh.triangles]
    total = np.zeros((len(mesh.vertices_mm), 3))
    for k in range(3):
        one = unit_rows(corner[:, (k + 1) % 3] - corner[:, k])
        two = unit_rows(corner[:, (k + 2) % 3] - corner[:, k])
        angle = np.arccos(np.clip(np.einsum("ij,ij->i", one, two), -1.0, 1.0))
        for axis in range(3):
            total[:, axis] += np.bincount(mesh.triangles[:, k], angle * normals[:, axis], len(total))
    return unit_rows(total)
