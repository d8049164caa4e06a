"""Leads: one per port, laid one after the other in port order against everything laid before.

Each is the shortest way that keeps every wall (lead_search.py). A port left without a way goes first
in the next attempt; when it has none even then, the error names what blocks the best way tried.
Nothing is random.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from morph.body.lead_check import Judged, Surroundings
from morph.body.lead_search import Blocked, Ground, Lead, PortStart, find_lead
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
    order = list(range(len(ports)))
    tried: set[tuple[int, ...]] = set()
    while True:
        tried.add(tuple(order))
        laid: dict[int, Lead] = {}
        for k in order:
            try:
                laid[k] = find_lead(_surround(ground, ports[k], laid, ports), ground, ports[k], progress)
            except Blocked as blocked:
                again = [k, *(other for other in order if other != k)]
                if order[0] == k or tuple(again) in tried:
                    raise _blocked_error(ports[k], blocked.best, ground.limits) from None
                order = again
                break
        else:
            return tuple(laid[k] for k in range(len(ports)))


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
    network = make_network(strands, ground.n_nodes + len(ports))
    return Surroundings(ground.blank, ground.limits, network, cKDTree(network.xyz_mm), port.node)


def lead_strand(lead: Lead, end: int) -> Strand:
    """Returns the lead as a strand that ends at node index `end`."""
    path = lead.path
    name = f"L-{lead.port.settings.name}"
    return Strand(name, lead.port.node, end, path.xyz_mm, polyline_arc_mm(path.xyz_mm), path.bore_mm)


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
