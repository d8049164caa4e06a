"""The carrier as a face of the body: exact for cylinders and cones, by its own distance for any other surface."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from morph.body.face import ConeFace, CylinderFace, FaceRole
from morph.body.shape import Round, face_of
from morph.core.arrays import Floats, unit_rows
from morph.geometry.cone import Cone
from morph.surface.carrier import Carrier
from morph.surface.make import RoundCarrier

STEP_MM = 1e-3
"""Half the distance over which a normal is read off the distance: well above rounding, well below any radius."""


class LaidCarrier(Carrier, Protocol):
    """A carrier that knows the depth its sheet is laid for."""

    @property
    def depth_mm(self) -> float:
        """Depth of the sheet below the face."""


@dataclass(frozen=True, slots=True, eq=False)
class CarrierFace:
    """The surface of any carrier as a face; normals are the slope of its distance."""

    name: str
    role: FaceRole
    stock_mm: float
    carrier: Carrier

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3), positive in the metal."""
        return self.carrier.distance_mm(xyz_mm)

    def outward(self, xyz_mm: Floats) -> Floats:
        """Returns the unit vectors (k, 3) along which the points (k, 3) leave the metal fastest."""
        steps = STEP_MM * np.eye(3)
        falls = [self.carrier.distance_mm(xyz_mm - step) - self.carrier.distance_mm(xyz_mm + step) for step in steps]
        return unit_rows(np.column_stack(falls))


def round_face(item: Round) -> CylinderFace | ConeFace:
    """Returns the face on a round surface, without a role."""
    if isinstance(item.surface, Cone):
        return ConeFace(item.name, FaceRole.OUTER, 0.0, item.surface, item.metal_inside)
    return CylinderFace(item.name, FaceRole.OUTER, 0.0, item.surface, item.metal_inside)


def carrier_face(carrier: Carrier) -> CylinderFace | ConeFace | CarrierFace:
    """Returns the surface of a carrier as the face `carrier`, without edges and without a role."""
    if isinstance(carrier, RoundCarrier):
        return round_face(face_of(carrier))
    return CarrierFace("carrier", FaceRole.OUTER, 0.0, carrier)
