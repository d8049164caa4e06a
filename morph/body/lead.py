"""Leads: one per port, laid one after the other in port order against everything laid before.

Each is the shortest way that keeps every wall (lead_search.py). A port left without a way goes first
in the next attempt, and other orders are tried when that moves the trouble to another port; when a port
has no way even then, the error names what blocks it and where it would have one (lead_block.py). Nothing
is random.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from morph.body.end_room import Land
from morph.body.exit import given_exit, port_faces
from morph.body.hole import Hole
from morph.body.lead_block import find_narrow, other_exit
from morph.body.lead_check import Judged, Surroundings
from morph.body.lead_ground import LEAST_BEND_BORES, Blocked, Ground, Lead, PortStart
from morph.body.lead_search import find_lead
from morph.body.neighbour import Strand, make_network, polyline_arc_mm
from morph.core.errors import GeometryError
from morph.core.progress import Progress

__all__ = ["Ground", "Lead", "PortStart", "lay_leads", "lead_strand"]


MOST_PERMUTATIONS = 5040

MOST_ORDERS = 8
"""Orders of the ports in which their leads are laid before a port counts as blocked."""


def lay_leads(ground: Ground, ports: Sequence[PortStart], progress: Progress) -> tuple[Lead, ...]:
    """Returns one lead per port, in port order.

    Args:
        ground: body, carrier, limits and channels.
        ports: the ports in the job's order.
        progress: told before each search of each lead.

    Raises:
        GeometryError: `lead-blocked` names what blocks the best way found; `exit-off-port-face`,
            `exit-without-wall`, `exits-too-near`. SettingError: `leave-into-metal`, `leave-without-direction`.
    """
    _require_exits_apart(ground, ports)
    given = {k: taken for k, port in enumerate(ports) if (taken := _take_given(ground, port)) is not None}
    order = tuple(range(len(ports)))
    behind: list[tuple[int, int]] = []  # (port that was blocked, one of those that were laid before it)
    tried: set[tuple[int, ...]] = set()
    while True:
        tried.add(order)
        laid: dict[int, Lead] = {}
        for k in order:
            try:
                own = _with_ends(ground, k, given | {j: _take(lead, ground) for j, lead in laid.items()}, ports)
                around = _surround(own, ports[k], laid, ports)
                laid[k] = find_lead(around, own, ports[k], progress)
            except Blocked as blocked:
                behind += [(k, j) for j in laid]
                again = _next_order(order, k, behind, tried) if laid and len(tried) < MOST_ORDERS else None
                if again is None:
                    raise _stuck(around, own, ports[k], blocked, progress) from None
                order = again
                break
        else:
            return tuple(laid[k] for k in range(len(ports)))


def _next_order(
    order: tuple[int, ...], blocked: int, behind: Sequence[tuple[int, int]], tried: set[tuple[int, ...]]
) -> tuple[int, ...] | None:
    """Returns an order not yet tried: the blocked port first, or the one that repeats the fewest failures."""
    first = (blocked, *(other for other in order if other != blocked))
    if first not in tried:
        return first
    best: tuple[int, tuple[int, ...]] | None = None
    for one in itertools.islice(itertools.permutations(range(len(order))), MOST_PERMUTATIONS):
        place = {port: k for k, port in enumerate(one)}
        repeats = sum(place[k] > place[j] for k, j in behind)
        if one not in tried and (best is None or (repeats, one) < best):
            best = repeats, one
    return None if best is None else best[1]


@dataclass(frozen=True, slots=True, eq=False)
class _Taken:
    """What the end of one port takes: the circle of its face, and what is cut there as holes."""

    land: Land
    cuts: tuple[Hole, ...]


def _take(lead: Lead, ground: Ground) -> _Taken:
    name, place = lead.port.settings.name, lead.path.xyz_mm[-1]
    finish = lead.port.finish_on(lead.face)
    size = max(finish.land_mm, float(lead.path.bore_mm[-1]))
    cuts = finish.cut(name, place, lead.leave, ground.limits.between_mm)
    return _Taken(Land(name, lead.face, place, size), cuts)


def _take_given(ground: Ground, port: PortStart) -> _Taken | None:
    """Returns what the end of a port takes whose job gives its exit; None when morph chooses it."""
    if port.settings.exit_mm is None:
        return None
    site = given_exit(ground.blank, port.settings, ground.limits.least_bore_mm, ground.limits)
    name, place = port.settings.name, site.xyz_mm[0]
    finish = port.finish_on(site.face.name)
    size = max(finish.land_mm, port.bore_mm)
    return _Taken(
        Land(name, site.face.name, place, size), finish.cut(name, place, site.leave[0], ground.limits.between_mm)
    )


def _with_ends(ground: Ground, own: int, taken: Mapping[int, _Taken], ports: Sequence[PortStart]) -> Ground:
    """Returns the ground for port number `own`: what the ends of the others cut are holes in it, their lands are taken.

    Two plain ends need no land: their leads keep clear of each other by themselves.
    """
    others = [taken[k] for k in sorted(taken) if k != own]
    cuts = tuple(hole for one in others for hole in one.cuts)
    blank = replace(ground.blank, holes=(*ground.blank.holes, *cuts)) if cuts else ground.blank
    lands = tuple(taken[k].land for k in sorted(taken) if k != own and (ports[own].finishes or ports[k].finishes))
    return replace(ground, blank=blank, lands=lands)


def _require_exits_apart(ground: Ground, ports: Sequence[PortStart]) -> None:
    """Raises `exits-too-near` when two given exits cannot keep a wall between even the least bores."""
    given = [port.settings for port in ports if port.settings.exit_mm is not None]
    needed = ground.limits.least_bore_mm + ground.limits.between_mm + ground.limits.band_mm
    for k, one in enumerate(given):
        for other in given[:k]:
            apart = float(np.linalg.norm(np.subtract(one.exit_mm or (), other.exit_mm or ())))
            if apart < needed:
                raise GeometryError(
                    "exits-too-near",
                    expected=f"at least {needed:.3f} mm between two exits (least bore plus wall and bands)",
                    found=f"{apart:.3f} mm",
                    where=f"[[port]] '{other.name}' and '{one.name}' exit_mm",
                    do="Move the exits apart, or allow a smaller bore or wall.",
                )


def _surround(ground: Ground, port: PortStart, laid: dict[int, Lead], ports: Sequence[PortStart]) -> Surroundings:
    from scipy.spatial import cKDTree

    strands = list(ground.strands)
    for k in sorted(laid):
        strands.append(lead_strand(laid[k], ground.n_nodes + k))
    network = make_network(strands, ground.n_nodes + len(ports), ground.limits.section)
    return Surroundings(ground.blank, ground.limits, network, cKDTree(network.xyz_mm), port.node)


def lead_strand(lead: Lead, end: int) -> Strand:
    """Returns the lead as a strand that ends at node index `end`."""
    path = lead.path
    name = f"L-{lead.port.settings.name}"
    return Strand(name, lead.port.node, end, path.xyz_mm, polyline_arc_mm(path.xyz_mm), path.bore_mm)


def _stuck(
    around: Surroundings, ground: Ground, port: PortStart, blocked: Blocked, progress: Progress
) -> GeometryError:
    """Returns the error for a port without a way: of its end when that is what does not fit, else of its way."""
    if not port.finishes:
        return _blocked_error(around, ground, port, blocked.best)
    finish = port.finishes[0][1]
    x, y, z = port.xyz_mm
    where = f"[[port]] '{port.settings.name}' at ({x:.2f}, {y:.2f}, {z:.2f}) mm"
    if not blocked.fits.any_fits:
        return GeometryError(
            "end-no-place",
            expected=f"a place on a flat port face for the {finish.words}: a land {finish.land_mm:.2f} mm across and a "
            f"cut {finish.cut_mm:.2f} mm across and {finish.cut_depth_mm:.2f} mm deep, with its walls",
            found=blocked.fits.nearest_words(),
            where=where,
            do="Make the face or the margin larger, choose a smaller thread, or give land_mm or thread_depth_mm.",
        )
    try:
        find_lead(around, ground, replace(port, finishes=()), progress)
    except Blocked:
        return _blocked_error(around, ground, port, blocked.best)
    return GeometryError(
        "end-no-straight",
        expected=f"a straight run of {port.straight_mm(port.bore_mm):.2f} mm behind the exit for the {finish.words} "
        f"({finish.cut_depth_mm:.2f} mm deep, and the taper from pilot to channel), with its walls",
        found="no way from the port that ends so; a plain end would have one",
        where=where,
        do="Give the blank more margin below the sheet, a port face farther off, a smaller thread, or thread_depth_mm.",
    )


def _blocked_error(
    around: Surroundings, ground: Ground, port: PortStart, best: tuple[Judged, str] | None
) -> GeometryError:
    """Returns the error for a port without a way: what blocks it, and where it would have one."""
    x, y, z = port.xyz_mm
    exit_mm = None if port.settings.exit_mm is None else np.array(port.settings.exit_mm)
    narrow = find_narrow(around, ground, port, exit_mm)
    faces = ", ".join(f"'{face.name}'" for face in port_faces(ground.blank))
    goal = f"to a port face ({faces})" if exit_mm is None else "to its exit_mm"
    bore = ground.limits.least_bore_mm
    if narrow is not None:
        i, j, k = narrow.xyz_mm
        expected = f"the full wall to {narrow.by} on the way {goal} for the least bore of {bore:.3f} mm with its bands"
        place = f"({i:.2f}, {j:.2f}, {k:.2f}) mm, the tightest place of the widest way"
        found = f"{narrow.lack_mm:.3f} mm too little at {place}"
    else:
        radius = max(LEAST_BEND_BORES, ground.bend_bores) * bore
        expected = f"a way {goal} with bends of at least {radius:.2f} mm radius and a straight end square to the face"
        found = "walls that leave a way, but none that bends so wide"
        if best is not None:
            path = best[0]
            i, j, k = path.xyz_mm[path.worst]
            lack = max(0.5 * float(path.wanted_mm[path.worst] - path.room.room_mm[path.worst]), 0.0)
            name = path.room.by_names()[path.worst]
            found += f"; the best comes {lack:.3f} mm too little clear of {name} at ({i:.2f}, {j:.2f}, {k:.2f}) mm"
    return GeometryError(
        "lead-blocked",
        expected=expected,
        found=found,
        where=f"[[port]] '{port.settings.name}' at ({x:.2f}, {y:.2f}, {z:.2f}) mm",
        do=f"{other_exit(around, ground, port)} Or move the port or what blocks it, or allow a smaller bore or wall.",
    )
