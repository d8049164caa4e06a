"""The surface at depth: every vertex moved into the metal along its fitted normal, and where that is impossible.

Beyond the focal radius of a convex place (1 / curvature) the offset turns inside out. Two signs of it, neither
implied by the other: triangles of the offset that face the other way, and curvature times depth of 1 or more.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, frozen_bools, frozen_floats
from morph.geometry.mesh import Mesh
from morph.geometry.surface import Surface, make_surface
from morph.surface.guide import Guide


@dataclass(frozen=True, slots=True, eq=False)
class OffsetSurface:
    """The offset of a guide.

    Args:
        surface: the same triangles as the guide's face, moved.
        turned: (m,) triangles that face the other way than on the face.
        focal: (n,) curvature times depth at the vertices, largest principal curvature; 1 is the focus.
    """

    surface: Surface
    turned: Bools
    focal: Floats

    def __post_init__(self) -> None:
        mesh = self.surface.mesh
        object.__setattr__(self, "turned", frozen_bools("turned", self.turned, (len(mesh.triangles),)))
        object.__setattr__(self, "focal", frozen_floats("focal", self.focal, (len(mesh.vertices_mm),)))


def offset_surface(guide: Guide, depth_mm: float) -> OffsetSurface:
    """Returns the face of `guide` moved `depth_mm` into the metal; 0 gives the smoothed face itself."""
    mesh, fit = guide.face.mesh, guide.fit
    smooth = make_surface(Mesh(fit.xyz_mm, mesh.triangles), guide.face.adjacency)
    moved = make_surface(Mesh(fit.xyz_mm - depth_mm * fit.normals, mesh.triangles), guide.face.adjacency)
    # the closing of a hole is nobody's surface: its thin triangles may turn
    turned = ((moved.normals * smooth.normals).sum(axis=1) < 0.0) & ~guide.filled
    return OffsetSurface(moved, turned, fit.curvature[:, 0] * depth_mm)


def focal_depth_mm(guide: Guide) -> Floats:
    """Returns the depth (n,) of the focus below every vertex of the guide's face, infinite where it is not convex."""
    largest = guide.fit.curvature[:, 0]
    return np.where(largest > 0.0, 1.0 / np.where(largest > 0.0, largest, 1.0), np.inf)
