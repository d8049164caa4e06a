"""Whether an end fits at a place: its land flat on the face, its cut clear of faces, holes, channels and other ends.

The land is a circle of the exit's face: the whole of it lies on the face, outside every hole that opens
there and beside other lands. The cut is a flat-ended cylinder from the face inwards: it keeps the wall of
each neighbour and the bands, counted from its diameter, which is a thread's major diameter. Circles and
cylinders are sampled (CIRCLE points around, levels at most 1 mm apart); distances are exact.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from morph.body.blank import Blank
from morph.body.face import Face, FaceRole
from morph.body.finish import Finish
from morph.body.hole import Hole, distance_to_hole_mm
from morph.body.lead_check import Surroundings
from morph.body.neighbour import WALL_WAY, way_from_node_mm
from morph.body.room import Limits
from morph.body.section import reach_mm
from morph.core.arrays import Floats, Ints, unit_rows

CIRCLE, RINGS, MOST_LEVELS = 48, 6, 40
"""Points around a circle, rings of a land, and levels of a cut."""

OPEN_MM = 0.1
"""A hole that ends this near to a face opens there."""

SLACK_MM = 1e-6
"""Rounding forgiven."""


@dataclass(frozen=True, slots=True, eq=False)
class Land:
    """A circle of a face that another port has taken."""

    port: str
    face: str
    xyz_mm: Floats
    land_mm: float


@dataclass(frozen=True, slots=True, eq=False)
class Spare:
    """By how much an end fits at each place (n,), below 0 where not, and what limits it: index (n,) into `names`."""

    spare_mm: Floats
    by: Ints
    names: tuple[str, ...]


def measure_end_spare(
    blank: Blank, limits: Limits, face: Face, places_mm: Floats, finish: Finish, lands: Sequence[Land]
) -> Spare:
    """Returns by how much `finish` fits at places (n, 3) on a flat `face`, channels aside.

    Args:
        blank: faces, holes, and what other ends will cut, as holes.
        limits: walls and bands.
        face: the flat face of the exits.
        places_mm: (n, 3) on it.
        finish: land and cut.
        lands: the circles that other ports have taken.
    """
    normal = face.outward(places_mm[:1])[0] if len(places_mm) else np.array([0.0, 0.0, 1.0])
    rows, names = _land_rows(blank, face, places_mm, normal, finish, lands)
    more, more_names = _cut_rows(blank, limits, face, places_mm, normal, finish)
    table = np.array([*rows, *more, np.full(len(places_mm), np.inf)])
    by = table.argmin(axis=0)
    return Spare(table[by, np.arange(len(places_mm))], by, (*names, *more_names, ""))


def _across(normal: Floats) -> tuple[Floats, Floats]:
    across = np.cross(normal, np.eye(3)[int(np.abs(normal).argmin())])
    across /= np.linalg.norm(across)
    return across, np.cross(normal, across)


def _circle_mm(normal: Floats, radius_mm: float) -> Floats:
    """Returns CIRCLE points (k, 3) of a circle about the origin, square to `normal (3,)`."""
    first, second = _across(normal)
    angle = 2.0 * np.pi * np.arange(CIRCLE) / CIRCLE
    return np.asarray(radius_mm * (np.cos(angle)[:, None] * first + np.sin(angle)[:, None] * second), dtype=np.float64)


def _least(values: Floats, n: int) -> Floats:
    return np.asarray(values.reshape(n, -1).min(axis=1), dtype=np.float64)


def _land_rows(
    blank: Blank, face: Face, places_mm: Floats, normal: Floats, finish: Finish, lands: Sequence[Land]
) -> tuple[list[Floats], list[str]]:
    """Returns by how much the land stays on its face, off open holes and off other lands, with names."""
    n, radius = len(places_mm), 0.5 * finish.land_mm
    rings = [_circle_mm(normal, radius * (k + 1) / RINGS) for k in range(RINGS)]
    disc = (places_mm[:, None, :] + np.concatenate([np.zeros((1, 3)), *rings])[None]).reshape(-1, 3)
    rows, names = [], []
    for other in blank.faces:
        if other.name != face.name:
            rows.append(_least(other.distance_mm(disc), n))
            names.append(f"the edge to face:{other.name}")
    for hole in blank.holes:
        if _opens_on(hole, face):
            rows.append(_least(distance_to_hole_mm(_endless(hole), disc), n))
            names.append(f"an open hole:{hole.id}")
    for land in lands:
        if land.face == face.name:
            apart = np.linalg.norm(places_mm - land.xyz_mm, axis=1)
            rows.append(np.asarray(apart - 0.5 * (finish.land_mm + land.land_mm), dtype=np.float64))
            names.append(f"the land of {land.port}")
    return rows, names


def _opens_on(hole: Hole, face: Face) -> bool:
    """Returns whether `hole` starts or ends on `face`."""
    ends = np.array([hole.start_mm, hole.start_mm + hole.length_mm * hole.axis])
    return bool((face.distance_mm(ends) < OPEN_MM).any())


def _endless(hole: Hole) -> Hole:
    """Returns the hole carried on far beyond both ends, so that on a face only the way to its rim counts."""
    far = 1e4
    return replace(hole, start_mm=hole.start_mm - far * hole.axis, length_mm=hole.length_mm + 2.0 * far)


def _cut_rows(
    blank: Blank, limits: Limits, face: Face, places_mm: Floats, normal: Floats, finish: Finish
) -> tuple[list[Floats], list[str]]:
    """Returns by how much the cut keeps its walls to faces and holes, with names."""
    if finish.cut_mm == 0.0:
        return [], []
    n = len(places_mm)
    levels = np.linspace(0.0, finish.cut_depth_mm, min(MOST_LEVELS, int(np.ceil(finish.cut_depth_mm)) + 1))
    rim = _circle_mm(normal, 0.5 * finish.cut_mm)[None] - levels[:, None, None] * normal
    points = (places_mm[:, None, :] + rim.reshape(-1, 3)[None]).reshape(-1, 3)
    rows, names = [], []
    for other in blank.faces:
        if other.name != face.name:
            wall = limits.face_mm if other.role is FaceRole.PART else limits.outer_mm
            rows.append(_least(other.distance_mm(points), n) - wall - limits.band_mm)
            names.append(f"face:{other.name}")
    for hole in blank.holes:
        wall = max(hole.wall_mm, limits.process_mm)
        rows.append(_least(distance_to_hole_mm(hole, points), n) - wall - limits.band_mm)
        names.append(f"hole:{hole.id}")
    return rows, names


def _toward(cut: Hole, xyz_mm: Floats) -> Floats:
    """Returns unit directions (k, 3) from points (k, 3) to the nearest points of a cut; its axis where on it."""
    offset = xyz_mm - cut.start_mm
    along = offset @ cut.axis
    radial = offset - along[:, None] * cut.axis
    out = np.linalg.norm(radial, axis=1)
    shrink = np.minimum(1.0, 0.5 * cut.diameter_mm / np.where(out > 0.0, out, 1.0))
    kept = np.clip(along, 0.0, cut.length_mm)
    way = cut.start_mm + kept[:, None] * cut.axis + radial * shrink[:, None] - xyz_mm
    on_it = np.linalg.norm(way, axis=1) < SLACK_MM
    way[on_it] = cut.axis
    return unit_rows(way)


@dataclass(frozen=True, slots=True, eq=False)
class ChannelReach:
    """Up to which length a lead may be so that no laid channel is too near to its cut, and the nearest channel's id."""

    longest_mm: float
    by: str
    lack_mm: float


def measure_channel_reach(around: Surroundings, exit_mm: Floats, leave: Floats, finish: Finish) -> ChannelReach:
    """Returns the longest lead whose cut at `exit_mm (3,)` keeps its wall to every laid channel that counts.

    Where a channel runs on from the lead, the metal between it and the cut tapers to nothing; that is no wall.
    It counts when the way to it is WALL_WAY times the distance to keep, or when the cut would open it.

    Args:
        around: the laid channels and the node the lead starts from.
        exit_mm: (3,) on the face.
        leave: (3,) unit, out of the metal.
        finish: the cut.
    """
    network = around.network
    found = np.inf, "", 0.0
    for cut in finish.cut("", exit_mm, leave, 0.0):
        half = reach_mm(network.bore_mm, _toward(cut, network.xyz_mm), network.section)
        gap = distance_to_hole_mm(cut, network.xyz_mm) - half
        lack = around.wall_mm - gap
        close = np.flatnonzero(lack > SLACK_MM)
        if not len(close):
            continue
        way = way_from_node_mm(network, around.node, close)
        needed = 0.5 * finish.cut_mm + half[close] + around.wall_mm
        opens = (gap[close] < 0.0) & (way > network.bore_mm[close])
        longest = np.where(opens, -np.inf, finish.cut_depth_mm + WALL_WAY * needed - way)
        worst = int(np.lexsort((-lack[close], longest))[0])
        owner = network.strands[int(network.owner[close[worst]])].id
        found = float(longest[worst]), owner, float(lack[close[worst]])
    return ChannelReach(*found)
