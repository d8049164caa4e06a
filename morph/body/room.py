"""How large a bore may be at a place: the one answer for caps, sizing bounds, leads and wall checks.

A wall is what is left between a channel and a neighbour after the bands have been spent: position
plus half the bore band. Every limit is the worse of service and process. For a bore b at distance d
from a face the wall is d - b/2, so the room follows in closed form:

(with b/2 the reach of a round section; a roof that looks at the neighbour reaches further, see section.py)

    part face   b <= min(2 (d - band - wall), (d - band) / (1/2 + wall in bores))
    outer face  b <= 2 (d - band - wall)
    hole        the same with the distance to the hole's wall
    channel     b <= 2 (d - band - wall) - b' of the neighbour (neighbour.py)
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from morph.body.blank import Blank
from morph.body.face import Face, FaceRole
from morph.body.hole import Hole, distance_to_hole_mm
from morph.body.section import SectionRule, bore_of_reach_mm, make_section_rule
from morph.core.arrays import Bools, Floats, Ints, unit_rows
from morph.core.tolerance import BUILD_MM
from morph.settings.job import SectionSettings, ServiceSettings
from morph.settings.profile import Profile
from morph.surface.wrap import bore_range_mm

STEEPNESS = 0.5
"""A channel is on its way out of a face while it nears it by at least this per mm (30 degrees to the face)."""


@dataclass(frozen=True, slots=True)
class Limits:
    """The walls every bore must leave, the bands to spend first, and the bores allowed, all in mm.

    Args:
        face_mm: least wall to a part face. face_bores: and at least this many bores.
        outer_mm: least wall to any other face. between_mm: least wall between channels.
        process_mm: thinnest wall the process prints; every wall is at least this.
        band_mm: position band, half the bore band, and what meshing may take (BUILD_MM).
        least_bore_mm: no bore is lowered below it. greatest_bore_mm: none is raised above it.
        section: how the channels are shaped.
    """

    face_mm: float
    face_bores: float
    outer_mm: float
    between_mm: float
    process_mm: float
    band_mm: float
    least_bore_mm: float
    greatest_bore_mm: float
    section: SectionRule = field(default_factory=SectionRule)


def wall_band_mm(profile: Profile) -> float:
    """Returns what a wall loses before it is judged: the position band plus half the bore band."""
    return profile.position_band_mm.value + 0.5 * profile.bore_band_mm.value


def make_limits(
    section: SectionSettings,
    service: ServiceSettings,
    profile: Profile,
    up: tuple[float, float, float] = (0.0, 0.0, 1.0),
) -> Limits:
    """Returns the limits of a job, each the worse of service and process; roofs point `up`.

    Raises:
        SettingError: `bore-range-empty`.
    """
    process = profile.wall_mm.value
    least, greatest = bore_range_mm(section, service, profile)
    return Limits(
        face_mm=max(service.wall_face_mm, process),
        face_bores=service.wall_face_bores,
        outer_mm=max(service.wall_outer_mm, process),
        between_mm=max(service.wall_between_mm, process),
        process_mm=process,
        band_mm=wall_band_mm(profile) + BUILD_MM,
        least_bore_mm=least,
        greatest_bore_mm=greatest,
        section=make_section_rule(section, profile, up),
    )


@dataclass(frozen=True, slots=True, eq=False)
class Room:
    """The largest bore (k,) that fits at each place and what limits it, as an index (k,) into `names`."""

    room_mm: Floats
    by: Ints
    names: tuple[str, ...]

    def by_names(self) -> tuple[str, ...]:
        """Returns the name of what limits the bore at each place."""
        return tuple(self.names[i] for i in self.by)


def face_wall_mm(face: Face, bore_mm: Floats, limits: Limits) -> Floats:
    """Returns the wall (k,) that bores (k,) must leave to `face`, before bands."""
    if face.role is not FaceRole.PART:
        return np.full(len(bore_mm), limits.outer_mm)
    return np.maximum(limits.face_mm, limits.face_bores * bore_mm)


def room_to_face_mm(face: Face, xyz_mm: Floats, limits: Limits) -> Floats:
    """Returns the largest bores (k,) at points (k, 3) that leave the wall to `face`."""
    after = face.distance_mm(xyz_mm) - limits.band_mm
    toward, rule = face.outward(xyz_mm), limits.section
    if face.role is not FaceRole.PART:
        return bore_of_reach_mm(after - limits.outer_mm, toward, rule)
    return np.minimum(
        bore_of_reach_mm(after - limits.face_mm, toward, rule),
        bore_of_reach_mm(after, toward, rule, limits.face_bores),
    )


def room_to_hole_mm(hole: Hole, xyz_mm: Floats, limits: Limits) -> Floats:
    """Returns the largest bores (k,) at points (k, 3) that leave the wall to `hole`."""
    after = distance_to_hole_mm(hole, xyz_mm) - limits.band_mm - max(hole.wall_mm, limits.process_mm)
    steps = 1e-4 * np.eye(3)
    rise = [distance_to_hole_mm(hole, xyz_mm + s) - distance_to_hole_mm(hole, xyz_mm - s) for s in steps]
    toward = unit_rows(-np.column_stack(rise))  # the way the distance falls
    return bore_of_reach_mm(after, toward, limits.section)


def measure_room(
    blank: Blank, limits: Limits, xyz_mm: Floats, open_face: str = "", opening: Bools | None = None
) -> Room:
    """Returns the room at points (k, 3) that faces and holes of the blank leave.

    Args:
        blank: faces and holes.
        limits: walls and bands.
        xyz_mm: (k, 3) places on a centreline.
        open_face: face through which the channel comes out, if any.
        opening: (k,) where the channel is on its way out; there `open_face` does not count.
    """
    rows: list[Floats] = []
    names: list[str] = []
    for face in blank.faces:
        room = room_to_face_mm(face, xyz_mm, limits)
        if opening is not None and face.name == open_face:
            room = np.where(opening, np.inf, room)
        rows.append(room)
        names.append(f"face:{face.name}")
    for hole in blank.holes:
        rows.append(room_to_hole_mm(hole, xyz_mm, limits))
        names.append(f"hole:{hole.id}")
    table = np.array(rows)
    by = table.argmin(axis=0)
    return Room(table[by, np.arange(len(xyz_mm))], by, tuple(names))


def with_neighbours(room: Room, other_mm: Floats, other: Ints, ids: Sequence[str]) -> Room:
    """Returns `room` lowered to the room (k,) that neighbours leave; `other (k,)` is an index into branch `ids`."""
    closer = other_mm < room.room_mm
    names = (*room.names, *(f"branch:{name}" for name in ids))
    return Room(np.where(closer, other_mm, room.room_mm), np.where(closer, other + len(room.names), room.by), names)


def way_out(face: Face, xyz_mm: Floats, steepness: float = STEEPNESS) -> Bools:
    """Returns which samples (..., k) at the end of paths (..., k, 3) keep nearing `face` by `steepness` per mm.

    That stretch is the channel's own way out: its nearness to the face is wanted, not a thin wall.
    """
    shape = xyz_mm.shape[:-1]
    height = face.distance_mm(xyz_mm.reshape(-1, 3)).reshape(shape)
    way = np.linalg.norm(np.diff(xyz_mm, axis=-2), axis=-1)
    nears = height[..., :-1] - height[..., 1:] >= steepness * way
    onward = np.logical_and.accumulate(nears[..., ::-1], axis=-1)[..., ::-1]
    return np.concatenate([onward, np.ones((*shape[:-1], 1), dtype=np.bool_)], axis=-1)
