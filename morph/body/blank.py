"""The blank: the body before the channels are cut, as a list of named faces around one metal region.

A blank is an outer primitive (cylinder about z, or box) cut to the metal side of the carrier, with
an optional inner bore. The faces carry roles and machining stock; solid/cut.py turns the record
into a mesh, finished or as printed.
"""

from __future__ import annotations

from dataclasses import dataclass

from morph.body.face import CylinderFace, PlaneFace
from morph.core.arrays import Floats, frozen_floats


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


@dataclass(frozen=True, slots=True, eq=False)
class Blank:
    """The finished body and the stock on it.

    Args:
        faces: all faces; a point is in the finished metal when every face's distance is positive.
        z_mm: lowest and highest finished z of the body.
        outer_radius_mm: radius of the outer cylinder about z, or None for a box.
        inner_radius_mm: radius of the bore about z, or None when solid.
        box_mm: (2, 3) lowest and highest corner of the box, or None. A box may be cut by
            `outer_radius_mm` (metal toward the axis) or by `inner_radius_mm` (away from it).
        holes: kept clear by channels and leads. Holes are made later and are not cut.
    """

    faces: tuple[PlaneFace | CylinderFace, ...]
    z_mm: tuple[float, float]
    outer_radius_mm: float | None
    inner_radius_mm: float | None
    box_mm: Floats | None
    holes: tuple[Hole, ...] = ()

    def __post_init__(self) -> None:
        if self.box_mm is not None:
            object.__setattr__(self, "box_mm", frozen_floats("box_mm", self.box_mm, (2, 3)))

    def face(self, name: str) -> PlaneFace | CylinderFace:
        """Returns the face called `name`; KeyError when there is none."""
        for face in self.faces:
            if face.name == name:
                return face
        raise KeyError(name)
