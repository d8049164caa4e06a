"""What a channel must keep clear of: a face of the finished blank, or a hole; both with exact distances."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from morph.body.face import Face
from morph.body.hole import Hole, distance_to_hole_mm
from morph.core.arrays import Floats


class Obstacle(Protocol):
    """A neighbour of the channels with exact distances."""

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3) from it, positive in the metal."""

    def nearest_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the points (k, 3) on it nearest to points (k, 3)."""


@dataclass(frozen=True, slots=True)
class FaceObstacle:
    """A face of the finished blank."""

    face: Face

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3) from the finished face, positive in the metal."""
        return self.face.distance_mm(xyz_mm)

    def nearest_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the points (k, 3) of the face nearest to points (k, 3)."""
        return xyz_mm + self.face.distance_mm(xyz_mm)[:, None] * self.face.outward(xyz_mm)


@dataclass(frozen=True, slots=True)
class HoleObstacle:
    """A flat-ended round hole."""

    hole: Hole

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3) from the hole, negative inside it."""
        return distance_to_hole_mm(self.hole, xyz_mm)

    def nearest_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the points (k, 3) of the hole nearest to points (k, 3); a point inside is its own nearest."""
        offset = xyz_mm - self.hole.start_mm
        along = offset @ self.hole.axis
        radial = offset - along[:, None] * self.hole.axis
        out = np.linalg.norm(radial, axis=1)
        shrink = np.minimum(1.0, 0.5 * self.hole.diameter_mm / np.where(out > 0.0, out, 1.0))
        kept = np.clip(along, 0.0, self.hole.length_mm)
        return np.asarray(self.hole.start_mm + kept[:, None] * self.hole.axis + radial * shrink[:, None])
