"""Faces of a body with a flange: a disc about z at the foot, wider than the core that rises from it.

Such a body is no longer convex: the core's own face begins above the flange, the flange's upper face and
its rim end at edges. Each of them is a straight line in the half plane through the axis, so distances are
those to a line with two ends, signed by whether the point lies in core or flange.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.face import BlankFace, ConeFace, CylinderFace, FaceRole, PlaneFace
from morph.body.shape import Round, Shape, widest_mm
from morph.core.arrays import Bools, Floats
from morph.core.errors import SettingError
from morph.core.tolerance import COINCIDE_MM
from morph.geometry.cone import Cone
from morph.settings.job import FlangeSettings

FLANGE_FACES = ("flange", "rim")
"""Names of the flange's own faces: its upper side and its rim."""

ON_BODY_MM = 1e-9
"""Points this near the outline count as inside, so that rounding does not turn a face inside out."""


@dataclass(frozen=True, slots=True)
class FlangeOutline:
    """The outer surface: core of `core` (a radius or a cone), disc of `radius_mm` up to z = `top_mm`."""

    core: float | Cone
    radius_mm: float
    top_mm: float

    def holds(self, r_mm: Floats, z_mm: Floats) -> Bools:
        """Returns (k,) whether points at radius r and height z lie in core or flange, heights below not limited."""
        if isinstance(self.core, Cone):
            core = self.core.radius_mm + z_mm * np.tan(self.core.half_angle_rad)
        else:
            core = np.full(len(z_mm), self.core)
        disc = (r_mm <= self.radius_mm + ON_BODY_MM) & (z_mm <= self.top_mm + ON_BODY_MM)
        return np.asarray((r_mm <= core + ON_BODY_MM) | disc, dtype=np.bool_)

    def core_face(self, stock_mm: float) -> CylinderFace | ConeFace:
        """Returns the endless face of the core."""
        if isinstance(self.core, Cone):
            return ConeFace("core", FaceRole.OUTER, stock_mm, self.core, True)
        return CylinderFace("core", FaceRole.OUTER, stock_mm, self.core, True)


@dataclass(frozen=True, slots=True, eq=False)
class FlangedFace:
    """A face of revolution with two edges: from `start` to `end`, each (r, z) in mm.

    Args:
        name: of the face.
        role: what it is for.
        stock_mm: machining stock on it.
        start: lower or inner edge. end: upper or outer edge.
        normal: (r, z) of the unit normal out of the metal.
        outline: of the body.
        endless: the same surface without edges, for crossings.
    """

    name: str
    role: FaceRole
    stock_mm: float
    start: tuple[float, float]
    end: tuple[float, float]
    normal: tuple[float, float]
    outline: FlangeOutline
    endless: BlankFace

    def _away(self, xyz_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Returns the distance (k,), the way to the nearest place (k, 2) in the half plane, and the sign (k,)."""
        r, z = np.hypot(xyz_mm[:, 0], xyz_mm[:, 1]), np.asarray(xyz_mm[:, 2], dtype=np.float64)
        place, start = np.column_stack([r, z]), np.array(self.start)
        along = np.array(self.end) - start
        share = np.clip(((place - start) @ along) / float(along @ along), 0.0, 1.0)
        way = start + share[:, None] * along - place
        sign = np.where(self.outline.holds(r, z), 1.0, -1.0)
        return np.hypot(way[:, 0], way[:, 1]), way, sign

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3), positive in the metal."""
        distance, _, sign = self._away(xyz_mm)
        return np.asarray(sign * distance, dtype=np.float64)

    def outward(self, xyz_mm: Floats) -> Floats:
        """Returns the unit vectors (k, 3) out of the metal toward the nearest places; on the face its normal."""
        distance, way, sign = self._away(xyz_mm)
        on = distance <= ON_BODY_MM
        flat = np.where(on[:, None], np.array(self.normal), sign[:, None] * way / np.where(on, 1.0, distance)[:, None])
        r = np.hypot(xyz_mm[:, 0], xyz_mm[:, 1])
        safe = np.where(r > 0.0, r, 1.0)[:, None]
        across = np.where(r[:, None] > 0.0, xyz_mm[:, :2] / safe, np.array([[1.0, 0.0]]))
        return np.column_stack([flat[:, :1] * across, flat[:, 1]])


def with_flange(
    faces: list[BlankFace], shape: Shape, flange: FlangeSettings, sheet_low_mm: float
) -> list[BlankFace | FlangedFace]:
    """Returns the faces of the body with its flange: the outer round face shortened, `flange` and `rim` added.

    Args:
        faces: of the body without it.
        shape: its heights and round surfaces.
        flange: radius and height.
        sheet_low_mm: lowest z that the sheet needs.

    Raises:
        SettingError: `flange-misfit` when it is no wider than the body, or covers the sheet.
    """
    core = _core_of(shape)
    foot, top = shape.z_mm[0], shape.z_mm[0] + flange.height_mm
    needed = widest_mm(core.surface, (foot, top))
    if not flange.radius_mm > needed + COINCIDE_MM:
        raise _misfit(f"radius_mm above {needed:.3f} mm, the body's radius there", f"{flange.radius_mm:.3f} mm")
    if not top <= sheet_low_mm + COINCIDE_MM:
        most = sheet_low_mm - foot
        raise _misfit(f"height_mm of at most {most:.3f} mm, below the sheet", f"{flange.height_mm:.3f} mm")
    outline = FlangeOutline(core.surface, flange.radius_mm, top)
    endless = next(face for face in faces if face.name == core.name)
    low, high = (_radius_at(core.surface, z) for z in (top, shape.z_mm[1]))
    angle = core.surface.half_angle_rad if isinstance(core.surface, Cone) else 0.0
    normal = (float(np.cos(angle)), -float(np.sin(angle)))
    short = FlangedFace(core.name, endless.role, 0.0, (low, top), (high, shape.z_mm[1]), normal, outline, endless)
    upper = PlaneFace("flange", FaceRole.OUTER, 0.0, np.array([0.0, 0.0, top]), np.array([0.0, 0.0, 1.0]))
    rim = CylinderFace("rim", FaceRole.OUTER, 0.0, flange.radius_mm, metal_inside=True)
    wide = flange.radius_mm
    return [
        *(short if face is endless else face for face in faces),
        FlangedFace("flange", FaceRole.OUTER, 0.0, (low, top), (wide, top), (0.0, 1.0), outline, upper),
        FlangedFace("rim", FaceRole.OUTER, 0.0, (wide, foot), (wide, top), (1.0, 0.0), outline, rim),
    ]


def _core_of(shape: Shape) -> Round:
    outside = [item for item in shape.rounds if item.metal_inside]
    if len(outside) != 1 or shape.box_mm is not None:
        raise _misfit("a body with one round outer face", "a box" if shape.box_mm is not None else "several")
    return outside[0]


def _radius_at(surface: float | Cone, z_mm: float) -> float:
    return surface.radius_at_mm(z_mm) if isinstance(surface, Cone) else surface


def _misfit(expected: str, found: str) -> SettingError:
    return SettingError(
        "flange-misfit",
        expected=f"a flange with {expected}" if expected.startswith(("radius", "height")) else expected,
        found=found,
        where="[blank] flange",
        do="Widen or lower the flange, or raise margin_mm below the sheet.",
    )
