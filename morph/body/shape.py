"""The bare body of a blank: heights, box and round surfaces, before any face has a role.

A body is an outer primitive cut to the metal side of the carrier. Round surfaces are cylinders (a
radius) or cones about z.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import GeometryError, SettingError
from morph.core.tolerance import COINCIDE_MM
from morph.geometry.cone import Cone
from morph.settings.job import BoxBlankSettings, CarrierBlankSettings, CylinderBlankSettings, Metal
from morph.surface.cone import ConeCarrier
from morph.surface.limits import LEAST_RADIUS_MM
from morph.surface.make import RoundCarrier

LARGEST_MM = 3000.0
"""No powder bed holds a body this large (common practice, no source); larger ones are mistyped sizes."""


@dataclass(frozen=True, slots=True)
class Round:
    """A round surface about z with the name of its face; `metal_inside` tells on which side the metal lies."""

    name: str
    surface: float | Cone
    metal_inside: bool


@dataclass(frozen=True, slots=True, eq=False)
class Shape:
    """The bare body: lowest and highest z, box corners (2, 3) or None, and its round surfaces, the carrier first."""

    z_mm: tuple[float, float]
    box_mm: Floats | None
    rounds: tuple[Round, ...]

    def radius_mm(self, *, metal_inside: bool) -> float | None:
        """Returns the radius of the first cylinder with its metal on that side, or None."""
        radii = [r.surface for r in self.rounds if r.metal_inside == metal_inside and isinstance(r.surface, float)]
        return radii[0] if radii else None


def make_shape(
    settings: CarrierBlankSettings | CylinderBlankSettings | BoxBlankSettings, carrier: RoundCarrier
) -> Shape:
    """Returns the body of a job on the metal side of its carrier.

    Raises:
        SettingError: `blank-not-a-body`, `blank-too-large`, `blank-thickness-missing`.
        GeometryError: `blank-inside-carrier`, `blank-past-apex`.
    """
    if isinstance(settings, CarrierBlankSettings):
        shape = _carrier_shape(settings, carrier)
    elif isinstance(settings, CylinderBlankSettings):
        shape = _cylinder_shape(settings, carrier)
    else:
        shape = _box_shape(settings, carrier)
    _require_size(shape)
    _require_before_apex(shape)
    return shape


def widest_mm(surface: float | Cone, z_mm: tuple[float, float]) -> float:
    """Returns the largest radius of a round surface between two heights."""
    return max(surface.radius_at_mm(z) for z in z_mm) if isinstance(surface, Cone) else surface


def _narrowest_mm(surface: float | Cone, z_mm: tuple[float, float]) -> float:
    return min(surface.radius_at_mm(z) for z in z_mm) if isinstance(surface, Cone) else surface


def _offset(surface: float | Cone, outward_mm: float) -> float | Cone:
    return surface.offset(outward_mm) if isinstance(surface, Cone) else surface + outward_mm


def face_of(carrier: RoundCarrier) -> Round:
    """Returns the surface of a carrier as the face it is of the body."""
    surface = carrier.face if isinstance(carrier, ConeCarrier) else carrier.radius_mm
    return Round("carrier", surface, carrier.metal is Metal.TOWARD_AXIS)


def _not_a_body(where: str, expected: str, found: str) -> SettingError:
    do = "Correct the sizes; all lengths are mm in the part frame."
    return SettingError("blank-not-a-body", expected=expected, found=found, where=where, do=do)


def _require_size(shape: Shape) -> None:
    """Raises `blank-too-large` when the body is larger than any machine."""
    across = (
        2.0 * max([widest_mm(r.surface, shape.z_mm) for r in shape.rounds if r.metal_inside] or [0.0])
        if shape.box_mm is None
        else float(np.ptp(shape.box_mm, axis=0).max())
    )
    size = max(across, shape.z_mm[1] - shape.z_mm[0])
    if not size <= LARGEST_MM:
        raise SettingError(
            "blank-too-large",
            expected=f"a body of at most {LARGEST_MM:.0f} mm",
            found=f"{size:.6g} mm",
            where="[blank]",
            do="Give all lengths in mm; check the carrier's radius, the margins and the blank's sizes.",
        )


def _require_before_apex(shape: Shape) -> None:
    """Raises `blank-past-apex` when a conical body would end in a point inside its own height."""
    for item in shape.rounds:
        if not (item.metal_inside and isinstance(item.surface, Cone)):
            continue
        at_mm = min(shape.z_mm, key=item.surface.radius_at_mm)
        if item.surface.radius_at_mm(at_mm) >= LEAST_RADIUS_MM:
            continue
        slope = float(np.tan(item.surface.half_angle_rad))
        raise GeometryError(
            "blank-past-apex",
            expected=f"an end where the cone still has a radius of {LEAST_RADIUS_MM:.1f} mm, "
            f"z = {(LEAST_RADIUS_MM - item.surface.radius_mm) / slope:.3f} mm or nearer to the sheet",
            found=f"the {'foot' if at_mm == shape.z_mm[0] else 'top'} at z = {at_mm:.3f} mm",
            where=f"[blank], face '{item.name}'",
            do="Lower the margin (margin_mm) or the height on that side.",
        )


def _carrier_shape(settings: CarrierBlankSettings, carrier: RoundCarrier) -> Shape:
    low, high = settings.margin_mm
    if min(low, high) < 0.0:
        raise _not_a_body("[blank] margin_mm", "two margins not below 0 mm", f"{low} mm and {high} mm")
    lowest, highest = carrier.sheet_z_mm()
    z_mm = (lowest - low, highest + high)
    face, thickness = face_of(carrier), settings.thickness_mm
    if thickness is None:
        if face.metal_inside:
            return Shape(z_mm, None, (face,))
        raise SettingError(
            "blank-thickness-missing",
            expected="thickness_mm of the metal around the cavity",
            found="none",
            where="[blank] kind carrier with metal away from the axis",
            do="Add thickness_mm, or use kind cylinder or box, which have an outside of their own.",
        )
    if not thickness > 0.0:
        raise _not_a_body("[blank] thickness_mm", "a length above 0 mm", f"{thickness} mm")
    if not face.metal_inside:
        return Shape(z_mm, None, (face, Round("outer", _offset(face.surface, thickness), True)))
    inner = _offset(face.surface, -thickness)
    if not widest_mm(inner, z_mm) > 0.0:
        widest = widest_mm(face.surface, z_mm)
        wanted = f"a shell thinner than the radius of {widest:.3f} mm (leave it out for a solid core)"
        raise _not_a_body("[blank] thickness_mm", wanted, f"{thickness} mm")
    return Shape(z_mm, None, (face, Round("inner", inner, False)))


def _cylinder_shape(settings: CylinderBlankSettings, carrier: RoundCarrier) -> Shape:
    if not (settings.radius_mm > 0.0 and settings.z_mm[0] < settings.z_mm[1]):
        found = f"radius {settings.radius_mm} mm, z {settings.z_mm[0]} mm to {settings.z_mm[1]} mm"
        raise _not_a_body("[blank] kind cylinder", "radius_mm above 0 mm and z_mm from low to high", found)
    face = face_of(carrier)
    widest = widest_mm(face.surface, settings.z_mm)
    # a core's cylinder may cut the wide end of its cone, but not all of it
    needed = _narrowest_mm(face.surface, settings.z_mm) if face.metal_inside else widest
    short = needed - settings.radius_mm
    if short > COINCIDE_MM or (not face.metal_inside and short > -COINCIDE_MM):
        raise GeometryError(
            "blank-inside-carrier",
            expected=f"a blank radius {'not below' if face.metal_inside else 'above'} the carrier's {needed:.3f} mm, "
            "because the carrier is the finished face",
            found=f"{settings.radius_mm:.3f} mm",
            where="[blank] radius_mm",
            do="Raise radius_mm, or correct the carrier's radius.",
        )
    if face.metal_inside and settings.radius_mm >= widest - COINCIDE_MM:
        return Shape(settings.z_mm, None, (face,))
    return Shape(settings.z_mm, None, (face, Round("outer", settings.radius_mm, True)))


def _box_shape(settings: BoxBlankSettings, carrier: RoundCarrier) -> Shape:
    box = np.array([settings.min_mm, settings.max_mm], dtype=np.float64)
    if not (box[0] < box[1]).all():
        found = f"min_mm {list(settings.min_mm)} and max_mm {list(settings.max_mm)}"
        raise _not_a_body("[blank] kind box", "min_mm below max_mm in x, y and z", found)
    face, z_mm = face_of(carrier), (float(box[0, 2]), float(box[1, 2]))
    away = float(np.linalg.norm(np.maximum(0.0, np.maximum(box[0, :2], -box[1, :2]))))
    if face.metal_inside and away >= widest_mm(face.surface, z_mm) - COINCIDE_MM:
        raise GeometryError(
            "blank-misses-carrier",
            expected=f"a box that meets the core of radius {widest_mm(face.surface, z_mm):.3f} mm about z",
            found=f"a box that comes no nearer to the axis than {away:.3f} mm",
            where="[blank] min_mm, max_mm",
            do="Move the box over the carrier: its axis is z, and the sheet's centre lies at the +x side.",
        )
    return Shape(z_mm, box, (face,))
