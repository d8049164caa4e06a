"""By how much a channel of a given bore keeps clear of faces and holes: its spare, without solving for a bore.

Spare is the distance less band, wall and how far the section reaches that way (see section.py); below 0 the
bore does not fit. It asks the same walls as room.py, at a fraction of the time, for many places at once.
"""

from __future__ import annotations

import numpy as np

from morph.body.blank import Blank
from morph.body.face import Face
from morph.body.hole import Hole
from morph.body.room import Limits, face_wall_mm
from morph.body.section import reach_mm
from morph.core.arrays import Bools, Floats
from morph.settings.job import SectionShape

ON_AXIS_MM = 1e-9
"""Points this near to a hole's axis have no direction to it."""


def face_spare_mm(face: Face, xyz_mm: Floats, bore_mm: Floats, limits: Limits) -> Floats:
    """Returns the spare (k,) of bores (k,) at points (k, 3) to `face`."""
    wall = face_wall_mm(face, bore_mm, limits) + limits.band_mm
    reach = reach_mm(bore_mm, face.outward(xyz_mm), limits.section)
    return np.asarray(face.distance_mm(xyz_mm) - wall - reach, dtype=np.float64)


def hole_spare_mm(hole: Hole, xyz_mm: Floats, bore_mm: Floats, limits: Limits) -> Floats:
    """Returns the spare (k,) of bores (k,) at points (k, 3) to `hole`."""
    wall = max(hole.wall_mm, limits.process_mm) + limits.band_mm
    offset = xyz_mm - hole.start_mm
    along = offset @ hole.axis
    radial = offset - along[:, None] * hole.axis
    out = np.sqrt(np.einsum("ij,ij->i", radial, radial))
    aside = out - 0.5 * hole.diameter_mm
    beyond = np.maximum(-along, along - hole.length_mm)
    distance = np.hypot(np.maximum(aside, 0.0), np.maximum(beyond, 0.0)) + np.minimum(np.maximum(aside, beyond), 0.0)
    if limits.section.shape is SectionShape.ROUND:
        return np.asarray(distance - wall - 0.5 * bore_mm, dtype=np.float64)
    toward = -radial * (np.maximum(aside, 0.0) / np.maximum(out, ON_AXIS_MM))[:, None]
    toward -= (along - np.clip(along, 0.0, hole.length_mm))[:, None] * hole.axis
    toward /= np.maximum(distance, ON_AXIS_MM)[:, None]
    return np.asarray(distance - wall - reach_mm(bore_mm, toward, limits.section), dtype=np.float64)


def least_spare_mm(
    blank: Blank, limits: Limits, xyz_mm: Floats, bore_mm: Floats, open_face: str, opening: Bools
) -> Floats:
    """Returns the least spare (k,) of bores (k,) at points (k, 3) to faces and holes.

    Args:
        blank: faces and holes.
        limits: walls and bands.
        xyz_mm: (k, 3).
        bore_mm: (k,).
        open_face: face through which the channel comes out.
        opening: (k,) where it is on its way out; there that face does not count.
    """
    least = np.full(len(xyz_mm), np.inf)
    for face in blank.faces:
        spare = face_spare_mm(face, xyz_mm, bore_mm, limits)
        least = np.minimum(least, np.where(opening, np.inf, spare) if face.name == open_face else spare)
    for hole in blank.holes:
        least = np.minimum(least, hole_spare_mm(hole, xyz_mm, bore_mm, limits))
    return least
