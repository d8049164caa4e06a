"""Looking for a better place for a free-form sheet: other anchors and headings within a stated range.

Every candidate is laid and tested like the job's own; the one with the least worst length error is proposed. A
proposal is told, never taken silently: it comes back as the settings to write into the job.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import GeometryError
from morph.core.progress import SILENT, Progress
from morph.geometry.mesh import Mesh
from morph.geometry.surface import make_signed, make_surface, walk
from morph.settings.job import FreeformSettings, SeenFrom
from morph.surface.distortion import measure_maps
from morph.surface.guide import make_guide
from morph.surface.lay import make_freeform

SHIFTS = ((0.0, 0.0), (1.0, 0.0), (-1.0, 0.0), (0.0, 1.0), (0.0, -1.0))
"""Anchor offsets tried, in units of the range along sheet x and y."""
TURNS = (0.0, 1.0, -1.0)
"""Headings tried, in units of the range, counter-clockwise seen from the part."""


@dataclass(frozen=True, slots=True)
class Placement:
    """Where a sheet was tried.

    Args:
        anchor_mm: the sheet's centre on the face.
        up: direction of sheet y there.
        shift_mm: how far that is from the job's own anchor, along its sheet x and y.
        turn_deg: how far it is turned from the job's own heading.
        length_error_max: worst length error, None when the sheet cannot lie there.
        refusal: the code of the fault when it cannot, else "".
    """

    anchor_mm: tuple[float, float, float]
    up: tuple[float, float, float]
    shift_mm: tuple[float, float]
    turn_deg: float
    length_error_max: float | None
    refusal: str = ""


@dataclass(frozen=True, slots=True)
class Search:
    """All placements tried, the job's own first."""

    tried: tuple[Placement, ...]

    @property
    def best(self) -> Placement | None:
        """Returns the placement with the least worst length error, of equals the one tried first; None if none lies."""
        laid = [place for place in self.tried if place.length_error_max is not None]
        return min(laid, key=lambda place: place.length_error_max or 0.0) if laid else None


def search_placement(
    settings: FreeformSettings,
    mesh: Mesh,
    size_mm: tuple[float, float],
    seen_from: SeenFrom,
    depth_mm: float,
    shift_mm: float,
    turn_deg: float,
    progress: Progress = SILENT,
) -> Search:
    """Returns what the sheet would be at other anchors and headings.

    Args:
        settings: the [carrier] table.
        mesh: the part face in mm.
        size_mm: width and height of the sheet.
        seen_from: from which side the drawing reads.
        depth_mm: depth of the centrelines.
        shift_mm: how far the anchor may move along the face.
        turn_deg: how far the sheet may be turned.
        progress: told after every placement.

    Raises:
        GeometryError: what make_guide raises for the job's own anchor.
    """
    guide = make_guide(mesh, settings, size_mm, depth_mm)
    face = make_signed(make_surface(guide.face.mesh, guide.face.adjacency))
    tried = []
    for shift in SHIFTS:
        way = shift_mm * (shift[0] * guide.x + shift[1] * guide.y)
        places, _, outcome = walk(guide.face, guide.anchor, way[None])
        if outcome[0] != 0:
            continue
        normal = face.surface.normals[places.triangle[0]]
        for turn in TURNS:
            up = _turned(guide.y, normal, np.radians(turn * turn_deg))
            tried.append(
                _try(
                    replace(settings, anchor_mm=_triple(places.xyz_mm[0]), up=_triple(up)),
                    mesh,
                    size_mm,
                    seen_from,
                    depth_mm,
                    (shift[0] * shift_mm, shift[1] * shift_mm),
                    turn * turn_deg,
                )
            )
            progress.step("search placement", len(tried), len(SHIFTS) * len(TURNS))
    return Search(tuple(tried))


def _triple(row: Floats) -> tuple[float, float, float]:
    return (float(row[0]), float(row[1]), float(row[2]))


def _turned(up: Floats, normal: Floats, angle_rad: float) -> Floats:
    """Returns `up` laid along the face and turned about its normal, counter-clockwise seen from outside."""
    along = up - (up @ normal) * normal
    along /= max(float(np.linalg.norm(along)), 1e-300)
    return np.asarray(np.cos(angle_rad) * along + np.sin(angle_rad) * np.cross(normal, along), dtype=np.float64)


def _try(
    settings: FreeformSettings,
    mesh: Mesh,
    size_mm: tuple[float, float],
    seen_from: SeenFrom,
    depth_mm: float,
    shift_mm: tuple[float, float],
    turn_deg: float,
) -> Placement:
    error, refusal = None, ""
    try:
        sheet = make_freeform(settings, mesh, size_mm, seen_from, depth_mm)
        error = measure_maps(sheet.carrier, size_mm, depth_mm).length_error_max
    except GeometryError as fault:
        refusal = fault.code
    return Placement(settings.anchor_mm, settings.up, shift_mm, turn_deg, error, refusal)
