"""What the solid stage hands on: the channel solid and the insert cut by it.

`trimmed` and the insert's mesh are already as a file holds them: vertices representable in float32,
welded, no triangle of zero area; what is checked is what is written.
"""

from __future__ import annotations

from dataclasses import dataclass

from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints
from morph.geometry.mesh import Mesh


@dataclass(frozen=True, slots=True, eq=False)
class ChannelSolid:
    """The channels as a closed body.

    Args:
        swept: the field's surface with its overshoots past every exit, before trimming.
        trimmed: the same inside the finished blank (channels.stl).
        h_mm: field resolution. crossings: crossing triangle pairs found in `swept` (must be 0).
        triangles_before: triangles before simplification.
    """

    swept: Mesh
    trimmed: Mesh
    h_mm: float
    crossings: int
    triangles_before: int


@dataclass(frozen=True, slots=True, eq=False)
class Opening:
    """A hole in the skin of the insert where channel wall meets outer skin.

    Args:
        loop_mm: (k, 3) its rim in order. centre_mm: (3,) area centroid of the rim.
        diameter_mm: of the circle of equal area. face: the blank face it lies on.
    """

    loop_mm: Floats
    centre_mm: Floats
    diameter_mm: float
    face: str

    def __post_init__(self) -> None:
        object.__setattr__(self, "loop_mm", frozen_floats("loop_mm", self.loop_mm, (None, 3)))
        object.__setattr__(self, "centre_mm", frozen_floats("centre_mm", self.centre_mm, (3,)))


@dataclass(frozen=True, slots=True, eq=False)
class Insert:
    """The insert as printed (stock included), part frame.

    Args:
        mesh: closed body. channel_triangle: (m,) 1 where the triangle is channel wall, else 0.
        blank_volume_mm3: of the printed blank before cutting. blank_genus: of that blank.
        openings: found on the mesh, by rim.
    """

    mesh: Mesh
    channel_triangle: Ints
    blank_volume_mm3: float
    blank_genus: int
    openings: tuple[Opening, ...]

    def __post_init__(self) -> None:
        label = frozen_ints("channel_triangle", self.channel_triangle, (len(self.mesh.triangles),), below=2)
        object.__setattr__(self, "channel_triangle", label)
