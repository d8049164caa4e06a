"""A round cone about the z axis: exact distance, normal, offset and line crossings.

The cone is the surface r = radius_mm + z tan(half angle) with r >= 0, one nappe that ends at its apex.
In the half plane through the axis it is a straight ray, so everything is plane geometry.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats


@dataclass(frozen=True, slots=True)
class Cone:
    """A cone with `radius_mm` at z = 0, widening upwards when `half_angle_rad` > 0, narrowing when < 0.

    >>> round(Cone(30.0, math.radians(20.0)).apex_mm, 6)
    -82.424323
    """

    radius_mm: float
    half_angle_rad: float

    @property
    def apex_mm(self) -> float:
        """Returns the z of the apex."""
        return -self.radius_mm / math.tan(self.half_angle_rad)

    def radius_at_mm(self, z_mm: float) -> float:
        """Returns the radius at height `z_mm`; negative past the apex."""
        return self.radius_mm + z_mm * math.tan(self.half_angle_rad)

    def offset(self, outward_mm: float) -> Cone:
        """Returns the cone `outward_mm` away from this one along its normals, positive away from the axis."""
        return Cone(self.radius_mm + outward_mm / math.cos(self.half_angle_rad), self.half_angle_rad)

    def along_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the place (k,) of points (k, 3) along the meridian, upwards, 0 at the height z = 0 of the surface."""
        sine, cosine = math.sin(self.half_angle_rad), math.cos(self.half_angle_rad)
        radius = np.hypot(xyz_mm[:, 0], xyz_mm[:, 1])
        return np.asarray((radius - self.radius_mm) * sine + xyz_mm[:, 2] * cosine, dtype=np.float64)

    def above_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the height (k,) of points (k, 3) over the meridian's line, positive away from the axis."""
        sine, cosine = math.sin(self.half_angle_rad), math.cos(self.half_angle_rad)
        radius = np.hypot(xyz_mm[:, 0], xyz_mm[:, 1])
        return np.asarray((radius - self.radius_mm) * cosine - xyz_mm[:, 2] * sine, dtype=np.float64)

    def past_apex(self, xyz_mm: Floats) -> np.ndarray:
        """Returns (k,) true where the apex is the nearest point of the cone."""
        return np.asarray(self.radius_mm + self.along_mm(xyz_mm) * math.sin(self.half_angle_rad) < 0.0)

    def outside_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the exact distance (k,) of points (k, 3), positive away from the axis or past the apex."""
        to_apex = np.hypot(np.hypot(xyz_mm[:, 0], xyz_mm[:, 1]), xyz_mm[:, 2] - self.apex_mm)
        return np.asarray(np.where(self.past_apex(xyz_mm), to_apex, self.above_mm(xyz_mm)), dtype=np.float64)

    def outward(self, xyz_mm: Floats) -> Floats:
        """Returns the unit normals (k, 3) away from the axis at the nearest points; on the axis itself toward +x.

        Past the apex it is the direction from the apex to the point.
        """
        sine, cosine = math.sin(self.half_angle_rad), math.cos(self.half_angle_rad)
        radius = np.hypot(xyz_mm[:, 0], xyz_mm[:, 1])
        safe = np.where(radius > 0.0, radius, 1.0)
        across = np.where(radius[:, None] > 0.0, xyz_mm[:, :2] / safe[:, None], np.array([[1.0, 0.0]]))
        normal = np.column_stack([cosine * across, np.full(len(xyz_mm), -sine)])
        past = self.past_apex(xyz_mm)
        if past.any():
            away = xyz_mm[past] - np.array([0.0, 0.0, self.apex_mm])
            normal[past] = away / np.linalg.norm(away, axis=1)[:, None]
        return normal

    def line_crossings_mm(self, start_mm: Floats, axis: Floats) -> list[float]:
        """Returns where the line from `start_mm (3,)` along unit `axis (3,)` meets the cone, in mm along it, in order.

        x^2 + y^2 = (radius + z tan a)^2 along the line is A t^2 + 2 B t + C = 0; crossings of the other nappe
        are left out.
        """
        slope = math.tan(self.half_angle_rad)
        radius = self.radius_at_mm(float(start_mm[2]))
        rate = slope * float(axis[2])
        a = float(axis[:2] @ axis[:2]) - rate * rate
        b = float(axis[:2] @ start_mm[:2]) - radius * rate
        c = float(start_mm[:2] @ start_mm[:2]) - radius * radius
        if abs(a) < 1e-12:
            places = [] if abs(b) < 1e-12 else [-0.5 * c / b]
        else:
            root = b * b - a * c
            if root <= 0.0:
                return []
            places = sorted([(-b - math.sqrt(root)) / a, (-b + math.sqrt(root)) / a])
        return [t for t in places if radius + t * rate >= 0.0]
