"""The outline of a solid in a plane: what a saw cut through the written mesh would show.

Every mesh edge that crosses the plane gives one point, every triangle one piece of outline between
two of them. A vertex that lies on the plane counts as in front of it, so each closed mesh gives
closed loops, without exceptions for special positions.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints
from morph.geometry.mesh import Mesh


@dataclass(frozen=True, slots=True, eq=False)
class Plane:
    """A plane with axes: `origin_mm (3,)`, unit `across (3,)` and `up (3,)` as drawn; normal = across x up."""

    origin_mm: Floats
    across: Floats
    up: Floats

    def __post_init__(self) -> None:
        for name in ("origin_mm", "across", "up"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (3,)))

    @property
    def normal(self) -> Floats:
        """The unit normal, towards the viewer."""
        return np.cross(self.across, self.up)

    def flat_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the drawing coordinates (k, 2) of points (k, 3)."""
        offset = np.asarray(xyz_mm, dtype=np.float64).reshape(-1, 3) - self.origin_mm
        return np.column_stack([np.einsum("ij,j->i", offset, self.across), np.einsum("ij,j->i", offset, self.up)])

    def space_mm(self, flat_mm: Floats) -> Floats:
        """Returns the points (k, 3) of drawing coordinates (k, 2)."""
        flat = np.asarray(flat_mm, dtype=np.float64).reshape(-1, 2)
        return np.asarray(self.origin_mm + flat[:, :1] * self.across + flat[:, 1:] * self.up, dtype=np.float64)


@dataclass(frozen=True, slots=True, eq=False)
class Loop:
    """A closed outline: `points_mm (k, 2)` in drawing coordinates, `label (k,)` of the piece from each to the next."""

    points_mm: Floats
    label: Ints

    def __post_init__(self) -> None:
        points = frozen_floats("points_mm", self.points_mm, (None, 2))
        object.__setattr__(self, "points_mm", points)
        object.__setattr__(self, "label", frozen_ints("label", self.label, (len(points),)))


def cut_mesh(mesh: Mesh, label: Ints, plane: Plane) -> tuple[Loop, ...]:
    """Returns the closed outlines of `mesh` in `plane`, the longest first.

    Args:
        mesh: a closed mesh.
        label: (m,) a number per triangle, handed on to its piece of outline.
        plane: where to cut.
    """
    height = np.einsum("ij,j->i", mesh.vertices_mm - plane.origin_mm, plane.normal)
    front = height >= 0.0
    n_front = front[mesh.triangles].sum(axis=1)
    crossed = np.flatnonzero((n_front == 1) | (n_front == 2))
    triangles = mesh.triangles[crossed]
    edge = np.stack([triangles, np.roll(triangles, -1, axis=1)], axis=2)
    splits = front[edge[:, :, 0]] != front[edge[:, :, 1]]
    ends = np.sort(edge[splits].reshape(-1, 2, 2), axis=2)
    key, point = np.unique(ends.reshape(-1, 2), axis=0, return_inverse=True)
    a, b = key[:, 0], key[:, 1]
    t = (height[a] / (height[a] - height[b]))[:, None]
    flat = plane.flat_mm((1.0 - t) * mesh.vertices_mm[a] + t * mesh.vertices_mm[b])
    loops = _chained(point.reshape(-1, 2), flat, np.asarray(label)[crossed])
    return tuple(sorted(loops, key=lambda loop: -_length_mm(loop)))


def rod_mesh(start_mm: Floats, axis: Floats, length_mm: float, diameter_mm: float, sides: int = 96) -> Mesh:
    """Returns a closed rod from `start_mm (3,)` along unit `axis (3,)`, as a prism of `sides` sides on its circle."""
    least = np.eye(3)[int(np.argmin(np.abs(axis)))]
    across = np.cross(axis, least) / np.linalg.norm(np.cross(axis, least))
    angle = np.arange(sides) * (2.0 * np.pi / sides)
    rim = 0.5 * diameter_mm * (np.cos(angle)[:, None] * across + np.sin(angle)[:, None] * np.cross(axis, across))
    end = start_mm + length_mm * axis
    vertices = np.vstack([start_mm + rim, end + rim, [start_mm], [end]])
    i, j = np.arange(sides), (np.arange(sides) + 1) % sides
    low, high = np.full(sides, 2 * sides), np.full(sides, 2 * sides + 1)
    faces = [(i, j, sides + j), (i, sides + j, sides + i), (low, j, i), (high, sides + i, sides + j)]
    return Mesh(vertices, np.concatenate([np.column_stack(face) for face in faces]))


def _length_mm(loop: Loop) -> float:
    return float(np.linalg.norm(np.roll(loop.points_mm, -1, axis=0) - loop.points_mm, axis=1).sum())


def _chained(pieces: Ints, flat_mm: Floats, label: Ints) -> list[Loop]:
    """Returns the pieces (n, 2), which name points, joined end to end into loops."""
    beside: dict[int, list[int]] = {}
    for piece, (a, b) in enumerate(pieces.tolist()):
        beside.setdefault(a, []).append(piece)
        beside.setdefault(b, []).append(piece)
    used, loops, ends = np.zeros(len(pieces), dtype=bool), [], pieces.tolist()
    for first in range(len(pieces)):
        if used[first]:
            continue
        way, marks, piece, at = [], [], first, ends[first][0]
        while piece >= 0:
            used[piece] = True
            way.append(at)
            marks.append(int(label[piece]))
            a, b = ends[piece]
            at = b if at == a else a
            piece = next((other for other in beside[at] if not used[other]), -1)
        loops.append(Loop(flat_mm[way], np.array(marks, dtype=np.int64)))
    return loops
