"""The wrapped graph: the channel graph laid on its carrier at depth.

Every sheet sample maps through the carrier, so a sheet point and its 3D point agree to 1e-9 mm;
lengths are integrals of |J t| along the sheet curve, not chords.
"""

from __future__ import annotations

from dataclasses import dataclass

from morph.core.arrays import Floats, frozen_floats
from morph.layout.graph import ChannelGraph
from morph.surface.carrier import Carrier


@dataclass(frozen=True, slots=True, eq=False)
class WrappedBranch:
    """A branch in the part frame, sample by sample beside the layout's branch of the same id.

    Args:
        id: the branch id.
        xyz_mm: (k, 3) centreline. tangent: (k, 3) unit. into_metal: (k, 3) unit, away from the part face.
        length_mm: arc length at depth by quadrature.
    """

    id: str
    xyz_mm: Floats
    tangent: Floats
    into_metal: Floats
    length_mm: float

    def __post_init__(self) -> None:
        points = frozen_floats("xyz_mm", self.xyz_mm, (None, 3))
        object.__setattr__(self, "xyz_mm", points)
        for name in ("tangent", "into_metal"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (len(points), 3)))


@dataclass(frozen=True, slots=True)
class Distortion:
    """How far the map is from keeping the sheet, over the channels at depth, as ratios minus 1.

    `length_error_max`, `length_error_rms` over both principal stretches; `area_error_max`;
    `angle_error_max_deg`; `face_scale`: length on the face over length on the sheet along x.
    """

    length_error_max: float
    length_error_rms: float
    area_error_max: float
    angle_error_max_deg: float
    face_scale: float


@dataclass(frozen=True, slots=True, eq=False)
class WrappedGraph:
    """The layout on its carrier: `branches[i]` belongs to `graph.branches[i]`, `nodes_mm (n, 3)` likewise."""

    graph: ChannelGraph
    carrier: Carrier
    depth_mm: float
    nodes_mm: Floats
    branches: tuple[WrappedBranch, ...]
    distortion: Distortion

    def __post_init__(self) -> None:
        object.__setattr__(self, "nodes_mm", frozen_floats("nodes_mm", self.nodes_mm, (len(self.graph.nodes), 3)))
