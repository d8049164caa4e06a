"""Leads: one per port, laid one after the other in port order against everything laid before.

Each is the shortest way that keeps every wall (lead_search.py). A port left without a way goes first
in the next attempt; when it has none even then, the error names what blocks the best way tried.
Nothing is random.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from morph.body.end_room import Land
from morph.body.exit import given_exit
from morph.body.hole import Hole
from morph.body.lead_check import Judged, Surroundings
from morph.body.lead_ground import Blocked, Ground, Lead, PortStart
from morph.body.lead_search import find_lead
from morph.body.neighbour import Strand, make_network, polyline_arc_mm
from morph.body.room import Limits
from morph.core.errors import GeometryError
from morph.core.progress import Progress

__all__ = ["Ground", "Lead", "PortStart", "lay_leads", "lead_strand"]


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
    order = list(range(len(ports)))
    tried: set[tuple[int, ...]] = set()
    while True:
        tried.add(tuple(order))
        laid: dict[int, Lead] = {}
        for k in order:
            try:
                own = _with_ends(ground, k, given | {j: _take(lead, ground) for j, lead in laid.items()}, ports)
                around = _surround(own, ports[k], laid, ports)
                laid[k] = find_lead(around, own, ports[k], progress)
            except Blocked as blocked:
                again = [k, *(other for other in order if other != k)]
                if order[0] == k or tuple(again) in tried:
                    raise _stuck(around, own, ports[k], blocked, progress) from None
                order = again
                break
        else:
            return tuple(laid[k] for k in range(len(ports)))


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
        return _blocked_error(port, blocked.best, ground.limits)
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
        return _blocked_error(port, blocked.best, ground.limits)
    return GeometryError(
        "end-no-straight",
        expected=f"a straight run of {port.straight_mm(port.bore_mm):.2f} mm behind the exit for the {finish.words} "
        f"({finish.cut_depth_mm:.2f} mm deep, and the taper from pilot to channel), with its walls",
        found="no way from the port that ends so; a plain end would have one",
        where=where,
        do="Give the blank more margin below the sheet, a port face farther off, a smaller thread, or thread_depth_mm.",
    )


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
