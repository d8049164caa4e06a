"""Holes that channels keep clear of: clipped to the body, with the exact distance to their wall.

A hole is a flat-ended cylinder. A hole without a depth goes through the first stretch of metal it
meets; one with a depth is kept over the stretch that lies in the body.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from morph.body.face import ConeFace, CylinderFace, Face, PlaneFace
from morph.body.skin_face import SkinFace
from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import GeometryError, SettingError
from morph.core.tolerance import COINCIDE_MM
from morph.settings.job import HoleSettings, ServiceSettings


@dataclass(frozen=True, slots=True, eq=False)
class Hole:
    """A pin, screw, dowel or sensor hole kept clear: from `start_mm (3,)` along unit `axis (3,)` for `length_mm`."""

    id: str
    start_mm: Floats
    axis: Floats
    length_mm: float
    diameter_mm: float
    wall_mm: float

    def __post_init__(self) -> None:
        object.__setattr__(self, "start_mm", frozen_floats("start_mm", self.start_mm, (3,)))
        object.__setattr__(self, "axis", frozen_floats("axis", self.axis, (3,)))


def distance_to_hole_mm(hole: Hole, xyz_mm: Floats) -> Floats:
    """Returns the distance (k,) of points (k, 3) from the surface of `hole`, negative inside it."""
    offset = xyz_mm - hole.start_mm
    along = offset @ hole.axis
    across = np.linalg.norm(offset - along[:, None] * hole.axis, axis=1) - 0.5 * hole.diameter_mm
    beyond = np.maximum(-along, along - hole.length_mm)
    outside = np.hypot(np.maximum(across, 0.0), np.maximum(beyond, 0.0))
    return np.asarray(outside + np.minimum(np.maximum(across, beyond), 0.0), dtype=np.float64)


def line_crossings(face: Face, start_mm: Floats, axis: Floats) -> list[float]:
    """Returns where the line from `start_mm (3,)` along unit `axis (3,)` meets `face`, in mm along it."""
    face = getattr(face, "endless", face)
    if isinstance(face, PlaneFace):
        slope = float(face.normal @ axis)
        return [] if abs(slope) < 1e-12 else [float((face.origin_mm - start_mm) @ face.normal) / slope]
    if isinstance(face, ConeFace):
        return face.cone.line_crossings_mm(start_mm, axis)
    if isinstance(face, SkinFace):
        return face.line_crossings_mm(start_mm, axis)
    if isinstance(face, CylinderFace):
        # (p + t a)^2 = r^2 in the xy plane: A t^2 + 2 B t + C = 0.
        a = float(axis[:2] @ axis[:2])
        b = float(axis[:2] @ start_mm[:2])
        c = float(start_mm[:2] @ start_mm[:2]) - face.radius_mm**2
        root = b * b - a * c
        if a < 1e-18 or root <= 0.0:
            return []
        return [(-b - root**0.5) / a, (-b + root**0.5) / a]
    raise TypeError(f"no line crossings for a {type(face).__name__}")


def metal_stretches(faces: Sequence[Face], start_mm: Floats, axis: Floats) -> list[tuple[float, float]]:
    """Returns the stretches of a line that lie in the metal of `faces`, in mm along it, in order."""
    places = sorted(place for face in faces for place in line_crossings(face, start_mm, axis))
    found: list[tuple[float, float]] = []
    for low, high in itertools.pairwise(places):
        middle = (start_mm + 0.5 * (low + high) * axis)[None, :]
        if high - low > COINCIDE_MM and all(float(face.distance_mm(middle)[0]) > 0.0 for face in faces):
            if found and low - found[-1][1] <= COINCIDE_MM:
                found[-1] = (found[-1][0], high)
            else:
                found.append((low, high))
    return found


def make_hole(number: int, settings: HoleSettings, faces: Sequence[Face], service: ServiceSettings) -> Hole:
    """Returns hole `number` (counted from 1; id "H1" ...) clipped to the body of `faces`.

    Raises:
        SettingError: `hole-not-a-hole` when diameter, depth or axis is zero, or the wall negative.
        GeometryError: `hole-misses-body` when its axis meets no metal ahead of its start.
    """
    where = f"[[hole]] number {number}"
    length = float(np.linalg.norm(settings.axis))
    depth = settings.depth_mm
    wall = service.wall_hole_mm if settings.wall_mm is None else settings.wall_mm
    if not (settings.diameter_mm > 0.0 and length > 0.0 and (depth is None or depth > 0.0) and wall >= 0.0):
        raise SettingError(
            "hole-not-a-hole",
            expected="diameter_mm and depth_mm above 0 mm, wall_mm not below 0 mm, and an axis with a direction",
            found=f"diameter {settings.diameter_mm} mm, depth {depth} mm, wall {wall} mm, axis {list(settings.axis)}",
            where=where,
            do="Correct the hole, or leave it out.",
        )
    axis = np.array(settings.axis, dtype=np.float64) / length
    start = np.array(settings.at_mm, dtype=np.float64)
    ahead = [s for s in metal_stretches(faces, start, axis) if s[1] > COINCIDE_MM]
    if depth is not None:
        ahead = [(max(low, 0.0), min(high, depth)) for low, high in ahead if low < depth - COINCIDE_MM]
    if not ahead:
        raise GeometryError(
            "hole-misses-body",
            expected="an axis that runs from at_mm into the metal of the blank",
            found=f"no metal ahead of ({start[0]:.3f}, {start[1]:.3f}, {start[2]:.3f}) mm along {list(settings.axis)}",
            where=where,
            do="Put at_mm on the face the hole starts from and point its axis into the metal.",
        )
    low, high = ahead[0] if depth is None else (ahead[0][0], ahead[-1][1])
    return Hole(f"H{number}", start + low * axis, axis, high - low, settings.diameter_mm, wall)
