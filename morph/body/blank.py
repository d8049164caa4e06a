"""The blank: the body before the channels are cut, as a list of named faces around one metal region.

A blank is an outer primitive (cylinder or cone about z, or box) cut to the metal side of the carrier, with
an optional inner bore; or a mesh as it lies (mesh_blank.py). The faces carry roles and machining
stock; solid/cut.py turns the record into a mesh, finished or as printed.
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from morph.body.carrier_face import LaidCarrier, round_face
from morph.body.face import BlankFace, FaceRole, PlaneFace
from morph.body.flange import FlangedFace, with_flange
from morph.body.hole import Hole, make_hole
from morph.body.shape import Shape, make_shape, widest_mm
from morph.body.skin import Skin
from morph.body.skin_face import SkinFace
from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import GeometryError, SettingError
from morph.core.progress import SILENT, Progress
from morph.core.tolerance import COINCIDE_MM
from morph.core.verdict import Notice
from morph.settings.job import BlankSettings, CylinderBlankSettings, HoleSettings, MeshBlankSettings, ServiceSettings
from morph.surface.make import RoundCarrier

if TYPE_CHECKING:
    from morph.body.mesh_blank import MeshBody

AnyFace = BlankFace | FlangedFace | SkinFace
"""Every kind of face a blank has, with a flange or without, drawn or given as a mesh."""

__all__ = ["Blank", "Hole", "make_blank"]

SYNONYMS = {"-z": "foot", "+z": "top"}


@dataclass(frozen=True, slots=True, eq=False)
class Blank:
    """The finished body and the stock on it.

    Args:
        faces: all faces; a point is in the finished metal when every face's distance is positive.
        z_mm: lowest and highest finished z of the body.
        outer_radius_mm: radius of the outer cylinder about z, or None for a box or a cone.
        inner_radius_mm: radius of the bore about z, or None when solid or conical.
        box_mm: (2, 3) lowest and highest corner of the box, or None. A box may be cut by
            `outer_radius_mm` (metal toward the axis) or by `inner_radius_mm` (away from it).
        holes: kept clear by channels and leads. Holes are made later and are not cut.
        notices: what the job may not expect of its blank.
        skin: the finished body when it is given as a mesh, else None.
    """

    faces: tuple[AnyFace, ...]
    z_mm: tuple[float, float]
    outer_radius_mm: float | None
    inner_radius_mm: float | None
    box_mm: Floats | None
    holes: tuple[Hole, ...] = ()
    notices: tuple[Notice, ...] = ()
    skin: Skin | None = None

    def __post_init__(self) -> None:
        if self.box_mm is not None:
            object.__setattr__(self, "box_mm", frozen_floats("box_mm", self.box_mm, (2, 3)))

    def face(self, name: str) -> AnyFace:
        """Returns the face called `name`; KeyError when there is none."""
        for face in self.faces:
            if face.name == name:
                return face
        raise KeyError(name)


def make_blank(
    settings: BlankSettings,
    holes: Sequence[HoleSettings],
    carrier: LaidCarrier,
    size_mm: tuple[float, float],
    service: ServiceSettings,
    build_direction: tuple[float, float, float] = (0.0, 0.0, 1.0),
    progress: Progress = SILENT,
) -> Blank:
    """Returns the blank of a job: its primitive on the metal side of the carrier, faces named and holes clipped.

    Args:
        settings: the [blank] table.
        holes: the [[hole]] tables.
        carrier: the finished face, with the depth of the sheet.
        size_mm: width and height of the sheet.
        service: the wall of a hole that names none.
        build_direction: from the plate into the part; foot and top of a mesh are its ends along it.
        progress: told by the crossing test of a mesh.

    Raises:
        InputError: of a mesh (read/mesh_file.py, read/mesh_body.py).
        SettingError: `blank-not-a-body`, `blank-too-large`, `blank-thickness-missing`, `blank-needs-mesh`,
            `blank-face-unknown`, `blank-face-twice`, `blank-no-port-face`, `blank-stock-refused`,
            `flange-misfit`, `hole-not-a-hole`, `mesh-side-face`, `mesh-unit-conflict`.
        GeometryError: `blank-inside-carrier`, `blank-past-apex`, `blank-misses-carrier`, `hole-misses-body`,
            `part-face-mismatch`, `part-face-other-side`, `mesh-face-not-flat`.
    """
    if isinstance(settings.shape, MeshBlankSettings):
        from morph.body.mesh_blank import make_mesh_body

        body = make_mesh_body(settings.shape, carrier, size_mm, build_direction, progress)
        return _mesh_blank(body, settings, holes, carrier, size_mm, service)
    if not isinstance(carrier, RoundCarrier):
        raise SettingError(
            "blank-needs-mesh",
            expected='kind = "mesh" with a carrier that is no cylinder or cone',
            found="a blank drawn about the z axis",
            where="[blank] kind",
            do="Give the body as a mesh or STEP file.",
        )
    shape = make_shape(settings.shape, carrier)
    named: list[AnyFace] = [*_name_faces(shape)]
    if settings.flange is not None:
        named = [*with_flange(_name_faces(shape), shape, settings.flange, carrier.sheet_z_mm()[0])]
    faces = _assign_roles(named, settings)
    _require_sheet_inside(faces, carrier, size_mm)
    clipped = tuple(make_hole(i + 1, hole, faces, service) for i, hole in enumerate(holes))
    outer, inner = shape.radius_mm(metal_inside=True), shape.radius_mm(metal_inside=False)
    return Blank(faces, shape.z_mm, outer, inner, shape.box_mm, clipped, _cut_notices(settings, shape))


def _mesh_blank(
    body: MeshBody,
    settings: BlankSettings,
    holes: Sequence[HoleSettings],
    carrier: LaidCarrier,
    size_mm: tuple[float, float],
    service: ServiceSettings,
) -> Blank:
    """Returns the blank of a mesh: roles on its faces, the sheet at depth inside it, holes clipped."""
    from morph.body.mesh_blank import require_mesh_faces

    require_mesh_faces(body, settings)
    faces = _assign_roles(body.faces, settings, body.synonyms)
    _require_sheet_inside(faces, carrier, size_mm, on_face=False)
    clipped = tuple(make_hole(i + 1, hole, faces, service) for i, hole in enumerate(holes))
    z = body.skin.mesh.vertices_mm[:, 2]
    return Blank(faces, (float(z.min()), float(z.max())), None, None, None, clipped, body.notices, body.skin)


def _cut_notices(settings: BlankSettings, shape: Shape) -> tuple[Notice, ...]:
    """Returns a `blank-cut-to-carrier` notice when a blank cylinder is larger than the core and so cut to it."""
    if not isinstance(settings.shape, CylinderBlankSettings) or not shape.rounds[0].metal_inside:
        return ()
    core, asked = widest_mm(shape.rounds[0].surface, shape.z_mm), settings.shape.radius_mm
    if asked <= core + COINCIDE_MM:
        return ()
    text = (
        f"The blank cylinder of radius {asked:.3f} mm is cut to the core: the carrier is the finished face, and the "
        f"body's largest radius is {core:.3f} mm."
    )
    return (Notice("blank-cut-to-carrier", text),)


def _name_faces(shape: Shape) -> list[BlankFace]:
    """Returns the faces the body really has, the carrier first, then foot, top, sides and other round faces."""
    rounds = [round_face(item) for item in shape.rounds]
    faces: list[BlankFace] = [rounds[0]]
    planes = [("foot", 2, -1.0, shape.z_mm[0]), ("top", 2, 1.0, shape.z_mm[1])]
    if shape.box_mm is not None:
        reach = widest_mm(shape.rounds[0].surface, shape.z_mm)
        planes += [
            (f"{'-+'[end]}{'xy'[axis]}", axis, (-1.0, 1.0)[end], float(shape.box_mm[end, axis]))
            for axis in (0, 1)
            for end in (0, 1)
            if not shape.rounds[0].metal_inside or abs(shape.box_mm[end, axis]) < reach
        ]
    for name, axis, sign, place in planes:
        faces.append(PlaneFace(name, FaceRole.OUTER, 0.0, place * np.eye(3)[axis], sign * np.eye(3)[axis]))
    return faces + rounds[1:]


def _face_name(name: str, known: Sequence[str], where: str, synonyms: Mapping[str, str]) -> str:
    name = synonyms.get(name, name)
    if name not in known:
        near = difflib.get_close_matches(name, known, n=1)
        raise SettingError(
            "blank-face-unknown",
            expected="one of " + ", ".join(known),
            found=f"'{name}'",
            where=where,
            do=f"Did you mean '{near[0]}'?" if near else "Name a face this blank has.",
        )
    return name


def _assign_roles(
    faces: Sequence[AnyFace], settings: BlankSettings, synonyms: Mapping[str, str] = SYNONYMS
) -> tuple[AnyFace, ...]:
    known = [face.name for face in faces]
    part = [_face_name(name, known, "[blank] part_faces", synonyms) for name in settings.part_faces]
    port = [_face_name(name, known, "[blank] port_faces", synonyms) for name in settings.port_faces]
    stock = {_face_name(name, known, "[blank] stock_mm", synonyms): value for name, value in settings.stock_mm}
    both = sorted(set(part) & set(port))
    if both:
        raise SettingError(
            "blank-face-twice",
            expected="each face in part_faces or in port_faces, not in both",
            found=f"'{both[0]}' in both",
            where="[blank]",
            do="A face the moulded part touches is never opened: take it out of port_faces.",
        )
    if not port:
        raise SettingError(
            "blank-no-port-face",
            expected="at least one face where ports may come out",
            found="none",
            where="[blank] port_faces",
            do="Name one of " + ", ".join(name for name in known if name not in part) + ".",
        )
    _require_stock(stock, part)
    roles = dict.fromkeys(part, FaceRole.PART) | dict.fromkeys(port, FaceRole.PORT)
    return tuple(
        replace(face, role=roles.get(face.name, FaceRole.OUTER), stock_mm=float(stock.get(face.name, 0.0)))
        for face in faces
    )


def _require_stock(stock: dict[str, float], part: Sequence[str]) -> None:
    for name, value in sorted(stock.items()):
        finished = name == "carrier" or name in part
        if not np.isfinite(value) or value < 0.0 or (finished and value > 0.0):
            raise SettingError(
                "blank-stock-refused",
                expected="no stock: the carrier and the part faces are given as finished"
                if finished
                else "a stock not below 0 mm",
                found=f"{value} mm on '{name}'",
                where="[blank] stock_mm",
                do="Leave stock only on faces that are machined after printing.",
            )


def _require_sheet_inside(
    faces: Sequence[AnyFace], carrier: LaidCarrier, size_mm: tuple[float, float], *, on_face: bool = True
) -> None:
    """Raises `blank-misses-carrier` unless the whole sheet, at depth and `on_face`, lies in the body."""
    x, y = np.meshgrid(np.linspace(0.0, size_mm[0], 97), np.linspace(0.0, size_mm[1], 5))
    sheet = np.column_stack([x.ravel(), y.ravel()])
    points = carrier.point_mm(sheet, carrier.depth_mm)
    if on_face:
        points = np.concatenate([points, carrier.point_mm(sheet, 0.0)])
    worst = min(
        ((float(d.min()), int(d.argmin()), face.name) for face in faces[1:] for d in (face.distance_mm(points),)),
        default=(0.0, 0, ""),
    )
    if worst[0] < -COINCIDE_MM:
        place = sheet[worst[1] % len(sheet)]
        raise GeometryError(
            "blank-misses-carrier",
            expected=f"a blank that holds the whole sheet on its face and at {carrier.depth_mm:.3f} mm depth",
            found=f"the sheet {-worst[0]:.3f} mm outside face '{worst[2]}'",
            where=f"[blank], sheet place ({place[0]:.2f}, {place[1]:.2f}) mm",
            do=f"Move face '{worst[2]}' out by more than that, or make the sheet smaller or shallower.",
        )
