"""Flat patches of a surface: where it faces down flatter than an angle.

The angle is taken per triangle corner from the smooth normal there (creases kept), so that the
border of a flat patch runs through triangles and not along their edges: on a level round bore of
radius r the cap below angle a is 2 r sin(a) wide, however coarse the facets.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.geometry.mesh import Mesh, triangle_normals

CREASE_DEG = 30.0
"""Neighbouring triangles that turn by more meet in a crease; their normals are not averaged."""

SMOOTH_DEG = 20.0
"""Triangles farther than this from the angle asked for are flat, or not, at all three corners."""


@dataclass(frozen=True, slots=True, eq=False)
class FlatTriangles:
    """The triangles of a mesh that are flat at a corner, or border such.

    Args:
        triangle: (k,) triangle of the mesh. over_deg: (k, 3) angle less the limit at each corner; below 0 is flat.
    """

    triangle: Ints
    over_deg: Floats


def ceiling_angles_deg(normals: Floats, direction: Floats) -> Floats:
    """Returns the angle (k,) of wall normals (k, 3) into the channel: 0 level ceiling, 90 upright, 180 floor."""
    return np.asarray(np.degrees(np.arccos(np.clip(-(normals @ direction), -1.0, 1.0))), dtype=np.float64)


def _corner_angles(mesh: Mesh, triangle: Ints) -> Floats:
    """Returns the inner angles (k, 3) in rad of the triangles `triangle (k,)`."""
    corner = mesh.vertices_mm[mesh.triangles[triangle]]
    onward, back = np.roll(corner, -1, axis=1) - corner, np.roll(corner, 1, axis=1) - corner
    cross = np.linalg.norm(np.cross(onward, back), axis=2)
    return np.asarray(np.arctan2(cross, np.einsum("kij,kij->ki", onward, back)), dtype=np.float64)


def _corner_normals(mesh: Mesh, normals: Floats, near: Ints, asked: Bools) -> Floats:
    """Returns the smooth unit normals (k, 3, 3) at the corners of the triangles `near[asked]`.

    At each corner the normals of the triangles `near (n,)` around the vertex that turn less than
    CREASE_DEG from the triangle's own are added, weighted by their angle there: so that a facet
    counts the same however it is cut into triangles.
    """
    from scipy.sparse import coo_array

    around, mine = mesh.triangles[near].reshape(-1), np.flatnonzero(asked)
    at = (around, np.arange(len(around)) // 3)
    touching = coo_array((_corner_angles(mesh, near).reshape(-1), at), shape=(len(mesh.vertices_mm), len(near))).tocsr()
    flat = mesh.triangles[near[mine]].reshape(-1)
    start, count = touching.indptr[flat], np.diff(touching.indptr)[flat]
    corner = np.repeat(np.arange(len(flat)), count)
    entry = np.arange(int(count.sum())) - np.repeat(np.cumsum(count) - count, count) + np.repeat(start, count)
    theirs = near[touching.indices[entry]]
    own = np.repeat(near[mine], 3)
    turn = np.einsum("ij,ij->i", normals[own[corner]], normals[theirs])
    weight = np.where(turn > np.cos(np.radians(CREASE_DEG)), touching.data[entry], 0.0)
    total = np.stack([np.bincount(corner, weight * normals[theirs, axis], len(flat)) for axis in range(3)], axis=1)
    length = np.linalg.norm(total, axis=1)
    total = np.where(length[:, None] > 0.0, total / np.where(length > 0.0, length, 1.0)[:, None], normals[own])
    return np.asarray(total.reshape(-1, 3, 3), dtype=np.float64)


def find_flat(mesh: Mesh, direction: Floats, limit_deg: float) -> FlatTriangles:
    """Returns the triangles of `mesh` that face down flatter than `limit_deg`, wholly or in part.

    Args:
        mesh: triangles facing into the void under the ceiling.
        direction: (3,) unit, upwards.
        limit_deg: angle from the level.
    """
    normals, _ = triangle_normals(mesh)
    angle = ceiling_angles_deg(normals, direction)
    near = np.flatnonzero(angle < limit_deg + SMOOTH_DEG)
    over = np.repeat(angle[near, None] - limit_deg, 3, axis=1)
    asked = angle[near] > limit_deg - SMOOTH_DEG
    smooth = _corner_normals(mesh, normals, near, asked)
    over[asked] = ceiling_angles_deg(smooth.reshape(-1, 3), direction).reshape(-1, 3) - limit_deg
    kept = (over < 0.0).any(axis=1)
    return FlatTriangles(near[kept], over[kept])


def flat_area_mm2(mesh: Mesh, chosen: FlatTriangles) -> float:
    """Returns the area in mm2 of the flat parts of triangles, cut along their level lines."""
    corner, over = mesh.vertices_mm[mesh.triangles[chosen.triangle]], chosen.over_deg
    area = 0.5 * np.linalg.norm(np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]), axis=1)
    flat = over < 0.0
    count = flat.sum(axis=1)
    lone = np.argmax(flat == (count == 1)[:, None], axis=1)
    rows = np.arange(len(over))
    a, b, c = over[rows, lone], over[rows, (lone + 1) % 3], over[rows, (lone + 2) % 3]
    mixed = (count == 1) | (count == 2)
    tip = np.where(mixed, a * a / np.where(mixed, (a - b) * (a - c), 1.0), 0.0)
    share = np.choose(count, [np.zeros(len(over)), tip, 1.0 - tip, np.ones(len(over))])
    return float((share * area).sum())
