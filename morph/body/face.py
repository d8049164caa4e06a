"""Faces of a finished blank: planes, cylinders and cones with a name, a role and exact signed distances.

Inside a convex body the least distance over its faces is the distance to its surface; for a bore
cut through it the nearest point lies at the same height, so the same holds. For a conical bore the
nearest point of the endless cone may lie past the end of the body: the least distance is then below
the true one, never above. Later bodies (mesh, free-form) bring their own kind of face with the same
methods.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import Protocol

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.geometry.cone import Cone


class FaceRole(StrEnum):
    """Part faces are never opened; port faces may be; other faces are outer faces."""

    PART = "part"
    PORT = "port"
    OUTER = "outer"


class Face(Protocol):
    """What every face of a finished blank offers."""

    @property
    def name(self) -> str:
        """The face's name in jobs and messages."""

    @property
    def role(self) -> FaceRole:
        """What the face is for."""

    @property
    def stock_mm(self) -> float:
        """Machining stock on this face as printed."""

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3) from the face, positive in the metal."""

    def outward(self, xyz_mm: Floats) -> Floats:
        """Returns the unit normals (k, 3) out of the metal at the face points nearest to the points (k, 3)."""


@dataclass(frozen=True, slots=True, eq=False)
class PlaneFace:
    """A flat face through `origin_mm (3,)` with unit normal `normal (3,)` out of the metal."""

    name: str
    role: FaceRole
    stock_mm: float
    origin_mm: Floats
    normal: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "origin_mm", frozen_floats("origin_mm", self.origin_mm, (3,)))
        object.__setattr__(self, "normal", frozen_floats("normal", self.normal, (3,)))

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3), positive in the metal."""
        return np.asarray((self.origin_mm - xyz_mm) @ self.normal, dtype=np.float64)

    def outward(self, xyz_mm: Floats) -> Floats:
        """Returns the face normal for each of the points (k, 3)."""
        return np.broadcast_to(self.normal, np.shape(xyz_mm)).copy()


@dataclass(frozen=True, slots=True, eq=False)
class CylinderFace:
    """A round face of `radius_mm` about the z axis; `metal_inside` tells on which side the metal lies."""

    name: str
    role: FaceRole
    stock_mm: float
    radius_mm: float
    metal_inside: bool

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3), positive in the metal."""
        gap = self.radius_mm - np.hypot(xyz_mm[:, 0], xyz_mm[:, 1])
        return np.asarray(gap if self.metal_inside else -gap, dtype=np.float64)

    def outward(self, xyz_mm: Floats) -> Floats:
        """Returns the radial unit vectors (k, 3) out of the metal; on the axis itself +x."""
        radial = np.column_stack([xyz_mm[:, 0], xyz_mm[:, 1], np.zeros(len(xyz_mm))])
        length = np.linalg.norm(radial, axis=1)
        radial[length == 0.0] = (1.0, 0.0, 0.0)
        radial /= np.where(length > 0.0, length, 1.0)[:, None]
        return radial if self.metal_inside else -radial


@dataclass(frozen=True, slots=True, eq=False)
class ConeFace:
    """A conical face about the z axis; `metal_inside` tells on which side the metal lies."""

    name: str
    role: FaceRole
    stock_mm: float
    cone: Cone
    metal_inside: bool

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3), positive in the metal."""
        outside = self.cone.outside_mm(xyz_mm)
        return np.asarray(-outside if self.metal_inside else outside, dtype=np.float64)

    def outward(self, xyz_mm: Floats) -> Floats:
        """Returns the unit normals (k, 3) out of the metal at the nearest points of the cone."""
        away = self.cone.outward(xyz_mm)
        return away if self.metal_inside else -away


BlankFace = PlaneFace | CylinderFace | ConeFace
"""Every kind of face a blank has."""
