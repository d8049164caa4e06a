"""A cylinder carrier about the z axis, in closed form.

The sheet is developed on the cylinder of radius `true_radius_mm` (at depth, or at the face), where it
keeps every length; at any other radius the circumferential lengths scale by radius / true radius.
The sheet's centre lies at angle 0 (+x) and z = 0, sheet y runs along +z. Which way x turns depends
on the side the drawing is read from: seen from outside the axis x grows with the angle, seen from
the axis against it. Limits: one full turn, and a centreline that stays clear of the axis.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import GeometryError
from morph.settings.job import CarrierSettings, Metal, Seam, SeenFrom, TrueAt
from morph.surface.limits import LEAST_RADIUS_MM, TURN_SLACK, closed_radius_mm, require_positive


@dataclass(frozen=True, slots=True)
class CylinderCarrier:
    """The Carrier of a core (metal toward the axis) or of a jacket or cavity (away from it).

    Args:
        radius_mm: radius of the finished part face.
        metal: on which side of it the metal lies.
        true_radius_mm: radius at which the sheet keeps its lengths.
        size_mm: width and height of the sheet.
        turn: +1 when sheet x grows with the angle about z, -1 when it falls.
        depth_mm: depth of the centrelines the sheet is laid for.
    """

    radius_mm: float
    metal: Metal
    true_radius_mm: float
    size_mm: tuple[float, float]
    turn: float
    depth_mm: float

    @property
    def side(self) -> float:
        """Returns +1 when a point deeper in the metal is nearer to the axis, else -1."""
        return 1.0 if self.metal is Metal.TOWARD_AXIS else -1.0

    @property
    def turn_mm(self) -> float:
        """Returns the sheet width of one turn."""
        return 2.0 * math.pi * self.true_radius_mm

    def sheet_z_mm(self) -> tuple[float, float]:
        """Returns the lowest and the highest z the sheet reaches."""
        return -0.5 * self.size_mm[1], 0.5 * self.size_mm[1]

    def radius_at_mm(self, depth_mm: float | Floats) -> float | Floats:
        """Returns the radius of the surface `depth_mm` into the metal."""
        return self.radius_mm - self.side * depth_mm

    def angle_rad(self, sheet_mm: Floats) -> Floats:
        """Returns the angle (k,) about z of the sheet points (k, 2)."""
        return np.asarray(self.turn * (sheet_mm[:, 0] - 0.5 * self.size_mm[0]) / self.true_radius_mm, dtype=np.float64)

    def point_mm(self, sheet_mm: Floats, depth_mm: float | Floats) -> Floats:
        """Returns the points (k, 3) that lie `depth_mm` (one number or (k,)) below the sheet points (k, 2)."""
        angle = self.angle_rad(sheet_mm)
        radius = self.radius_at_mm(depth_mm)
        height = sheet_mm[:, 1] - 0.5 * self.size_mm[1]
        return np.column_stack([radius * np.cos(angle), radius * np.sin(angle), height])

    def into_metal(self, sheet_mm: Floats) -> Floats:
        """Returns the unit vectors (k, 3) from the face into the metal."""
        angle = self.angle_rad(sheet_mm)
        return -self.side * np.column_stack([np.cos(angle), np.sin(angle), np.zeros_like(angle)])

    def jacobian(self, sheet_mm: Floats, depth_mm: float) -> Floats:
        """Returns d point / d (x, y) as (k, 3, 2), dimensionless, at `depth_mm`."""
        angle = self.angle_rad(sheet_mm)
        scale = self.turn * self.radius_at_mm(depth_mm) / self.true_radius_mm
        result = np.zeros((len(angle), 3, 2))
        result[:, 0, 0] = -scale * np.sin(angle)
        result[:, 1, 0] = scale * np.cos(angle)
        result[:, 2, 1] = 1.0
        return result

    def shape_operator(self, sheet_mm: Floats) -> Floats:
        """Returns S as (k, 2, 2) in 1/mm with J_d = J (I - d S): 1 / radius around, 0 along the axis."""
        result = np.zeros((len(sheet_mm), 2, 2))
        result[:, 0, 0] = self.side / self.radius_mm
        return result

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the signed distance (k,) of points (k, 3) from the face, positive in the metal."""
        return np.asarray(self.side * (self.radius_mm - np.hypot(xyz_mm[:, 0], xyz_mm[:, 1])), dtype=np.float64)

    def develop(self, xyz_mm: Floats) -> Floats:
        """Returns sheet x, sheet y and depth (k, 3) of points (k, 3): the inverse of `point_mm`, angle in (-pi, pi]."""
        angle = np.arctan2(xyz_mm[:, 1], xyz_mm[:, 0])
        across = 0.5 * self.size_mm[0] + self.turn * self.true_radius_mm * angle
        return np.column_stack([across, xyz_mm[:, 2] + 0.5 * self.size_mm[1], self.distance_mm(xyz_mm)])


def make_cylinder(
    settings: CarrierSettings,
    size_mm: tuple[float, float],
    seen_from: SeenFrom,
    depth_mm: float,
    seam: Seam = Seam.OPEN,
) -> CylinderCarrier:
    """Returns the cylinder carrier of a job.

    Args:
        settings: the [carrier] table.
        size_mm: width and height of the sheet.
        seen_from: from which side the drawing reads.
        depth_mm: depth of the centrelines below the face.
        seam: joined: the sheet goes all the way round and is stretched to close exactly.

    Raises:
        SettingError: `carrier-not-positive` when radius, depth or sheet size is not a positive number.
        GeometryError: `depth-past-axis` when the centreline reaches the axis of a core;
            `sheet-wraps-past-itself` when the sheet is wider than one turn; `seam-width` when a joined sheet
            is not one turn wide.

    >>> core = CarrierSettings(radius_mm=30.0, metal=Metal.TOWARD_AXIS)
    >>> make_cylinder(core, (60.0, 40.0), SeenFrom.PART, 8.0).true_radius_mm
    22.0
    """
    require_positive(settings.radius_mm, size_mm, depth_mm)
    toward = settings.metal is Metal.TOWARD_AXIS
    at_depth_mm = settings.radius_mm - depth_mm if toward else settings.radius_mm + depth_mm
    if at_depth_mm < LEAST_RADIUS_MM:
        raise GeometryError(
            "depth-past-axis",
            expected=f"at most {settings.radius_mm - LEAST_RADIUS_MM:.3f} mm "
            f"(carrier radius {settings.radius_mm:.3f} mm less {LEAST_RADIUS_MM:.1f} mm clear of the axis)",
            found=f"a channel depth of {depth_mm:.3f} mm",
            where="[carrier] depth",
            do="Lower depth_mm or wall_to_face_mm, or raise radius_mm.",
        )
    true_mm = at_depth_mm if settings.true_at is TrueAt.DEPTH else settings.radius_mm
    if seam is Seam.JOINED:
        true_mm = closed_radius_mm(size_mm[0], true_mm, "where lengths are true")
    turn_mm = 2.0 * math.pi * true_mm
    if size_mm[0] > turn_mm * (1.0 + TURN_SLACK):
        raise GeometryError(
            "sheet-wraps-past-itself",
            expected=f"at most {turn_mm:.3f} mm, one turn at radius {true_mm:.3f} mm where lengths are true",
            found=f"a sheet {size_mm[0]:.3f} mm wide",
            where="[layout] size_mm on [carrier]",
            do="Narrow the sheet, raise radius_mm, or keep lengths true at the larger of face and depth (true_at).",
        )
    from_outside = toward == (seen_from is SeenFrom.PART)
    return CylinderCarrier(
        settings.radius_mm, settings.metal, true_mm, size_mm, 1.0 if from_outside else -1.0, depth_mm
    )
