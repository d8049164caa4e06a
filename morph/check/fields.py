"""What the report colours: wall and bore along every branch, and bore, wall and ceiling angle over the channels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.blank import Blank
from morph.body.face import FaceRole
from morph.body.section import reach_mm
from morph.check.centreline import Centrelines
from morph.check.channel_wall import nearest_samples
from morph.check.flat_patch import ceiling_angles_deg
from morph.core.arrays import Floats, frozen_floats
from morph.geometry.mesh import Mesh, triangle_normals


@dataclass(frozen=True, slots=True, eq=False)
class BranchField:
    """Along the samples of one branch: wall to the nearest finished part face (k,) and bore as written (k,), mm.

    A blank without a part face gives the wall to the nearest face of any kind.
    """

    id: str
    wall_mm: Floats
    bore_mm: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "bore_mm", frozen_floats("bore_mm", self.bore_mm, (None,)))
        object.__setattr__(self, "wall_mm", frozen_floats("wall_mm", self.wall_mm, (len(self.bore_mm),)))


@dataclass(frozen=True, slots=True, eq=False)
class ChannelFields:
    """Measured figures for drawing.

    Args:
        branches: one per plan branch, in plan order.
        bore_mm: (n,) bore as written at the sample each vertex of the trimmed channels belongs to.
        wall_mm: (n,) wall to the nearest finished part face at that sample: all around a channel the same, as the
            far side of a channel is no wall.
        ceiling_deg: (n,) 0 level ceiling, 90 upright, 180 floor.
    """

    branches: tuple[BranchField, ...]
    bore_mm: Floats
    wall_mm: Floats
    ceiling_deg: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "bore_mm", frozen_floats("bore_mm", self.bore_mm, (None,)))
        for name in ("wall_mm", "ceiling_deg"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (len(self.bore_mm),)))


def vertex_normals(mesh: Mesh) -> Floats:
    """Returns the area-weighted unit normals (n, 3) of the vertices of `mesh`; (0, 0, 0) where nothing meets."""
    normals, area_mm2 = triangle_normals(mesh)
    corner, n = mesh.triangles.reshape(-1), len(mesh.vertices_mm)
    weighted = np.repeat(normals * area_mm2[:, None], 3, axis=0)
    total = np.stack([np.bincount(corner, weighted[:, axis], n) for axis in range(3)], axis=1)
    length = np.linalg.norm(total, axis=1)
    return np.asarray(total / np.where(length > 0.0, length, 1.0)[:, None], dtype=np.float64)


def make_fields(lines: Centrelines, bore_mm: Floats, channels: Mesh, blank: Blank, direction: Floats) -> ChannelFields:
    """Returns the fields of a plan.

    Args:
        lines: its centrelines.
        bore_mm: (n,) measured bores at their samples.
        channels: the trimmed channels, facing outwards (out of the channel).
        blank: the finished body.
        direction: (3,) unit build direction.
    """
    faces = [face for face in blank.faces if face.role is FaceRole.PART] or list(blank.faces)
    walls = [
        face.distance_mm(lines.xyz_mm) - reach_mm(bore_mm, face.outward(lines.xyz_mm), lines.plan.section)
        for face in faces
    ]
    wall = np.asarray(np.min(walls, axis=0), dtype=np.float64)
    spans = zip(lines.plan.branches, lines.first[:-1], lines.first[1:], strict=True)
    branches = tuple(BranchField(branch.id, wall[low:high], bore_mm[low:high]) for branch, low, high in spans)
    sample = nearest_samples(lines, channels.vertices_mm)
    return ChannelFields(
        branches,
        bore_mm[sample],
        wall[sample],
        ceiling_angles_deg(-vertex_normals(channels), direction),
    )
