"""Whether a lead's path keeps its walls: coarsely for many paths at once, finely for one."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.body.blank import Blank
from morph.body.cap import TAPER, lower_to_taper
from morph.body.face import Face
from morph.body.finish import PLAIN, Finish
from morph.body.lead_spare import least_spare_mm
from morph.body.neighbour import WALL_WAY, Network, distance_to_strand_mm, polyline_arc_mm, way_from_node_mm
from morph.body.room import STEEPNESS, Limits, Room, measure_room, way_out, with_neighbours
from morph.body.section import bore_of_reach_mm, reach_mm
from morph.core.arrays import Bools, Floats, Ints, unit_rows

NECK = 0.95
"""A lead may be narrower than its bore by this factor where its room is just short."""

COARSE_SLACK_MM = 0.4
"""Bore forgiven on the coarse sampling, which judges single samples and not the pieces between them."""

SHORT_BORES = 4.0
"""Within this many bores of a port that is itself short of room, its lead may be as short."""

SPARSE = 6
"""Every how many samples the first look at a path takes."""

COARSE_STEEPNESS = 0.8
"""The way out is judged this much more leniently on the coarse sampling, whose pieces cut corners."""


@dataclass(frozen=True, slots=True, eq=False)
class Surroundings:
    """What a lead must keep clear of, and the node of the network it starts from.

    Args:
        blank: faces and holes. limits: walls and bands. network: channels and leads already laid.
        finder: scipy's cKDTree over the network's samples. node: index of the port's node.
    """

    blank: Blank
    limits: Limits
    network: Network
    finder: Any
    node: int

    @property
    def wall_mm(self) -> float:
        """Returns the wall between channels, bands included."""
        return self.limits.between_mm + self.limits.band_mm


@dataclass(frozen=True, slots=True, eq=False)
class Judged:
    """One path, finely sampled.

    Args:
        xyz_mm: (k, 3). wanted_mm: (k,) bore wanted. bore_mm: (k,) bore that fits. room: what limits it.
        share: least room over the room due; legal from NECK on. worst: the sample of the least share.
    """

    xyz_mm: Floats
    wanted_mm: Floats
    bore_mm: Floats
    room: Room
    share: float
    worst: int


def coarse_faces(around: Surroundings, points_mm: Floats, face: Face, bore_mm: float, port_room_mm: float) -> Floats:
    """Returns by how much each path (n,) keeps clear of faces and holes on a coarse sampling; not below 0 is clear.

    Paths that are clear at every SPARSE-th sample are measured at all of them.

    Args:
        around: what surrounds the lead.
        points_mm: (n, k, 3) samples of each path.
        face: the face they come out of.
        bore_mm: bore of the lead.
        port_room_mm: what faces and holes leave at the port.
    """
    arc = np.cumsum(np.linalg.norm(np.diff(points_mm, axis=1, prepend=points_mm[:, :1]), axis=2), axis=1)
    due = NECK * _due(np.array([port_room_mm]), np.full(arc.shape, bore_mm), arc, bore_mm)
    opening = way_out(face, points_mm, COARSE_STEEPNESS * STEEPNESS)

    def least(paths: Ints, every: int) -> Floats:
        chosen = slice(SPARSE // 2 if every > 1 else 0, None, every)
        bores, out = due[paths][:, chosen], opening[paths][:, chosen]
        flat = points_mm[paths][:, chosen].reshape(-1, 3)
        spare = least_spare_mm(around.blank, around.limits, flat, bores.ravel(), face.name, out.ravel())
        return np.asarray(spare.reshape(bores.shape).min(axis=1) + 0.5 * COARSE_SLACK_MM, dtype=np.float64)

    spare = least(np.arange(len(points_mm)), SPARSE)
    clear = np.flatnonzero(spare >= 0.0)
    if len(clear):
        spare[clear] = np.minimum(spare[clear], least(clear, 1))
    return spare


def _due(room_mm: Floats, wanted_mm: Floats, arc_mm: Floats, bore_mm: float) -> Floats:
    """Returns the room due (..., k): the bore wanted, or near a port that is itself short, what the port has.

    A channel that already lies too near to a face is told as such; its lead must not make it worse.
    """
    at_port = np.maximum(room_mm[..., :1], 0.0)
    return np.where(arc_mm <= SHORT_BORES * bore_mm, np.minimum(wanted_mm, at_port), wanted_mm)


def coarse_channels(around: Surroundings, points_mm: Floats, bore_mm: float) -> Bools:
    """Returns which paths (n,) keep clear of the channel sample nearest to each of their samples (n, k, 3)."""
    n, count, _ = points_mm.shape
    network, wall = around.network, around.wall_mm
    flat = points_mm.reshape(-1, 3)
    widest = np.array([bore_mm, float(network.bore_mm.max())])
    reach = float(reach_mm(widest, network.section.up, network.section).sum()) + wall
    distance, at = around.finder.query(flat, distance_upper_bound=reach)
    near = np.flatnonzero(np.isfinite(distance))
    step = np.linalg.norm(np.diff(points_mm, axis=1), axis=2)
    arc = np.concatenate([np.zeros((n, 1)), np.cumsum(step, axis=1)], axis=1).ravel()
    other = at[near]
    toward = unit_rows(network.xyz_mm[other] - flat[near])
    own = reach_mm(np.full(len(near), NECK * bore_mm), toward, network.section)
    needed = own + reach_mm(network.bore_mm[other], -toward, network.section) + wall
    way = arc[near] + way_from_node_mm(network, around.node, other)
    exact = distance_to_strand_mm(network, flat[near], other)
    bad = (way > WALL_WAY * needed) & (exact < needed - 0.5 * COARSE_SLACK_MM)
    blocked = np.zeros(n, dtype=np.bool_)
    blocked[near[bad] // count] = True
    return ~blocked


def room_between(around: Surroundings, xyz_mm: Floats, arc_mm: Floats, bore_mm: Floats) -> tuple[Floats, Ints]:
    """Returns the largest bore (k,) the laid channels leave along a path, inf when free, and which strand (k,) limits.

    Args:
        around: what surrounds the lead.
        xyz_mm: (k, 3) path from the port on.
        arc_mm: (k,) way from the port.
        bore_mm: (k,) bore wanted.
    """
    network = around.network
    widest = np.array([bore_mm.max(), network.bore_mm.max()])
    highest = reach_mm(widest, network.section.up, network.section)
    reach = float(highest.sum()) + around.wall_mm + 1.0
    lists = around.finder.query_ball_point(xyz_mm, reach, return_sorted=True)
    mine = np.repeat(np.arange(len(xyz_mm)), [len(found) for found in lists])
    room = np.full(len(xyz_mm), np.inf)
    by = np.zeros(len(xyz_mm), dtype=np.int64)
    if not len(mine):
        return room, by
    at = np.concatenate([np.asarray(found, dtype=np.int64) for found in lists])
    distance = distance_to_strand_mm(network, xyz_mm[mine], at)
    toward, rule = unit_rows(network.xyz_mm[at] - xyz_mm[mine]), network.section
    beside = reach_mm(network.bore_mm[at], -toward, rule)
    needed = reach_mm(bore_mm[mine], toward, rule) + beside + around.wall_mm
    counts = arc_mm[mine] + way_from_node_mm(network, around.node, at) > WALL_WAY * needed
    mine, at, distance = mine[counts], at[counts], distance[counts]
    left = bore_of_reach_mm(distance - around.wall_mm - beside[counts], toward[counts], rule)
    order = np.lexsort((at, left, mine))
    first = order[np.unique(mine[order], return_index=True)[1]]
    room[mine[first]], by[mine[first]] = left[first], network.owner[at[first]]
    return room, by


def judge_path(
    around: Surroundings, xyz_mm: Floats, face: Face, port_bore_mm: float, bore_mm: float, finish: Finish = PLAIN
) -> Judged:
    """Returns the bore that fits along a finely sampled path and how short it falls of the one wanted.

    Args:
        around: what surrounds the lead.
        xyz_mm: (k, 3) from the port to the exit.
        face: the face it comes out of.
        port_bore_mm: bore of the channel at the port.
        bore_mm: bore wanted; from the port's bore it is reached at the taper.
        finish: of the exit; a pilot is reached at the taper too, and is only as wide as its walls allow: the drill
            takes the rest.
    """
    arc = polyline_arc_mm(xyz_mm)
    own = np.maximum(port_bore_mm - TAPER * arc, min(bore_mm, port_bore_mm))
    wanted = finish.bore_mm(own, arc[-1] - arc, TAPER)
    needed = np.minimum(wanted, own)
    opening = way_out(face, xyz_mm)
    faces = measure_room(around.blank, around.limits, xyz_mm, face.name, opening)
    beside, by = room_between(around, xyz_mm, arc, wanted)
    room = with_neighbours(faces, beside, by, [strand.id for strand in around.network.strands])
    # The neck is room given up by the bore; where the least bore itself has none, a wall would be short.
    least = around.limits.least_bore_mm
    due = _due(faces.room_mm, needed, arc, bore_mm)
    share = room.room_mm / np.maximum(due, 1e-9)
    share = np.where(room.room_mm < np.minimum(due, least) - 1e-6, NECK * share, share)
    worst = int(share.argmin())
    bore = np.minimum(wanted, np.maximum(room.room_mm, least))
    return Judged(xyz_mm, needed, lower_to_taper(bore, arc), room, float(share[worst]), worst)
