"""The search for one lead: the shortest way from a port to a port face that keeps every wall.

Candidate paths (lead_candidate.py) are sampled, those that come too near to a face, a hole or a
channel are dropped on a coarse sampling, and the rest are judged finely in order of length; the
first legal one is taken. When none is, the lead is thinned in steps, may start with a kink into the
metal, and may make a detour.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeGuard

import numpy as np

from morph.body.blank import Blank
from morph.body.end import straight_run_mm
from morph.body.end_fit import EndFits
from morph.body.end_room import Land
from morph.body.exit import given_exit, given_leave, list_sites, port_faces
from morph.body.finish import PLAIN, Finish
from morph.body.lead_candidate import Bend, Bundle, detours, make_start, one_bend, sort_bundles, two_bends
from morph.body.lead_check import COARSE_SLACK_MM, NECK, Judged, Surroundings, coarse_channels, coarse_faces, judge_path
from morph.body.lead_path import least_bend_radius_mm
from morph.body.neighbour import Strand, polyline_arc_mm
from morph.body.room import Limits
from morph.core.arrays import Floats, unit_rows
from morph.core.progress import Progress
from morph.settings.job import PortSettings
from morph.surface.carrier import Carrier

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
    (True, False, 1.0),
    (False, False, 0.7),
    (True, False, 0.7),
    (False, True, 1.0),
    (False, False, 0.0),
    (True, False, 0.0),
    (True, True, 0.0),
)
"""Searches in order: start with a kink, make a detour, share of the port's bore (never below the least bore)."""

LEAST_BEND_BORES = 1.5
"""Least centreline bend radius of a lead in bores (common practice, no source)."""

STRAIGHT_BORES = 0.5
"""Least straight end square to the face, in bores, so that an end can be machined (common practice, no source)."""

BEND_MARGIN = 1.105
"""Bends are built this much wider than asked: a bend that clears its limit by less than a tenth is watched, and
it is judged on samples up to 1 mm apart."""

KINKS_RAD = (np.radians(45.0), np.radians(90.0))
"""Starts turned from the channel's direction into the metal, when a smooth start has no way."""


@dataclass(frozen=True, slots=True, eq=False)
class PortStart:
    """A port to be led out.

    Args:
        settings: the job's port. node: index of its node. xyz_mm: (3,).
        heading: (3,) unit, the channel's direction carried on, or None for a port amid a channel.
        into_metal: (3,) unit. bore_mm: bore of the channel there.
        finishes: the faces where an end that is not plain can be made, each with its finish.
    """

    settings: PortSettings
    node: int
    xyz_mm: Floats
    heading: Floats | None
    into_metal: Floats
    bore_mm: float
    finishes: tuple[tuple[str, Finish], ...] = ()

    def finish_on(self, face: str) -> Finish:
        """Returns the finish of an exit on `face`."""
        return dict(self.finishes).get(face, PLAIN)

    def straight_mm(self, bore_mm: float) -> float:
        """Returns the longest straight run that a finish needs behind the exit of a lead of `bore_mm`."""
        return max((straight_run_mm(finish, bore_mm) for _, finish in self.finishes), default=0.0)


@dataclass(frozen=True, slots=True, eq=False)
class Lead:
    """A lead that keeps its walls: the judged path, face and direction of its exit, and how it differs from the ideal.

    `kink_rad`: turn at the port; 0 when it carries on smoothly.
    """

    port: PortStart
    path: Judged
    face: str
    leave: Floats
    length_mm: float
    kink_rad: float


@dataclass(frozen=True, slots=True, eq=False)
class Ground:
    """What all leads share: body, carrier, limits, the laid channels, the profile's bend radius in bores.

    For one lead the blank also holds what other ends will cut, as holes, and `lands` the circles they take.
    """

    blank: Blank
    carrier: Carrier
    limits: Limits
    strands: tuple[Strand, ...]
    n_nodes: int
    bend_bores: float
    lands: tuple[Land, ...] = ()


class Blocked(Exception):
    """No legal way for one port: the best path tried and its face, and how its end fitted, for the message."""

    def __init__(self, best: tuple[Judged, str] | None, fits: EndFits) -> None:
        self.best = best
        self.fits = fits
        super().__init__()


def find_lead(around: Surroundings, ground: Ground, port: PortStart, progress: Progress) -> Lead:
    """Returns the lead of one port.

    Args:
        around: what it must keep clear of.
        ground: body, carrier and limits.
        port: where it starts.
        progress: told before each search.

    Raises:
        Blocked: no way was found. SettingError, GeometryError: a given exit or direction is impossible.
    """
    best: tuple[Judged, str] | None = None
    opening = Finish(PLAIN.detail, land_mm=port.bore_mm)
    fits = EndFits(around, ground.limits, ground.lands, port.settings.name, port.finishes, opening)
    tried: set[tuple[bool, bool, float]] = set()
    for done, (kinked, detour, share) in enumerate(SEARCHES):
        progress.step(f"lead of {port.settings.name}", done, len(SEARCHES))
        bore = max(share * port.bore_mm, min(ground.limits.least_bore_mm, port.bore_mm))
        headings = _headings(port, kinked)
        if not headings or (kinked, detour, bore) in tried:
            continue
        tried.add((kinked, detour, bore))
        bend = _bend(ground, port, bore)
        bundles, kinks = [], []
        for kink, heading in headings:
            found = _candidates(ground, port, heading, bend, detour, fits)
            bundles += found
            kinks += [kink] * len(found)
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


def _bend(ground: Ground, port: PortStart, bore_mm: float) -> Bend:
    radius = max(LEAST_BEND_BORES, ground.bend_bores) * bore_mm
    whole = port.straight_mm(bore_mm)
    return Bend(radius * BEND_MARGIN, max(STRAIGHT_BORES * bore_mm, whole), bore_mm, whole)


def _candidates(
    ground: Ground, port: PortStart, heading: Floats, bend: Bend, detour: bool, fits: EndFits
) -> list[Bundle]:
    start = make_start(ground.carrier, port.xyz_mm, heading)
    leave = given_leave(port.settings)
    if port.settings.exit_mm is not None:
        places = [given_exit(ground.blank, port.settings, ground.limits.least_bore_mm, ground.limits)]
        fits.require(places[0].face, places[0].xyz_mm[0], port.straight_mm(bend.bore_mm))
        found: list[Bundle] = []
    else:
        places = [
            list_sites(ground.blank, face, port.xyz_mm, bend.bore_mm, leave, ground.limits)
            for face in port_faces(ground.blank)
        ]
        places = [fits.only(sites) for sites in places]
        frames = () if detour else (None, ground.carrier)
        found = [
            bundle for frame in frames for bundle in one_bend(start, ground.blank, bend, leave, ground.limits, frame)
        ]
    make = detours if detour else two_bends
    for sites in places:
        found += make(start, sites, bend, None) + make(start, sites, bend, ground.carrier)
    return [bundle for bundle in (fits.only_fitting(one, ground.carrier) for one in found) if len(bundle.leave)]


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
    best: Lead | None = None
    near_miss: tuple[float, int, int] | None = None
    judged = low = 0
    while low < len(order):
        chunk = order[low : low + CHUNK + 2 * low]
        low += len(chunk)
        spare = _coarse(around, ground, bundles, chunk, bend)
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
    around: Surroundings, ground: Ground, bundles: Sequence[Bundle], chunk: Sequence[tuple[int, int]], bend: Bend
) -> Floats:
    """Returns by how much the paths of a chunk (n,) keep clear on a coarse sampling, below 0 where they do not."""
    which = np.array(chunk, dtype=np.int64)
    spare = np.empty(len(chunk))
    for b in np.unique(which[:, 0]):
        here = np.flatnonzero(which[:, 0] == b)
        bundle = bundles[b].only(which[here, 1])
        points = bundle.rough(ground.carrier)
        spare[here] = coarse_faces(around, points, bundle.face, bend.bore_mm)
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
