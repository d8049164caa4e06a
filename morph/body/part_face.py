"""The part face of a mesh blank: its skin under the sheet must be the carrier, within a stated tolerance.

Places every STEP_MM of the sheet are held against the nearest skin. What lies elsewhere is named with figure,
side and place; a mesh drawn in another unit, or a carrier of another radius, is recognised and told.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.face import ConeFace, CylinderFace, Face
from morph.core.arrays import Bools, Floats
from morph.core.errors import GeometryError
from morph.geometry.mesh import Mesh, triangle_normals
from morph.geometry.tree import TriangleTree, cast_rays, closest_points, make_tree
from morph.read.mesh_file import MM_PER_UNIT, MeshFile
from morph.surface.carrier import Carrier

ON_CARRIER_MM = 0.1
"""Skin this near to the carrier is the carrier: exported meshes have chords up to this (common practice, no source)."""

MOST_CHORD_MM = 5.0
"""Facets that leave the carrier by more than this are no coarse export of it but another shape."""

STEP_MM = 1.0
MOST_STEPS = 256
ALL_OVER = 0.9
"""Share of the places that must agree before an error says what would make them all right."""


@dataclass(frozen=True, slots=True)
class PartFace:
    """How the skin lies on the carrier under the sheet: worst and mean in mm, positive outside, over so many places."""

    worst_mm: float
    mean_mm: float
    places: int


def require_part_face(
    mesh: Mesh,
    on_carrier: Bools,
    carrier: Carrier,
    endless: Face,
    size_mm: tuple[float, float],
    file: MeshFile,
) -> PartFace:
    """Returns how the skin lies on the carrier under the sheet.

    Args:
        mesh: the body.
        on_carrier: (m,) triangles on the carrier.
        carrier: with the sheet on it.
        endless: the same surface as a face.
        size_mm: width and height of the sheet.
        file: names the mesh in messages.

    Raises:
        GeometryError: `part-face-mismatch` with figure and place, `part-face-other-side`.
    """
    lines = [np.linspace(0.0, size, min(MOST_STEPS, int(np.ceil(size / STEP_MM)) + 1)) for size in size_mm]
    x, y = np.meshgrid(*lines)
    sheet = np.column_stack([x.ravel(), y.ravel()])
    places = carrier.point_mm(sheet, 0.0)
    tree = make_tree(mesh)
    distance, triangle, point = closest_points(tree, places)
    outside = -endless.distance_mm(point)
    wrong = (distance > ON_CARRIER_MM) | ~on_carrier[triangle]
    # at the rim of the carrier's skin the nearest triangle may be a neighbour's
    if on_carrier.any():
        own = make_tree(Mesh(mesh.vertices_mm, mesh.triangles[on_carrier]))
        wrong &= closest_points(own, places)[0] > ON_CARRIER_MM
    if not wrong.any():
        worst = float(distance.max())
        return PartFace(worst, float(outside.mean()), len(places))
    _require_right_side(mesh, triangle, distance, endless, places, file)
    corners = mesh.vertices_mm[mesh.triangles[triangle]]
    touching = np.abs(endless.distance_mm(corners.reshape(-1, 3)).reshape(-1, 3)) <= ON_CARRIER_MM
    remedy = ""
    if (touching.all(axis=1) | ~wrong).all() and float(distance.max()) < MOST_CHORD_MM:
        remedy = "Its points lie on the carrier, its facets cut across: export it with a chord of 0.05 mm or finer."
    elif isinstance(endless, CylinderFace) and on_carrier.any():
        remedy = _shift(mesh.vertices_mm[mesh.triangles[on_carrier], 2], places[:, 2])
    raise _mismatch(tree, distance, wrong, remedy, endless, sheet, places, file)


def _shift(skin_z_mm: Floats, sheet_z_mm: Floats) -> str:
    """Returns how far to move a mesh along z when the carrier's skin is long enough but begins or ends elsewhere."""
    low, high = float(skin_z_mm.min()), float(skin_z_mm.max())
    least, most = float(sheet_z_mm.max()) - high, float(sheet_z_mm.min()) - low
    if least > most or least <= 0.0 <= most:
        return ""
    return (
        f"The carrier's skin of the mesh reaches from z = {low:.3f} to {high:.3f} mm and the sheet from "
        f"{float(sheet_z_mm.min()):.3f} to {float(sheet_z_mm.max()):.3f} mm: move the mesh along z by {least:.3f} to "
        f"{most:.3f} mm."
    )


def _require_right_side(
    mesh: Mesh,
    triangle: np.ndarray,
    distance: Floats,
    endless: Face,
    places: Floats,
    file: MeshFile,
) -> None:
    """Raises when the skin lies on the carrier but its metal on the other side."""
    normals, _ = triangle_normals(mesh)
    facing = np.einsum("ij,ij->i", normals[triangle], endless.outward(places))
    if ((distance <= ON_CARRIER_MM) & (facing < -0.5)).mean() < ALL_OVER:
        return
    raise GeometryError(
        "part-face-other-side",
        expected="the metal of the mesh on the side of the carrier that [carrier] metal names",
        found="its metal on the other side",
        where=file.source,
        do='Give the other word in [carrier] metal ("toward-axis" for a core, "away-from-axis" for a cavity).',
    )


def _mismatch(
    tree: TriangleTree,
    distance: Floats,
    wrong: Bools,
    remedy: str,
    endless: Face,
    sheet: Floats,
    places: Floats,
    file: MeshFile,
) -> GeometryError:
    """Returns the error with the worst place, and the remedy when one would do for all places."""
    out = endless.outward(places)
    ahead, _ = cast_rays(tree, places, out)
    behind, _ = cast_rays(tree, places, -out)
    # the skin along the normal: outside the carrier when the carrier runs inside the metal
    along = np.where(ahead < behind, ahead, -behind)
    worst = int(np.argmax(np.where(wrong, distance, -1.0)))
    x, y, z = places[worst]
    lies = f"skin {distance[worst]:.3f} mm away that is not the carrier's"
    if distance[worst] > ON_CARRIER_MM:
        lies = f"no skin within {distance[worst]:.3f} mm"
    if np.isfinite(along[worst]):
        side = "outside the carrier" if along[worst] > 0.0 else "inside the carrier"
        lies += f"; along the normal it lies {abs(along[worst]):.3f} mm {side}"
    return GeometryError(
        "part-face-mismatch",
        expected=f"skin of the mesh within {ON_CARRIER_MM} mm of the carrier everywhere under the sheet",
        found=f"{lies}; {int(wrong.sum())} of {len(places)} places are off",
        where=f"{file.source} at ({x:.3f}, {y:.3f}, {z:.3f}) mm, sheet place ({sheet[worst, 0]:.2f}, "
        f"{sheet[worst, 1]:.2f}) mm",
        do=remedy or _remedy(tree, along, endless, places, file),
    )


def _remedy(tree: TriangleTree, along: Floats, endless: Face, places: Floats, file: MeshFile) -> str:
    """Returns what would bring the skin onto the carrier: another unit, another radius, or a look at the drawing."""
    for unit, factor in MM_PER_UNIT.items():
        scale = factor / MM_PER_UNIT[file.unit]
        near = scale * closest_points(tree, places / scale)[0] <= ON_CARRIER_MM
        if scale != 1.0 and float(near.mean()) >= ALL_OVER:
            do = (
                "export it again with the unit it is drawn in." if file.unit_from == "file" else f'add unit = "{unit}".'
            )
            return f"It fits when its numbers are in {unit}: {do}"
    middle = float(np.median(along))
    agrees = np.isfinite(middle) and float((np.abs(along - middle) <= ON_CARRIER_MM).mean()) >= ALL_OVER
    if agrees and isinstance(endless, CylinderFace | ConeFace):
        return f"Nearly all of it fits a carrier with radius_mm = {_radius_mm(endless, middle):.3f}."
    if not isinstance(endless, CylinderFace | ConeFace):
        return "Place the mesh where the carrier's own file lies, and give both in the same unit."
    return (
        "Place the mesh so that the carrier's axis is z and the sheet's centre lies at the +x side, z = 0; "
        "or correct the carrier's sizes, or make the sheet smaller."
    )


def _radius_mm(endless: CylinderFace | ConeFace, outside_mm: float) -> float:
    """Returns the carrier's radius at the sheet's centre when its surface is moved out of the metal by a length."""
    outward = outside_mm if endless.metal_inside else -outside_mm
    if isinstance(endless, ConeFace):
        return endless.cone.offset(outward).radius_at_mm(0.0)
    return endless.radius_mm + outward
