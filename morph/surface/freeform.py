"""A carrier on any surface: the sheet laid on the offset of the part face at depth, as a bicubic spline.

The grid at rest is carried back to the part face through the triangles the two surfaces share, put exactly at depth
below the fitted face, and joined by a spline. Point, normal, Jacobian and shape operator all come from that one
spline, so they agree to rounding; other depths follow its normals: J_d = J (I - (d - D) S) at the laid depth D.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, frozen_floats
from morph.geometry.surface import SignedSurface
from morph.surface.grid_spline import GridSpline

ROUNDS = 40
"""Newton rounds of `develop`; points near the surface take 4 or 5."""


@dataclass(frozen=True, slots=True, eq=False)
class FreeformCarrier:
    """The Carrier of a free-form part face.

    Args:
        spline: the sheet at `depth_mm`, over [0, width] x [0, height].
        face: the part face, signed positive in the metal.
        size_mm: width and height of the sheet.
        depth_mm: depth of the centrelines the sheet is laid for.
        turn: +1 when d/dx x d/dy points out of the metal (the drawing reads from the part), else -1.
        nodes_mm: (k, 2) the sheet places of the laid grid.
        first_filling: number of the first triangle of `face` that closes a hole; the ones before it are the user's.
    """

    spline: GridSpline
    face: SignedSurface
    size_mm: tuple[float, float]
    depth_mm: float
    turn: float
    nodes_mm: Floats
    first_filling: int

    def __post_init__(self) -> None:
        object.__setattr__(self, "nodes_mm", frozen_floats("nodes_mm", self.nodes_mm, (None, 2)))

    @property
    def turn_mm(self) -> float:
        """Returns infinity: the map does not repeat along x."""
        return float("inf")

    def _inside(self, sheet_mm: Floats) -> tuple[Floats, Floats]:
        """Returns the nearest points of the sheet (k, 2) and how far off it the given ones lie (k, 2)."""
        near = np.clip(sheet_mm, 0.0, self.size_mm)
        return near, sheet_mm - near

    def _laid(self, sheet_mm: Floats) -> tuple[Floats, Floats]:
        """Returns the Jacobian (k, 3, 2) at the laid depth and the unit normal (k, 3) out of the metal."""
        laid = np.stack([self.spline.at(sheet_mm, 1, 0), self.spline.at(sheet_mm, 0, 1)], axis=2)
        away = self.turn * np.cross(laid[:, :, 0], laid[:, :, 1])
        return laid, away / np.linalg.norm(away, axis=1)[:, None]

    def _laid_shape(self, sheet_mm: Floats, laid: Floats, away: Floats) -> Floats:
        """Returns the shape operator (k, 2, 2) of the laid surface: d normal = J S."""
        second = [[self.spline.at(sheet_mm, 2 - a - b, a + b) for b in range(2)] for a in range(2)]
        bend = -np.stack([np.stack([(xx * away).sum(axis=1) for xx in row], axis=1) for row in second], axis=1)
        return np.linalg.solve(np.einsum("kxa,kxb->kab", laid, laid), bend)

    def point_mm(self, sheet_mm: Floats, depth_mm: float | Floats) -> Floats:
        """Returns the points (k, 3) that lie `depth_mm` (one number or (k,)) below the sheet points (k, 2).

        Off the sheet the map goes on straight.
        """
        near, off = self._inside(sheet_mm)
        laid, away = self._laid(near)
        deeper = np.broadcast_to(np.asarray(depth_mm - self.depth_mm, dtype=np.float64), (len(near),))
        point = self.spline.at(near) - deeper[:, None] * away
        if off.any():
            point = point + np.einsum("kxa,ka->kx", self._moved(near, laid, away, deeper), off)
        return np.asarray(point, dtype=np.float64)

    def _moved(self, near: Floats, laid: Floats, away: Floats, deeper: Floats) -> Floats:
        shape = self._laid_shape(near, laid, away)
        return np.asarray(laid @ (np.eye(2) - deeper[:, None, None] * shape), dtype=np.float64)

    def into_metal(self, sheet_mm: Floats) -> Floats:
        """Returns the unit vectors (k, 3) from the face into the metal."""
        return -self._laid(self._inside(sheet_mm)[0])[1]

    def jacobian(self, sheet_mm: Floats, depth_mm: float) -> Floats:
        """Returns d point / d (x, y) as (k, 3, 2), dimensionless, at `depth_mm`."""
        near, _ = self._inside(sheet_mm)
        laid, away = self._laid(near)
        return self._moved(near, laid, away, np.full(len(near), depth_mm - self.depth_mm))

    def shape_operator(self, sheet_mm: Floats) -> Floats:
        """Returns S as (k, 2, 2) in 1/mm with J_d = J (I - d S), J the Jacobian at the face."""
        near, _ = self._inside(sheet_mm)
        laid, away = self._laid(near)
        shape = self._laid_shape(near, laid, away)
        return np.asarray(np.linalg.solve(np.eye(2) + self.depth_mm * shape, shape), dtype=np.float64)

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the signed distance (k,) of points (k, 3) from the part face as given, positive in the metal."""
        return self.face.inside_mm(np.asarray(xyz_mm, dtype=np.float64))

    def over_filling(self, sheet_mm: Floats) -> Bools:
        """Returns which of the sheet points (k, 2) lie over a hole of the face, filled only to lay the sheet."""
        _, places = self.face.nearest(self.point_mm(sheet_mm, 0.0))
        return np.asarray(places.triangle >= self.first_filling, dtype=np.bool_)

    def develop(self, xyz_mm: Floats) -> Floats:
        """Returns sheet x, sheet y and depth (k, 3) of points (k, 3): the inverse of `point_mm`, by Newton's method.

        Started from the node of the grid nearest to the point along the normals; a point that lies past a focus has
        no place of its own and gets one that the method ends at.
        """
        from scipy.spatial import KDTree

        points = np.asarray(xyz_mm, dtype=np.float64)
        depths = self.depth_mm * np.array([0.0, 0.5, 1.0, 1.5])
        cloud = np.concatenate([self.point_mm(self.nodes_mm, float(depth)) for depth in depths])
        start = KDTree(cloud).query(points)[1]
        state = np.column_stack([self.nodes_mm[start % len(self.nodes_mm)], depths[start // len(self.nodes_mm)]])
        step_limit = np.array([*self.size_mm, self.depth_mm]) * 0.25
        for _ in range(ROUNDS):
            sheet, depth = state[:, :2], state[:, 2]
            miss = self.point_mm(sheet, depth) - points
            near, _ = self._inside(sheet)
            laid, away = self._laid(near)
            slope = np.concatenate([self._moved(near, laid, away, depth - self.depth_mm), -away[:, :, None]], axis=2)
            step = np.linalg.solve(slope, miss[:, :, None])[:, :, 0]
            state = state - np.clip(step, -step_limit, step_limit)
            if np.abs(step).max() < 1e-11:
                break
        return np.asarray(state, dtype=np.float64)
