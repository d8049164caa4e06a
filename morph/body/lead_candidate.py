"""Candidate paths for a lead: from a port, along its heading, to a place on a port face.

Two frames are used. In the direct frame legs are straight in space: good for dives through solid
metal. In the developed frame (sheet x, sheet y, depth) legs follow the carrier: good for shells and
for going around. Both build the same corner paths; developed ones are mapped by the carrier and
their bends measured afterwards.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from morph.body.blank import AnyFace, Blank
from morph.body.exit import Sites, keep_legal, port_faces, project_along, project_to_face
from morph.body.lead_path import (
    SHARPEST_TURN_RAD,
    Paths,
    make_paths,
    rough_points,
    sample_paths,
    start_corner,
    turn_between_rad,
)
from morph.body.room import Limits
from morph.core.arrays import Bools, Floats, Ints, unit_rows
from morph.surface.carrier import Carrier

LEVELS = (1.0, 0.7, 0.4, 0.0)
"""Heights of the last corner: 1 level with the first corner, 0 as near to the exit as its straight end allows."""

LEAST_LEVEL_MM = 0.5
"""Levels nearer to the lowest one than this are not tried by themselves."""

EXTRA_BENDS = (0.0, 1.0, 2.5)
"""Straight starts tried, in bend radii."""

REACH_BENDS = (0.0, 0.5, 1.0, 2.0, 4.0)
"""Straight starts tried before a single bend, in bend radii."""

DEVELOPED_WIDER = (1.1, 1.6)
"""Arcs in the developed frame are this much wider, because wrapping adds curvature."""


@dataclass(frozen=True, slots=True, eq=False)
class Start:
    """Where a lead starts: the port (3,), its unit heading (3,), and its sheet x, sheet y and depth (3,)."""

    xyz_mm: Floats
    heading: Floats
    developed: Floats
    developed_heading: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Bundle:
    """Candidate paths of one kind with the face each comes out of and its direction (n, 3) out of the metal."""

    paths: Paths
    developed: bool
    face: AnyFace
    leave: Floats

    def points(self, carrier: Carrier, count: int) -> Floats:
        """Returns `count` points (n, count, 3) along each path in the part frame."""
        points, _ = sample_paths(self.paths, count)
        if not self.developed:
            return points
        flat = points.reshape(-1, 3)
        return carrier.point_mm(flat[:, :2], flat[:, 2]).reshape(points.shape)

    def rough(self, carrier: Carrier) -> Floats:
        """Returns a few points (n, k, 3) on every piece of each path in the part frame."""
        points = rough_points(self.paths)
        if not self.developed:
            return points
        flat = points.reshape(-1, 3)
        return carrier.point_mm(flat[:, :2], flat[:, 2]).reshape(points.shape)

    def only(self, keep: Bools | Ints) -> Bundle:
        """Returns the bundle with the paths `keep` (a mask or numbers)."""
        return Bundle(self.paths.only(keep), self.developed, self.face, self.leave[keep])

    def exits(self, carrier: Carrier) -> Floats:
        """Returns where each path comes out (n, 3) in the part frame."""
        last = self.paths.vertices[:, -1]
        return carrier.point_mm(last[:, :2], last[:, 2]) if self.developed else last

    def runs_straight(self, bend: Bend) -> Bools:
        """Returns which paths (n,) have the straight run behind the exit that an end needs."""
        return np.asarray(self.paths.pieces[:, -1] >= bend.whole_mm, dtype=np.bool_)


@dataclass(frozen=True, slots=True)
class Bend:
    """What shapes a candidate: bend radius, straight end before the face, bore, and the straight run of an end, in mm.

    `straight_mm` is kept where the last turn is a right angle; `whole_mm` always, 0 for a plain end. No bend starts
    within `start_mm` of the port: there the lead narrows, and is still too wide for the radius.
    """

    radius_mm: float
    straight_mm: float
    bore_mm: float
    whole_mm: float = 0.0
    start_mm: float = 0.0


def make_start(carrier: Carrier, xyz_mm: Floats, heading: Floats) -> Start:
    """Returns the start at `xyz_mm (3,)` along unit `heading (3,)` in both frames."""
    nudge = 1e-4
    place = carrier.develop(np.array([xyz_mm, xyz_mm + nudge * heading, xyz_mm - nudge * heading]))
    return Start(xyz_mm, heading, place[0], unit_rows((place[1] - place[2])[None, :])[0])


def two_bends(start: Start, sites: Sites, bend: Bend, carrier: Carrier | None) -> list[Bundle]:
    """Returns paths with a bend at the port and one above the exit, for each site, level and straight start.

    Args:
        start: the port.
        sites: where to come out.
        bend: radius and straight end.
        carrier: for the developed frame, or None for the direct frame.
    """
    frame = _in_frame(start, sites, carrier)
    if frame is None or not len(sites.xyz_mm):
        return []
    origin, heading, exits, leave = frame
    found = []
    for wider in DEVELOPED_WIDER if carrier is not None else (1.0,):
        radius = wider * bend.radius_mm
        lowest = bend.straight_mm + radius
        # Height of the first corner above the face: of the port, and higher where the port heads away from it.
        away = -(leave @ heading)
        level = np.maximum(np.maximum(((exits - origin) * leave).sum(axis=1), 0.0) + radius * away, lowest)
        for extra in EXTRA_BENDS:
            for share in LEVELS:
                height = lowest + share * (level + np.maximum(extra * radius * away, 0.0) - lowest)
                last = exits - height[:, None] * leave
                n = len(exits)
                radii = np.full(n, radius)
                first = start_corner(origin, heading, last, radii, np.full(n, max(extra * radius, bend.start_mm)))
                vertices = np.stack([np.broadcast_to(origin, exits.shape), first, last, exits], axis=1)
                bundle = Bundle(make_paths(vertices, radii), carrier is not None, sites.face, sites.leave)
                # Where there is no height to choose from, all levels are the same path.
                same = (share > 0.0) & (height - lowest < LEAST_LEVEL_MM)
                found.append(bundle.only(bundle.paths.valid & ~same & bundle.runs_straight(bend)))
    return found


def one_bend(
    start: Start, blank: Blank, bend: Bend, leave: Floats | None, limits: Limits, carrier: Carrier | None
) -> list[Bundle]:
    """Returns paths straight on or with a single bend onto each port face.

    Args:
        start: the port.
        blank: the body.
        bend: radius, straight end and bore.
        leave: (3,) unit direction out of the metal, or None for square to the face.
        limits: walls and bands at the exit.
        carrier: for the developed frame, or None for the direct frame.
    """
    found = []
    origin, heading = (start.xyz_mm, start.heading) if carrier is None else (start.developed, start.developed_heading)
    radius = bend.radius_mm if carrier is None else DEVELOPED_WIDER[0] * bend.radius_mm
    for face in port_faces(blank):
        corners = origin[None, :]
        for _ in range(3):
            out = _out_at(face, corners, leave, carrier)
            turn = np.minimum(turn_between_rad(np.broadcast_to(heading, out.shape), out), SHARPEST_TURN_RAD)
            reach = np.maximum(np.array(REACH_BENDS) * radius, bend.start_mm) + np.tan(0.5 * turn) * radius + 1e-3
            corners = origin + reach[:, None] * heading
        bundle = _bent_once(start, blank, face, corners, radius, bend, leave, limits, carrier)
        if bundle is not None:
            found.append(bundle)
    return found


def _out_at(face: AnyFace, corners: Floats, leave: Floats | None, carrier: Carrier | None) -> Floats:
    """Returns the direction out of the metal above each corner, in the frame of the corners (n, 3)."""
    if carrier is None:
        return face.outward(corners) if leave is None else np.broadcast_to(leave, corners.shape)
    space = carrier.point_mm(corners[:, :2], corners[:, 2])
    out = face.outward(space) if leave is None else np.broadcast_to(leave, space.shape)
    nudge = 1e-3
    return unit_rows(carrier.develop(space + nudge * out) - carrier.develop(space - nudge * out))


def _bent_once(
    start: Start,
    blank: Blank,
    face: AnyFace,
    corners: Floats,
    radius_mm: float,
    bend: Bend,
    leave: Floats | None,
    limits: Limits,
    carrier: Carrier | None,
) -> Bundle | None:
    space = corners if carrier is None else carrier.point_mm(corners[:, :2], corners[:, 2])
    ends = project_to_face(face, space) if leave is None else project_along(face, space, leave)
    in_front = np.flatnonzero(face.distance_mm(space) > 0.0)
    found = [(k, keep_legal(blank, face, ends[k : k + 1], bend.bore_mm, leave, limits)) for k in in_front]
    chosen = [int(k) for k, sites in found if len(sites.xyz_mm)]
    if not chosen:
        return None
    sites = Sites(face, ends[chosen], np.concatenate([sites.leave for _, sites in found]))
    frame = _in_frame(start, sites, carrier)
    if frame is None:
        return None
    origin, _, exits, _ = frame
    vertices = np.stack([np.broadcast_to(origin, exits.shape), corners[chosen], exits], axis=1)
    paths = make_paths(vertices, np.full(len(chosen), radius_mm))
    straight_on = paths.turn_rad[:, 0] <= 1e-6
    straight_on &= paths.lengths() >= bend.whole_mm
    keep = paths.valid & (straight_on | (paths.pieces[:, -1] >= bend.straight_mm))
    return Bundle(paths.only(keep), carrier is not None, face, sites.leave[keep])


def _in_frame(start: Start, sites: Sites, carrier: Carrier | None) -> tuple[Floats, Floats, Floats, Floats] | None:
    """Returns origin, heading, exits and directions out in the frame, or None when the face does not fit the frame."""
    if carrier is None:
        return start.xyz_mm, start.heading, sites.xyz_mm, sites.leave
    if not len(sites.xyz_mm) or not _leaves_along_frame(sites):
        return None
    nudge = 1e-3
    places = carrier.develop(sites.xyz_mm)
    inside = carrier.develop(sites.xyz_mm - nudge * sites.leave)
    if np.isfinite(turn := carrier.turn_mm):
        places[:, 0] -= turn * np.round((places[:, 0] - start.developed[0]) / turn)
        inside[:, 0] -= turn * np.round((inside[:, 0] - places[:, 0]) / turn)
    return start.developed, start.developed_heading, places, unit_rows(places - inside)


def _leaves_along_frame(sites: Sites) -> bool:
    """Returns whether the exits leave in planes through the z axis, where straight lines stay straight when mapped."""
    x, y, leave_x, leave_y = (*sites.xyz_mm[:, :2].T, *sites.leave[:, :2].T)
    return bool((np.abs(x * leave_y - y * leave_x) <= 1e-9 * np.hypot(x, y)).all())


def sort_bundles(bundles: Sequence[Bundle]) -> list[tuple[int, int]]:
    """Returns (bundle, path) numbers of all paths, shortest first; equal lengths keep their order.

    Developed paths are sorted by their developed length, which is the true one where the sheet is.
    """
    which = [(b, k) for b, bundle in enumerate(bundles) for k in range(len(bundle.leave))]
    if not which:
        return []
    size = np.concatenate([np.round(bundle.paths.lengths(), 9) for bundle in bundles])
    return [which[i] for i in np.argsort(size, kind="stable")]
