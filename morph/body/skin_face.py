"""Faces of a mesh blank: a flat region at the end of the body, and any other region of its skin.

A flat face lies in a plane that has the whole body behind it. Inside the body the way to such a plane
first leaves the skin, so the least distance over all faces is still the exact distance to the skin, although the
plane carries on past the region; places outside the region lie outside the other faces.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.face import FaceRole, PlaneFace
from morph.body.skin import ON_SKIN_MM, WHOLE, Skin
from morph.core.arrays import Floats
from morph.core.tolerance import COINCIDE_MM

MOST_STEPS = 30
"""Steps of a grid of places to either side of a port."""


@dataclass(frozen=True, slots=True, eq=False)
class SkinFace:
    """A region of the skin that need not be flat; distances are exact to its triangles.

    Args:
        name: of the face.
        role: what it is for.
        stock_mm: always 0: only flat faces carry stock.
        skin: of the body.
        region: its index there.
    """

    name: str
    role: FaceRole
    stock_mm: float
    skin: Skin
    region: int

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the distance (k,) of points (k, 3) from the region, positive in the metal of the body.

        Outside the body it is negative where the region is what the point has come out of, the skin nearest to it; a
        point that has come out of another face is not far outside this one.
        """
        distance, _, _ = self.skin.nearest(self.region, xyz_mm)
        return self._sign(xyz_mm, distance) * distance

    def _sign(self, xyz_mm: Floats, distance_mm: Floats) -> Floats:
        least, _, _ = self.skin.nearest(WHOLE, xyz_mm)
        behind = self.skin.in_metal(xyz_mm) | (distance_mm > least + COINCIDE_MM)
        return np.where(behind, 1.0, -1.0)

    def outward(self, xyz_mm: Floats) -> Floats:
        """Returns the unit vectors (k, 3) out of the metal toward the nearest places; on the skin its normal."""
        distance, triangle, point = self.skin.nearest(self.region, xyz_mm)
        sign = self._sign(xyz_mm, distance)
        on = distance <= ON_SKIN_MM
        toward = sign[:, None] * (point - xyz_mm) / np.where(on, 1.0, distance)[:, None]
        corner = self.skin.mesh.vertices_mm[self.skin.mesh.triangles[triangle[on]]]
        cross = np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0])
        length = np.linalg.norm(cross, axis=1, keepdims=True)
        toward[on] = cross / np.where(length > 0.0, length, 1.0)
        return np.asarray(toward, dtype=np.float64)

    def line_crossings_mm(self, start_mm: Floats, axis: Floats) -> list[float]:
        """Returns where the line from `start_mm (3,)` along unit `axis (3,)` meets the region, in mm along it."""
        return self.skin.crossings(self.region, start_mm, axis)


@dataclass(frozen=True, slots=True, eq=False)
class FlatFace(PlaneFace):
    """A flat region of the skin in a plane with the whole body behind it; distances are those to the plane.

    Args:
        skin: of the body.
        region: its index there.
    """

    skin: Skin
    region: int

    def nearest_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the nearest places (k, 3) of the region itself, in its plane, to points (k, 3)."""
        _, _, point = self.skin.nearest(self.region, xyz_mm)
        return np.asarray(point + self.distance_mm(point)[:, None] * self.normal, dtype=np.float64)

    def grid_mm(self, port_mm: Floats, step_mm: float) -> Floats:
        """Returns places (k, 3) of the region on a square grid through the foot of the port's perpendicular.

        Args:
            port_mm: (3,) aligns the grid; it reaches MOST_STEPS steps to either side of the region's nearest place.
            step_mm: of the grid.
        """
        across = _across(self.normal)
        corners = self.skin.mesh.vertices_mm[self.skin.mesh.triangles[self.skin.region == self.region]].reshape(-1, 3)
        low, high = (corners @ across.T).min(axis=0), (corners @ across.T).max(axis=0)
        foot = port_mm @ across.T
        near = self.nearest_mm(port_mm[None, :])[0] @ across.T
        lines = []
        for k in range(2):
            first = np.ceil((max(low[k], near[k] - MOST_STEPS * step_mm) - foot[k]) / step_mm)
            last = np.floor((min(high[k], near[k] + MOST_STEPS * step_mm) - foot[k]) / step_mm)
            lines.append(foot[k] + step_mm * np.arange(first, last + 1))
        u, v = np.meshgrid(lines[0], lines[1])
        flat = u.ravel()[:, None] * across[0] + v.ravel()[:, None] * across[1]
        places = flat + float(self.origin_mm @ self.normal) * self.normal
        if len(places) == 0:
            return self.nearest_mm(port_mm[None, :])
        distance, _, _ = self.skin.nearest(self.region, places)
        return np.asarray(places[distance <= ON_SKIN_MM], dtype=np.float64)


def _across(normal: Floats) -> Floats:
    """Returns two unit vectors (2, 3) square to `normal (3,)` and to each other, along part axes where they can be."""
    first = np.eye(3)[int(np.argmin(np.round(np.abs(normal), 9)))]
    first = first - (first @ normal) * normal
    first /= np.linalg.norm(first)
    return np.stack([first, np.cross(normal, first)])
