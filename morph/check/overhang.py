"""Overhangs of the insert's own skin: faces that look down, flatter than the roof angle, off the build plate.

The channels are roofed or judged by their span; the skin of the insert is not. Where it faces down
without lying on the plate it needs supports or machining stock, and a part face printed so comes
out rough. The lowest plane along the build direction is what stands on the plate.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.blank import Blank
from morph.body.face import FaceRole
from morph.check.centreline import Place
from morph.check.channel_wall import sub_mesh
from morph.check.flat_patch import ceiling_angles_deg
from morph.check.powder import plate_face
from morph.check.rows import name_list, place
from morph.core.arrays import Floats, Ints
from morph.core.verdict import Outcome, Verdict
from morph.geometry.mesh import Mesh, triangle_normals
from morph.settings.profile import Profile
from morph.solid.result import Insert

ON_PLATE_MM = 0.05
"""A level triangle with all corners this near to the lowest plane lies on the plate: about one layer."""

AT_ROOF_DEG = 0.5
"""Directions nearer to each other are the same: a face at the roof angle itself prints, facets of curved ones too."""

LEAST_AREA_MM2 = 0.5
"""Less is the rim of an opening or of a fillet, cut by facets (own measurement)."""


@dataclass(frozen=True, slots=True)
class Overhang:
    """Skin that faces down off the plate: the area, by face, most first, and the middle of the largest one.

    Args:
        area_mm2: of all of it. faces: (name, role, area in mm2).
        xyz_mm: centre of the largest face's overhang, on its nearest triangle; None without any.
        part_on_plate: names of the part faces that lie on the plate.
    """

    area_mm2: float
    faces: tuple[tuple[str, FaceRole, float], ...]
    xyz_mm: Place | None
    part_on_plate: tuple[str, ...]


def face_of_triangles(skin: Mesh, blank: Blank) -> Ints:
    """Returns for each triangle (m,) of the printed skin the index of the face of `blank` it belongs to.

    Printed skin lies on its face moved out by the stock there; of faces equally near the one whose
    normal agrees is meant.
    """
    normals, _ = triangle_normals(skin)
    centre = skin.vertices_mm[skin.triangles].mean(axis=1)
    off = np.stack([np.abs(face.distance_mm(centre) + face.stock_mm) for face in blank.faces])
    turned = np.stack([1.0 - np.einsum("ij,ij->i", normals, face.outward(centre)) for face in blank.faces])
    return np.asarray(np.argmin(off + turned, axis=0), dtype=np.int64)


def measure_overhang(insert: Insert, blank: Blank, direction: Floats, roof_deg: float) -> Overhang:
    """Returns the overhangs of the insert's skin, channel wall left out.

    Args:
        insert: as written.
        blank: names the faces.
        direction: (3,) unit, from the plate into the part.
        roof_deg: flattest ceiling that prints without support, from the plate.
    """
    skin = sub_mesh(insert.mesh, np.flatnonzero(insert.channel_triangle == 0))
    normals, area = triangle_normals(skin)
    height = skin.vertices_mm @ direction
    angle = ceiling_angles_deg(normals, direction)
    on_plate = (height[skin.triangles] <= height.min() + ON_PLATE_MM).all(axis=1) & (angle < AT_ROOF_DEG)
    down = angle < roof_deg - AT_ROOF_DEG
    owner, hangs = face_of_triangles(skin, blank), down & ~on_plate
    by_face = np.bincount(owner[hangs], area[hangs], len(blank.faces))
    order = sorted(np.flatnonzero(by_face > LEAST_AREA_MM2).tolist(), key=lambda i: (-round(float(by_face[i]), 6), i))
    faces = tuple((blank.faces[i].name, blank.faces[i].role, float(by_face[i])) for i in order)
    plate = plate_face(blank, direction)
    on = (plate.name,) if plate is not None and plate.role is FaceRole.PART else ()
    where = None
    if order:
        worst = np.flatnonzero(hangs & (owner == order[0]))
        centre = skin.vertices_mm[skin.triangles[worst]].mean(axis=1)
        middle = np.average(centre, axis=0, weights=area[worst])
        where = place(centre[int(np.argmin(((centre - middle) ** 2).sum(axis=1)))])
    return Overhang(sum(item[2] for item in faces), faces, where, on)


def check_overhang(insert: Insert, blank: Blank, profile: Profile, direction: Floats) -> list[Verdict]:
    """Returns the `overhang-outside` row: a watch when skin overhangs off the plate or a part face lies on it."""
    roof = profile.roof_angle_deg
    found = measure_overhang(insert, blank, direction, roof.value)
    text = f"No outer face looks down flatter than {roof.value:.0f} deg off the build plate."
    if found.faces:
        each = name_list([f"{name} {area:.1f} mm2" for name, _, area in found.faces])
        text = (
            f"{found.area_mm2:.1f} mm2 of the outside look down flatter than {roof.value:.0f} deg off the build plate "
            f"({each}): that needs supports or machining stock."
        )
    part = [name for name, role, _ in found.faces if role is FaceRole.PART]
    if part:
        text += f" Part face {name_list(part)} is among them: printed downwards it is rough and must be machined."
    if found.part_on_plate:
        text += f" Part face {name_list(found.part_on_plate)} lies on the plate: it must be cut off and machined."
    passed = not found.faces and not found.part_on_plate
    return [
        Verdict(
            "overhang-outside",
            Outcome.PASS if passed else Outcome.WATCH,
            text,
            value=found.area_mm2,
            unit="mm2",
            limit=0.0,
            limit_is="most",
            source=roof.source,
            xyz_mm=found.xyz_mm,
            hint=""
            if passed
            else "Turn [print] build_direction, leave stock there ([blank] stock_mm), or plan supports and machining.",
        )
    ]
