"""Leads: from each port of the layout to a port face, the shortest way that keeps every wall.

Candidate paths (lead_candidate.py) are sampled, those that come too near to a face, a hole or a
channel are dropped on a coarse sampling, and the rest are judged finely in order of length; the
first legal one is taken. When none is, the lead is thinned in steps, then may start with a kink
into the metal, then make a detour. Leads are laid one after the other in port order; a port left
without a way goes first in the next attempt. Nothing is random.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeGuard

import numpy as np

from morph.body.blank import Blank
from morph.body.exit import given_exit, given_leave, list_sites, port_faces
from morph.body.lead_candidate import Bend, Bundle, detours, make_start, one_bend, sort_bundles, two_bends
from morph.body.lead_check import NECK, Judged, Surroundings, coarse_channels, coarse_faces, judge_path
from morph.body.lead_path import least_bend_radius_mm
from morph.body.neighbour import Strand, make_network, polyline_arc_mm
from morph.body.room import Limits
from morph.core.arrays import Floats, unit_rows
from morph.core.errors import GeometryError
from morph.core.progress import Progress
from morph.settings.job import PortSettings
from morph.surface.carrier import Carrier

COARSE_SAMPLES = 64
CHUNK = 256
FOR_MESSAGE = 8
"""Paths judged although the coarse sampling found all of them blocked, to say what blocks the best."""

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

STRAIGHT_BORES = 1.0
"""Least straight end square to the face, in bores, so that an end can be machined (common practice, no source)."""

BEND_MARGIN = 1.05
"""Bends are built this much wider than asked, because they are judged on samples up to 1 mm apart."""

KINKS_RAD = (np.radians(45.0), np.radians(90.0))
"""Starts turned from the channel's direction into the metal, when a smooth start has no way."""


@dataclass(frozen=True, slots=True, eq=False)
class PortStart:
    """A port to be led out.

    Args:
        settings: the job's port. node: index of its node. xyz_mm: (3,).
        heading: (3,) unit, the channel's direction carried on, or None for a port amid a channel.
        into_metal: (3,) unit. bore_mm: bore of the channel there.
    """

    settings: PortSettings
    node: int
    xyz_mm: Floats
    heading: Floats | None
    into_metal: Floats
    bore_mm: float


@dataclass(frozen=True, slots=True, eq=False)
class Lead:
    """A lead that keeps its walls: the judged path, face and direction of its exit, and how it differs from the ideal.

    `kink_rad`: turn at the port; 0 when it carries on smoothly. `thinned`: share of the port's bore.
    """

    port: PortStart
    path: Judged
    face: str
    leave: Floats
    length_mm: float
    kink_rad: float
    thinned: float


@dataclass(frozen=True, slots=True, eq=False)
class Ground:
    """What all leads share: body, carrier, limits, the laid channels, and the profile's bend radius in bores."""

    blank: Blank
    carrier: Carrier
    limits: Limits
    strands: tuple[Strand, ...]
    n_nodes: int
    bend_bores: float


class _Blocked(Exception):
    """No legal way for one port: the best path tried, for the message."""

    def __init__(self, best: tuple[Judged, str] | None) -> None:
        self.best = best
        super().__init__()


def lay_leads(ground: Ground, ports: Sequence[PortStart], progress: Progress) -> tuple[Lead, ...]:
    """Returns one lead per port, in port order.

    Args:
        ground: body, carrier, limits and channels.
        ports: the ports in the job's order.
        progress: told after each lead.

    Raises:
        GeometryError: `lead-blocked` names what blocks the best way found; `exit-off-port-face`,
            `exit-without-wall`. SettingError: `leave-into-metal`, `leave-without-direction`.
    """
    order = list(range(len(ports)))
    tried: set[tuple[int, ...]] = set()
    while True:
        tried.add(tuple(order))
        laid: dict[int, Lead] = {}
        for k in order:
            progress.step("leads", len(laid), len(ports))
            try:
                laid[k] = _lay_lead(_surround(ground, ports[k], laid, ports), ground, ports[k])
            except _Blocked as blocked:
                again = [k, *(other for other in order if other != k)]
                if order[0] == k or tuple(again) in tried:
                    raise _blocked_error(ports[k], blocked.best, ground.limits) from None
                order = again
                break
        else:
            return tuple(laid[k] for k in range(len(ports)))


def _surround(ground: Ground, port: PortStart, laid: dict[int, Lead], ports: Sequence[PortStart]) -> Surroundings:
    from scipy.spatial import cKDTree

    strands = list(ground.strands)
    for k in sorted(laid):
        path = laid[k].path
        name = f"L-{ports[k].settings.name}"
        arc = polyline_arc_mm(path.xyz_mm)
        strands.append(Strand(name, ports[k].node, ground.n_nodes + k, path.xyz_mm, arc, path.bore_mm))
    network = make_network(strands, ground.n_nodes + len(ports))
    return Surroundings(ground.blank, ground.limits, network, cKDTree(network.xyz_mm), port.node)


def _lay_lead(around: Surroundings, ground: Ground, port: PortStart) -> Lead:
    best: tuple[Judged, str] | None = None
    tried: set[tuple[bool, bool, float]] = set()
    for kinked, detour, share in SEARCHES:
        bore = max(share * port.bore_mm, min(ground.limits.least_bore_mm, port.bore_mm))
        headings = _headings(port, kinked)
        if not headings or (kinked, detour, bore) in tried:
            continue
        tried.add((kinked, detour, bore))
        bend = _bend(ground, bore)
        bundles, kinks = [], []
        for kink, heading in headings:
            found = _candidates(ground, port, heading, bend, detour)
            bundles += found
            kinks += [kink] * len(found)
        lead, close = _first_legal(around, ground, port, bundles, kinks, bend)
        if lead is not None:
            return lead
        if close is not None and (best is None or close[0].share > best[0].share):
            best = close
    raise _Blocked(best)


def _headings(port: PortStart, kinked: bool) -> list[tuple[float, Floats]]:
    """Returns the headings to start along, each with its kink at the port in rad."""
    inward, ahead = port.into_metal, port.heading
    if ahead is None:
        return [] if kinked else [(0.0, inward)]
    if not kinked:
        return [(0.0, ahead)]
    across = unit_rows((inward - (inward @ ahead) * ahead)[None, :])[0]
    return [(float(turn), np.cos(turn) * ahead + np.sin(turn) * across) for turn in KINKS_RAD]


def _bend(ground: Ground, bore_mm: float) -> Bend:
    radius = max(LEAST_BEND_BORES, ground.bend_bores) * bore_mm
    return Bend(radius * BEND_MARGIN, STRAIGHT_BORES * bore_mm, bore_mm)


def _candidates(ground: Ground, port: PortStart, heading: Floats, bend: Bend, detour: bool) -> list[Bundle]:
    start = make_start(ground.carrier, port.xyz_mm, heading)
    leave = given_leave(port.settings)
    if port.settings.exit_mm is not None:
        places = [given_exit(ground.blank, port.settings, ground.limits.least_bore_mm, ground.limits)]
        found: list[Bundle] = []
    else:
        places = [
            list_sites(ground.blank, face, port.xyz_mm, bend.bore_mm, leave, ground.limits)
            for face in port_faces(ground.blank)
        ]
        frames = () if detour else (None, ground.carrier)
        found = [
            bundle for frame in frames for bundle in one_bend(start, ground.blank, bend, leave, ground.limits, frame)
        ]
    make = detours if detour else two_bends
    for sites in places:
        found += make(start, sites, bend, None) + make(start, sites, bend, ground.carrier)
    return [bundle for bundle in found if len(bundle.leave)]


def _first_legal(
    around: Surroundings,
    ground: Ground,
    port: PortStart,
    bundles: Sequence[Bundle],
    kinks: Sequence[float],
    bend: Bend,
) -> tuple[Lead | None, tuple[Judged, str] | None]:
    """Returns the shortest legal lead, or None and the path that comes closest with the name of its face."""
    points = [bundle.points(ground.carrier, COARSE_SAMPLES) for bundle in bundles]
    lengths = [np.linalg.norm(np.diff(p, axis=1), axis=2).sum(axis=1) for p in points]
    clear = [coarse_faces(around, p, bundle.face, bend.bore_mm) for p, bundle in zip(points, bundles, strict=True)]
    order = sort_bundles(bundles, lengths)
    clear_first = [(b, k) for b, k in order if clear[b][k]]
    # Nothing is clear of the faces: judge a few all the same, so that the message can say by how much.
    wanted = clear_first or order[:FOR_MESSAGE]
    best: Lead | None = None
    judged = 0
    for low in range(0, len(wanted), CHUNK):
        chunk = wanted[low : low + CHUNK]
        free = coarse_channels(around, np.array([points[b][k] for b, k in chunk]), bend.bore_mm)
        if best is None and not free.any():
            free[:FOR_MESSAGE] = True
        for (b, k), good in zip(chunk, free, strict=True):
            if not good:
                continue
            if judged >= MOST_JUDGED or (_legal(best) and lengths[b][k] > LONGER * best.length_mm):
                return _sorted_out(best)
            lead = _judge(around, ground, port, bundles[b], k, kinks[b], bend)
            judged += 1
            if lead is not None and lead.path.share >= 1.0 - FULL_SLACK:
                return lead, None
            if lead is not None and (best is None or (not _legal(best) and lead.path.share > best.path.share)):
                best = lead
    return _sorted_out(best)


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
    one = Bundle(bundle.paths.only(np.arange(len(bundle.leave)) == k), bundle.developed, bundle.face, bundle.leave[[k]])
    spacing = min(0.25 * ground.limits.least_bore_mm, 1.0)
    rough = one.points(ground.carrier, 256)
    if bundle.developed and float(least_bend_radius_mm(rough)[0]) < 0.999 * bend.radius_mm:
        return None
    length = float(np.linalg.norm(np.diff(rough, axis=1), axis=2).sum())
    fine = one.points(ground.carrier, max(8, int(np.ceil(1.05 * length / spacing)) + 1))[0]
    fine[0] = port.xyz_mm
    path = judge_path(around, fine, bundle.face, port.bore_mm, bend.bore_mm)
    size = float(polyline_arc_mm(fine)[-1])
    return Lead(port, path, bundle.face.name, bundle.leave[k], size, kink, bend.bore_mm / port.bore_mm)


def _blocked_error(port: PortStart, best: tuple[Judged, str] | None, limits: Limits) -> GeometryError:
    x, y, z = port.xyz_mm
    where = f"[[port]] '{port.settings.name}' at ({x:.2f}, {y:.2f}, {z:.2f}) mm"
    do = "Add a port face, move the port or what blocks it, give exit_mm, or allow a smaller bore or wall."
    if best is None:
        return GeometryError(
            "lead-blocked",
            expected="a way from the port to a port face, with its bends and a straight end square to the face",
            found="no path of that shape that ends on a port face with its walls",
            where=where,
            do=do,
        )
    path, face = best
    i, j, k = path.xyz_mm[path.worst]
    lack = 0.5 * (path.wanted_mm[path.worst] - path.room.room_mm[path.worst])
    name = path.room.by_names()[path.worst]
    return GeometryError(
        "lead-blocked",
        expected=f"the full wall to {name} along the way to face '{face}' for a bore of "
        f"{path.wanted_mm[path.worst]:.3f} mm (bands of {limits.band_mm:.3f} mm included)",
        found=f"{lack:.3f} mm too little at ({i:.2f}, {j:.2f}, {k:.2f}) mm on the best way tried",
        where=where,
        do=do,
    )
