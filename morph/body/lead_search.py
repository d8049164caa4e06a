"""The search for one lead: the shortest way from a port to a port face that keeps every wall.

Curves with one or two bends (lead_candidate.py) are tried first: they are quick, and most ports are led out
by one. They are sampled, those that come too near to a face, a hole or a channel are dropped on a coarse
sampling, and the rest are judged finely in order of length; the first legal one is taken. When none is,
ways are searched through the room grid (lead_route.py) and judged alike. A lead may be thinned in steps,
and as a last resort starts with a kink into the metal.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TypeGuard

import numpy as np

from morph.body.end_fit import EndFits
from morph.body.exit import Sites, given_exit, given_leave, list_sites, port_faces
from morph.body.finish import PLAIN, Finish
from morph.body.lead_candidate import Bend, Bundle, make_start, one_bend, sort_bundles, two_bends
from morph.body.lead_check import COARSE_SLACK_MM, NECK, Judged, Surroundings, coarse_channels, coarse_faces, judge_path
from morph.body.lead_ground import Blocked, Ground, Lead, PortStart, make_bend
from morph.body.lead_path import least_bend_radius_mm
from morph.body.lead_route import RoomSearch
from morph.body.neighbour import polyline_arc_mm
from morph.body.room import measure_room
from morph.core.arrays import Floats, unit_rows
from morph.core.progress import Progress

CHUNK = 512
"""Paths sampled coarsely at first, shortest first; then three times as many each time."""

FULL_SLACK = 1e-6
LONGER = 1.15
"""A lead with its full bore is preferred to one with a neck unless it is longer by more than this factor."""

MOST_JUDGED = 120
"""Finely judged paths per stage of the search; the coarse sampling has dropped nearly all bad ones by then."""

SEARCHES = (
    (False, False, 1.0),
    (False, False, 0.85),
    (False, True, 1.0),
    (False, False, 0.7),
    (True, False, 1.0),
    (True, False, 0.7),
    (False, False, 0.0),
    (False, True, 0.0),
    (True, False, 0.0),
    (True, True, 0.0),
)
"""Searches in order: start with a kink, through the room grid, share of the port's bore (at least the least bore)."""

PATIENT = (False, True, 1.0)
"""Tried last where all else failed, with many more steps: some ways turn twice before they leave."""

KINKS_RAD = (np.radians(45.0), np.radians(90.0))
"""Starts turned from the channel's direction into the metal, when a smooth start has no way."""


def find_lead(
    around: Surroundings,
    ground: Ground,
    port: PortStart,
    progress: Progress,
    searches: Sequence[tuple[bool, bool, float]] = SEARCHES,
    within: tuple[Floats, float] | None = None,
) -> Lead:
    """Returns the lead of one port.

    Args:
        around: what it must keep clear of.
        ground: body, carrier and limits.
        port: where it starts.
        progress: told before each search.
        searches: what to try (see SEARCHES).
        within: only exits this near to a place count: the place (3,) and the distance in mm.

    Raises:
        Blocked: no way was found. SettingError, GeometryError: a given exit or direction is impossible.
    """
    best: tuple[Judged, str] | None = None
    opening = Finish(PLAIN.detail, land_mm=port.bore_mm)
    fits = EndFits(around, ground.limits, ground.lands, port.settings.name, port.finishes, opening, within)
    room = RoomSearch(around, ground, port, fits)
    tried: set[tuple[bool, bool, float]] = set()
    rows = (*searches, PATIENT) if searches is SEARCHES else tuple(searches)
    for done, (kinked, through_room, share) in enumerate(rows):
        patient = done == len(searches)
        progress.step(f"lead of {port.settings.name}", done, len(rows))
        bore = max(share * port.bore_mm, min(ground.limits.least_bore_mm, port.bore_mm))
        headings = _headings(port, kinked)
        if not headings or (not patient and (kinked, through_room, bore) in tried):
            continue
        tried.add((kinked, through_room, bore))
        bend = make_bend(ground, port, bore)
        places = _places(ground, port, bend, fits, port.xyz_mm if within is None else within[0])
        if len(tried) > 1 and not (room.starts_open(headings, bend) and room.reaches(places, bend)):
            continue
        if through_room:
            found = room.ways(headings, places, bend, patient)
        else:
            found = iter([_candidates(ground, port, headings, places, bend, fits)])
        for bundles, kinks in found:
            lead, close = _first_legal(around, ground, port, bundles, kinks, bend)
            if lead is not None:
                return lead
            if close is not None and (best is None or close[0].share > best[0].share):
                best = close
    raise Blocked(best, fits)


def _headings(port: PortStart, kinked: bool) -> list[tuple[float, Floats]]:
    """Returns the headings to start along, each with its kink at the port in rad."""
    inward, ahead = port.into_metal, port.heading
    if ahead is None:
        return [] if kinked else [(0.0, inward)]
    if not kinked:
        return [(0.0, ahead)]
    across = unit_rows((inward - (inward @ ahead) * ahead)[None, :])[0]
    return [(float(turn), np.cos(turn) * ahead + np.sin(turn) * across) for turn in KINKS_RAD]


def _places(ground: Ground, port: PortStart, bend: Bend, fits: EndFits, centre_mm: Floats) -> list[Sites]:
    """Returns where the lead may come out: the exit that the job gives, else sites on every port face.

    These are densest around `centre_mm (3,)`.
    """
    if port.settings.exit_mm is not None:
        given = given_exit(ground.blank, port.settings, ground.limits.least_bore_mm, ground.limits)
        fits.require(given.face, given.xyz_mm[0], port.straight_mm(bend.bore_mm))
        return [given]
    leave = given_leave(port.settings)
    every = [
        list_sites(ground.blank, face, centre_mm, bend.bore_mm, leave, ground.limits)
        for face in port_faces(ground.blank)
    ]
    return [fits.only(sites) for sites in every]


def _candidates(
    ground: Ground,
    port: PortStart,
    headings: Sequence[tuple[float, Floats]],
    places: Sequence[Sites],
    bend: Bend,
    fits: EndFits,
) -> tuple[list[Bundle], list[float]]:
    """Returns curves with one or two bends whose end fits, each bundle with its kink at the port."""
    leave = given_leave(port.settings)
    bundles: list[Bundle] = []
    kinks: list[float] = []
    for kink, heading in headings:
        start = make_start(ground.carrier, port.xyz_mm, heading)
        for frame in (None, ground.carrier):
            found = [bundle for sites in places for bundle in two_bends(start, sites, bend, frame)]
            if port.settings.exit_mm is None:
                found += one_bend(start, ground.blank, bend, leave, ground.limits, frame)
            fitting = [fits.only_fitting(one, ground.carrier) for one in found]
            bundles += [one for one in fitting if len(one.leave)]
            kinks += [kink] * (len(bundles) - len(kinks))
    return bundles, kinks


def _first_legal(
    around: Surroundings,
    ground: Ground,
    port: PortStart,
    bundles: Sequence[Bundle],
    kinks: Sequence[float],
    bend: Bend,
) -> tuple[Lead | None, tuple[Judged, str] | None]:
    """Returns the shortest legal lead, or None and the path that comes closest with the name of its face."""
    order = sort_bundles(bundles)
    at_port = float(measure_room(around.blank, around.limits, port.xyz_mm[None, :]).room_mm[0])
    best: Lead | None = None
    near_miss: tuple[float, int, int] | None = None
    judged = low = 0
    while low < len(order):
        chunk = order[low : low + CHUNK + 2 * low]
        low += len(chunk)
        spare = _coarse(around, ground, bundles, chunk, bend, at_port)
        top = int(np.argmax(spare))
        if near_miss is None or spare[top] > near_miss[0]:
            near_miss = (float(spare[top]), *chunk[top])
        for b, k in (chunk[i] for i in np.flatnonzero(spare >= 0.0)):
            if judged >= MOST_JUDGED or (
                _legal(best) and float(bundles[b].paths.pieces[k].sum()) > LONGER * best.length_mm
            ):
                return _sorted_out(best)
            lead = _judge(around, ground, port, bundles[b], k, kinks[b], bend)
            judged += 1
            if lead is not None and lead.path.share >= 1.0 - FULL_SLACK:
                return lead, None
            if lead is not None and (best is None or (not _legal(best) and lead.path.share > best.path.share)):
                best = lead
    if best is None and near_miss is not None:
        _, b, k = near_miss
        best = _judge(around, ground, port, bundles[b], k, kinks[b], bend)
        return None, None if best is None else (best.path, best.face)
    return _sorted_out(best)


def _coarse(
    around: Surroundings,
    ground: Ground,
    bundles: Sequence[Bundle],
    chunk: Sequence[tuple[int, int]],
    bend: Bend,
    port_room_mm: float,
) -> Floats:
    """Returns by how much the paths of a chunk (n,) keep clear on a coarse sampling, below 0 where they do not."""
    which = np.array(chunk, dtype=np.int64)
    spare = np.empty(len(chunk))
    for b in np.unique(which[:, 0]):
        here = np.flatnonzero(which[:, 0] == b)
        bundle = bundles[b].only(which[here, 1])
        points = bundle.rough(ground.carrier)
        spare[here] = coarse_faces(around, points, bundle.face, bend.bore_mm, port_room_mm)
        clear = np.flatnonzero(spare[here] >= 0.0)
        free = coarse_channels(around, points[clear], bend.bore_mm)
        spare[here[clear[~free]]] = -0.5 * COARSE_SLACK_MM
    return spare


def _legal(lead: Lead | None) -> TypeGuard[Lead]:
    return lead is not None and lead.path.share >= NECK


def _sorted_out(lead: Lead | None) -> tuple[Lead | None, tuple[Judged, str] | None]:
    if lead is None or _legal(lead):
        return lead, None
    return None, (lead.path, lead.face)


def _judge(
    around: Surroundings, ground: Ground, port: PortStart, bundle: Bundle, k: int, kink: float, bend: Bend
) -> Lead | None:
    """Returns path `k` of a bundle as a lead, legal or not; None when wrapping bent it too tightly."""
    one = bundle.only(np.array([k]))
    spacing = min(0.25 * ground.limits.least_bore_mm, 1.0)
    rough = one.points(ground.carrier, 256)
    if bundle.developed and float(least_bend_radius_mm(rough)[0]) < 0.999 * bend.radius_mm:
        return None
    length = float(np.linalg.norm(np.diff(rough, axis=1), axis=2).sum())
    fine = one.points(ground.carrier, max(8, int(np.ceil(1.05 * length / spacing)) + 1))[0]
    fine[0] = port.xyz_mm
    path = judge_path(around, fine, bundle.face, port.bore_mm, bend.bore_mm, port.finish_on(bundle.face.name))
    size = float(polyline_arc_mm(fine)[-1])
    return Lead(port, path, bundle.face.name, bundle.leave[k], size, kink)
