"""The blank: the body before the channels are cut, as a list of named faces around one metal region.

A blank is an outer primitive (cylinder about z, or box) cut to the metal side of the carrier, with
an optional inner bore. The faces carry roles and machining stock; solid/cut.py turns the record
into a mesh, finished or as printed.
"""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from morph.body.face import CylinderFace, FaceRole, PlaneFace
from morph.body.hole import Hole, make_hole
from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import GeometryError, SettingError
from morph.core.tolerance import COINCIDE_MM
from morph.settings.job import (
    BlankSettings,
    BoxBlankSettings,
    CarrierBlankSettings,
    CylinderBlankSettings,
    HoleSettings,
    Metal,
    ServiceSettings,
)
from morph.surface.cylinder import CylinderCarrier

__all__ = ["Blank", "Hole", "make_blank"]

LARGEST_MM = 3000.0
"""No powder bed holds a body this large (common practice, no source); larger ones are mistyped sizes."""

SYNONYMS = {"-z": "foot", "+z": "top"}


@dataclass(frozen=True, slots=True, eq=False)
class Blank:
    """The finished body and the stock on it.

    Args:
        faces: all faces; a point is in the finished metal when every face's distance is positive.
        z_mm: lowest and highest finished z of the body.
        outer_radius_mm: radius of the outer cylinder about z, or None for a box.
        inner_radius_mm: radius of the bore about z, or None when solid.
        box_mm: (2, 3) lowest and highest corner of the box, or None. A box may be cut by
            `outer_radius_mm` (metal toward the axis) or by `inner_radius_mm` (away from it).
        holes: kept clear by channels and leads. Holes are made later and are not cut.
    """

    faces: tuple[PlaneFace | CylinderFace, ...]
    z_mm: tuple[float, float]
    outer_radius_mm: float | None
    inner_radius_mm: float | None
    box_mm: Floats | None
    holes: tuple[Hole, ...] = ()

    def __post_init__(self) -> None:
        if self.box_mm is not None:
            object.__setattr__(self, "box_mm", frozen_floats("box_mm", self.box_mm, (2, 3)))

    def face(self, name: str) -> PlaneFace | CylinderFace:
        """Returns the face called `name`; KeyError when there is none."""
        for face in self.faces:
            if face.name == name:
                return face
        raise KeyError(name)


@dataclass(frozen=True, slots=True, eq=False)
class _Shape:
    """The bare body: heights, radii and box before any face has a role."""

    z_mm: tuple[float, float]
    outer_radius_mm: float | None
    inner_radius_mm: float | None
    box_mm: Floats | None


def make_blank(
    settings: BlankSettings,
    holes: Sequence[HoleSettings],
    carrier: CylinderCarrier,
    size_mm: tuple[float, float],
    service: ServiceSettings,
) -> Blank:
    """Returns the blank of a job: its primitive on the metal side of the carrier, faces named and holes clipped.

    Args:
        settings: the [blank] table.
        holes: the [[hole]] tables.
        carrier: the finished face, with the depth of the sheet.
        size_mm: width and height of the sheet.
        service: the wall of a hole that names none.

    Raises:
        SettingError: `blank-not-a-body`, `blank-too-large`, `blank-thickness-missing`,
            `blank-face-unknown`, `blank-face-twice`, `blank-no-port-face`, `blank-stock-refused`, `hole-not-a-hole`.
        GeometryError: `blank-inside-carrier`, `blank-misses-carrier`, `hole-misses-body`.
    """
    shape = _make_shape(settings.shape, carrier, size_mm)
    _require_size(shape)
    faces = _assign_roles(_name_faces(shape, carrier), settings)
    _require_sheet_inside(faces, carrier, size_mm)
    clipped = tuple(make_hole(i + 1, hole, faces, service) for i, hole in enumerate(holes))
    return Blank(faces, shape.z_mm, shape.outer_radius_mm, shape.inner_radius_mm, shape.box_mm, clipped)


def _not_a_body(where: str, expected: str, found: str) -> SettingError:
    do = "Correct the sizes; all lengths are mm in the part frame."
    return SettingError("blank-not-a-body", expected=expected, found=found, where=where, do=do)


def _require_size(shape: _Shape) -> None:
    """Raises `blank-too-large` when the body is larger than any machine."""
    across = 2.0 * (shape.outer_radius_mm or 0.0) if shape.box_mm is None else float(np.ptp(shape.box_mm, axis=0).max())
    size = max(across, shape.z_mm[1] - shape.z_mm[0])
    if not size <= LARGEST_MM:
        raise SettingError(
            "blank-too-large",
            expected=f"a body of at most {LARGEST_MM:.0f} mm",
            found=f"{size:.6g} mm",
            where="[blank]",
            do="Give all lengths in mm; check the carrier's radius, the margins and the blank's sizes.",
        )


def _make_shape(
    shape: CarrierBlankSettings | CylinderBlankSettings | BoxBlankSettings,
    carrier: CylinderCarrier,
    size_mm: tuple[float, float],
) -> _Shape:
    if isinstance(shape, CarrierBlankSettings):
        return _carrier_shape(shape, carrier, size_mm)
    if isinstance(shape, CylinderBlankSettings):
        return _cylinder_shape(shape, carrier)
    return _box_shape(shape, carrier)


def _carrier_shape(shape: CarrierBlankSettings, carrier: CylinderCarrier, size_mm: tuple[float, float]) -> _Shape:
    low, high = shape.margin_mm
    if min(low, high) < 0.0:
        raise _not_a_body("[blank] margin_mm", "two margins not below 0 mm", f"{low} mm and {high} mm")
    z_mm = (-0.5 * size_mm[1] - low, 0.5 * size_mm[1] + high)
    thickness = shape.thickness_mm
    if carrier.metal is Metal.TOWARD_AXIS:
        if thickness is None:
            return _Shape(z_mm, carrier.radius_mm, None, None)
        if not 0.0 < thickness < carrier.radius_mm:
            wanted = f"a shell thinner than the radius of {carrier.radius_mm} mm (leave it out for a solid core)"
            raise _not_a_body("[blank] thickness_mm", wanted, f"{thickness} mm")
        return _Shape(z_mm, carrier.radius_mm, carrier.radius_mm - thickness, None)
    if thickness is None:
        raise SettingError(
            "blank-thickness-missing",
            expected="thickness_mm of the metal around the cavity",
            found="none",
            where="[blank] kind carrier with metal away from the axis",
            do="Add thickness_mm, or use kind cylinder or box, which have an outside of their own.",
        )
    if thickness <= 0.0:
        raise _not_a_body("[blank] thickness_mm", "a length above 0 mm", f"{thickness} mm")
    return _Shape(z_mm, carrier.radius_mm + thickness, carrier.radius_mm, None)


def _cylinder_shape(shape: CylinderBlankSettings, carrier: CylinderCarrier) -> _Shape:
    if not (shape.radius_mm > 0.0 and shape.z_mm[0] < shape.z_mm[1]):
        found = f"radius {shape.radius_mm} mm, z {shape.z_mm[0]} mm to {shape.z_mm[1]} mm"
        raise _not_a_body("[blank] kind cylinder", "radius_mm above 0 mm and z_mm from low to high", found)
    toward = carrier.metal is Metal.TOWARD_AXIS
    short = carrier.radius_mm - shape.radius_mm
    if short > COINCIDE_MM or (not toward and short > -COINCIDE_MM):
        raise GeometryError(
            "blank-inside-carrier",
            expected=f"a blank radius {'not below' if toward else 'above'} the carrier's {carrier.radius_mm:.3f} mm, "
            "because the carrier is the finished face",
            found=f"{shape.radius_mm:.3f} mm",
            where="[blank] radius_mm",
            do="Raise radius_mm, or correct the carrier's radius.",
        )
    if toward:
        return _Shape(shape.z_mm, carrier.radius_mm, None, None)
    return _Shape(shape.z_mm, shape.radius_mm, carrier.radius_mm, None)


def _box_shape(shape: BoxBlankSettings, carrier: CylinderCarrier) -> _Shape:
    box = np.array([shape.min_mm, shape.max_mm], dtype=np.float64)
    if not (box[0] < box[1]).all():
        found = f"min_mm {list(shape.min_mm)} and max_mm {list(shape.max_mm)}"
        raise _not_a_body("[blank] kind box", "min_mm below max_mm in x, y and z", found)
    z_mm = (float(box[0, 2]), float(box[1, 2]))
    if carrier.metal is Metal.TOWARD_AXIS:
        return _Shape(z_mm, carrier.radius_mm, None, box)
    return _Shape(z_mm, None, carrier.radius_mm, box)


def _name_faces(shape: _Shape, carrier: CylinderCarrier) -> list[PlaneFace | CylinderFace]:
    """Returns the faces the body really has, the carrier first, then foot, top, sides and round faces."""
    toward = carrier.metal is Metal.TOWARD_AXIS
    faces: list[PlaneFace | CylinderFace] = [
        CylinderFace("carrier", FaceRole.OUTER, 0.0, carrier.radius_mm, metal_inside=toward)
    ]
    planes = [("foot", 2, -1.0, shape.z_mm[0]), ("top", 2, 1.0, shape.z_mm[1])]
    if shape.box_mm is not None:
        planes += [
            (f"{'-+'[end]}{'xy'[axis]}", axis, (-1.0, 1.0)[end], float(shape.box_mm[end, axis]))
            for axis in (0, 1)
            for end in (0, 1)
            if not toward or abs(shape.box_mm[end, axis]) < carrier.radius_mm
        ]
    for name, axis, sign, place in planes:
        faces.append(PlaneFace(name, FaceRole.OUTER, 0.0, place * np.eye(3)[axis], sign * np.eye(3)[axis]))
    if shape.outer_radius_mm is not None and not toward:
        faces.append(CylinderFace("outer", FaceRole.OUTER, 0.0, shape.outer_radius_mm, metal_inside=True))
    if shape.inner_radius_mm is not None and toward:
        faces.append(CylinderFace("inner", FaceRole.OUTER, 0.0, shape.inner_radius_mm, metal_inside=False))
    return faces


def _face_name(name: str, known: Sequence[str], where: str) -> str:
    name = SYNONYMS.get(name, name)
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
    faces: Sequence[PlaneFace | CylinderFace], settings: BlankSettings
) -> tuple[PlaneFace | CylinderFace, ...]:
    known = [face.name for face in faces]
    part = [_face_name(name, known, "[blank] part_faces") for name in settings.part_faces]
    port = [_face_name(name, known, "[blank] port_faces") for name in settings.port_faces]
    stock = {_face_name(name, known, "[blank] stock_mm"): value for name, value in settings.stock_mm}
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
    faces: Sequence[PlaneFace | CylinderFace], carrier: CylinderCarrier, size_mm: tuple[float, float]
) -> None:
    """Raises `blank-misses-carrier` unless the whole sheet, on the face and at depth, lies in the body."""
    x, y = np.meshgrid(np.linspace(0.0, size_mm[0], 97), np.linspace(0.0, size_mm[1], 5))
    sheet = np.column_stack([x.ravel(), y.ravel()])
    points = np.concatenate([carrier.point_mm(sheet, carrier.depth_mm), carrier.point_mm(sheet, 0.0)])
    worst = min(
        ((float(d.min()), int(d.argmin()), face.name) for face in faces[1:] for d in (face.distance_mm(points),)),
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
