"""The blank as a closed mesh, finished or with its machining stock.

Round faces become prisms (cones pyramids) with so many sides that the sagitta stays below FACET_MM; the
corners are moved out so that the prism has the cylinder's cross-section area. The radius is thus kept on
average: volumes are exact, and no wall is off by more than two thirds of FACET_MM. A mesh stays as it is.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from morph.body.blank import Blank
from morph.body.face import ConeFace, CylinderFace, Face, PlaneFace
from morph.body.flange import FLANGE_FACES, FlangedFace
from morph.core.arrays import Floats
from morph.core.tolerance import COINCIDE_MM, FACET_MM
from morph.geometry.mesh import Mesh
from morph.solid.body import arrays_of, body_from, require_valid
from morph.solid.stock import with_stock
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

    if blank.skin is not None:
        mesh = with_stock(blank) if printed else blank.skin.mesh
        return body_from(mesh.vertices_mm, mesh.triangles, "the blank")[0]
    low, high = _extent(blank, printed)
    box = manifold3d.Manifold.cube((high - low).tolist()).translate(low.tolist())
    for face in blank.faces:
        if isinstance(face, CylinderFace | ConeFace):
            round_body = _round_body(face, printed, low[2] - 1.0, high[2] + 1.0)
            if round_body is not None:
                box = box ^ round_body if face.metal_inside else box - round_body
        elif isinstance(face, PlaneFace) and _axis(face) is None:
            stock = face.stock_mm if printed else 0.0
            box = box.trim_by_plane((-face.normal).tolist(), -float(face.origin_mm @ face.normal) - stock)
    flanged = [face for face in blank.faces if isinstance(face, FlangedFace)]
    if flanged:
        box = box ^ _flanged_body(flanged, printed, low[2] - 1.0, high[2] + 1.0)
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
    stock = max(face.stock_mm for face in blank.faces)
    widest = max(_widest_mm(face, (blank.z_mm[0] - stock, blank.z_mm[1] + stock)) for face in blank.faces)
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


def _widest_mm(face: Face, z_mm: tuple[float, float]) -> float:
    """Returns the largest radius of a round face with its stock over the body's height; 0 for other faces."""
    if isinstance(face, FlangedFace):
        return max(face.outline.radius_mm + face.stock_mm, _widest_mm(face.outline.core_face(face.stock_mm), z_mm))
    if isinstance(face, CylinderFace):
        return face.radius_mm + face.stock_mm
    if isinstance(face, ConeFace):
        printed = face.cone.offset(face.stock_mm)
        return max(printed.radius_at_mm(z) for z in z_mm)
    return 0.0


def _round_body(face: CylinderFace | ConeFace, printed: bool, low_mm: float, high_mm: float) -> Any:
    """Returns the body inside a round face between two heights, or None when a bore is closed by its stock."""
    stock = face.stock_mm if printed else 0.0
    outward = stock if face.metal_inside else -stock
    if isinstance(face, CylinderFace):
        radius = face.radius_mm + outward
        return _frustum(low_mm, high_mm, radius, radius) if radius > COINCIDE_MM else None
    cone = face.cone.offset(outward)
    apex = cone.apex_mm
    low_mm, high_mm = (max(low_mm, apex), high_mm) if cone.half_angle_rad > 0.0 else (low_mm, min(high_mm, apex))
    if high_mm - low_mm <= COINCIDE_MM:
        return None
    ends = (cone.radius_at_mm(low_mm), cone.radius_at_mm(high_mm))
    return _frustum(low_mm, high_mm, *(0.0 if radius < COINCIDE_MM else radius for radius in ends))


def _flanged_body(faces: list[FlangedFace], printed: bool, low_mm: float, high_mm: float) -> Any:
    """Returns core and flange in one, between two heights."""
    outline = faces[0].outline
    stock = {face.name: face.stock_mm if printed else 0.0 for face in faces}
    core = next(face for face in faces if face.name not in FLANGE_FACES)
    radius = outline.radius_mm + stock["rim"]
    disc = _frustum(low_mm, outline.top_mm + stock["flange"], radius, radius)
    return disc + _round_body(outline.core_face(core.stock_mm), printed, low_mm, high_mm)


def _frustum(low_mm: float, high_mm: float, radius_low_mm: float, radius_high_mm: float) -> Any:
    """Returns a body of many flat sides, each cross-section of the area of its circle; one radius may be 0."""
    import manifold3d

    sides = n_sides(max(radius_low_mm, radius_high_mm))
    area = same_area_radius_mm(1.0, sides)
    low_corner, high_corner = area * radius_low_mm, area * radius_high_mm
    angle = 2.0 * math.pi * np.arange(sides) / sides
    wide = max(low_corner, high_corner)
    outline = manifold3d.CrossSection([np.column_stack([wide * np.cos(angle), wide * np.sin(angle)])])
    flipped = low_corner < high_corner
    scale = (min(low_corner, high_corner) / wide,) * 2
    body = manifold3d.Manifold.extrude(outline, high_mm - low_mm, scale_top=scale)
    if flipped:
        return body.mirror([0.0, 0.0, 1.0]).translate([0.0, 0.0, high_mm])
    return body.translate([0.0, 0.0, low_mm])
