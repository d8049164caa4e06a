"""The blank as a closed mesh, finished or with its machining stock.

Round faces become prisms with so many sides that the sagitta stays below FACET_MM; the corners are
moved out so that the prism has the cylinder's cross-section area. The radius is thus kept on average:
volumes are exact, and no wall is off by more than two thirds of FACET_MM.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from morph.body.blank import Blank
from morph.body.face import CylinderFace, PlaneFace
from morph.core.arrays import Floats
from morph.core.tolerance import COINCIDE_MM, FACET_MM
from morph.geometry.mesh import Mesh
from morph.solid.body import arrays_of, require_valid
from morph.solid.tidy import make_file_mesh

FEWEST_SIDES = 32


def n_sides(radius_mm: float) -> int:
    """Returns the number of sides, a multiple of 4, with a sagitta of at most FACET_MM.

    >>> n_sides(30.0)
    276
    """
    half_angle = math.acos(max(1.0 - FACET_MM / radius_mm, 0.0))
    return max(FEWEST_SIDES, 4 * math.ceil(0.25 * math.pi / half_angle))


def same_area_radius_mm(radius_mm: float, sides: int) -> float:
    """Returns the corner radius of a regular polygon of `sides` sides with the area of the circle of `radius_mm`."""
    angle = 2.0 * math.pi / sides
    return radius_mm * math.sqrt(angle / math.sin(angle))


def blank_body(blank: Blank, *, printed: bool) -> Any:
    """Returns the blank as a manifold3d body; `printed` adds the stock of each face. Holes are not cut.

    Raises:
        GeometryError: ``solid-empty`` when the faces leave no metal.
    """
    import manifold3d

    low, high = _extent(blank, printed)
    box = manifold3d.Manifold.cube((high - low).tolist()).translate(low.tolist())
    for face in blank.faces:
        if isinstance(face, CylinderFace):
            stock = face.stock_mm if printed else 0.0
            radius = face.radius_mm + (stock if face.metal_inside else -stock)
            if radius <= COINCIDE_MM and not face.metal_inside:
                continue
            round_body = _cylinder(radius, low[2] - 1.0, high[2] + 1.0)
            box = box ^ round_body if face.metal_inside else box - round_body
        elif isinstance(face, PlaneFace) and _axis(face) is None:
            stock = face.stock_mm if printed else 0.0
            box = box.trim_by_plane((-face.normal).tolist(), -float(face.origin_mm @ face.normal) - stock)
    require_valid(box, "the blank")
    return box


def blank_mesh(blank: Blank, *, printed: bool) -> Mesh:
    """Returns the blank's mesh as a file holds it, finished or with its stock.

    Args:
        blank: faces and extents. Its holes are made later and are not cut.
        printed: with the machining stock on each face.

    Raises:
        GeometryError: ``solid-empty`` when the faces leave no metal.
    """
    vertices, triangles, _ = arrays_of(blank_body(blank, printed=printed))
    return make_file_mesh(vertices, triangles, np.zeros(len(triangles), np.int64), "the blank")[0]


def _axis(face: PlaneFace) -> int | None:
    """Returns the axis a plane is square to, or None for an oblique plane."""
    along = np.flatnonzero(np.abs(face.normal) > 1.0 - 1e-12)
    return int(along[0]) if len(along) == 1 else None


def _extent(blank: Blank, printed: bool) -> tuple[Floats, Floats]:
    """Returns the lowest and highest corner of the box around the metal, set by the axis-parallel planes."""
    widest = max([face.radius_mm + face.stock_mm for face in blank.faces if isinstance(face, CylinderFace)] or [0.0])
    if blank.box_mm is not None:
        low, high = blank.box_mm[0].copy(), blank.box_mm[1].copy()
    else:
        low = np.array([-widest - 1.0, -widest - 1.0, blank.z_mm[0]])
        high = np.array([widest + 1.0, widest + 1.0, blank.z_mm[1]])
    for face in blank.faces:
        axis = _axis(face) if isinstance(face, PlaneFace) else None
        if axis is None or not isinstance(face, PlaneFace):
            continue
        place = float(face.origin_mm[axis])
        stock = face.stock_mm if printed else 0.0
        if face.normal[axis] > 0.0:
            high[axis] = place + stock
        else:
            low[axis] = place - stock
    return low, high


def _cylinder(radius_mm: float, low_mm: float, high_mm: float) -> Any:
    import manifold3d

    sides = n_sides(radius_mm)
    corner = same_area_radius_mm(radius_mm, sides)
    angle = 2.0 * math.pi * np.arange(sides) / sides
    outline = manifold3d.CrossSection([np.column_stack([corner * np.cos(angle), corner * np.sin(angle)])])
    return manifold3d.Manifold.extrude(outline, high_mm - low_mm).translate([0.0, 0.0, low_mm])
