"""What a job accepts, found among what the layout offers: by id, by place, or by both.

An id or a place that leads nowhere is an error that lists what there is; nothing is chosen for the user.
"""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import SettingError
from morph.layout.graph import Bridge, ChannelGraph, DeadEnd
from morph.layout.join import apply_choices
from morph.settings.job import AcceptSettings

REACH_BORES = 1.5
"""A place means the suggestion within this many bores of the dead ends there."""
SAME_MM = 0.1
"""Two suggestions this equally near to a place are not told apart by it."""


def accept(graph: ChannelGraph, accepts: tuple[AcceptSettings, ...], least_bore_mm: float = 0.0) -> ChannelGraph:
    """Returns `graph` with everything in `accepts` carried out.

    Args:
        graph: as found, with its suggestions and dead ends.
        accepts: the job's [[accept]] tables.
        least_bore_mm: least bore of a bridge (the process minimum).

    Raises:
        SettingError: an id or a place leads to nothing, moved, was given twice, or cannot be carried out.
    """
    if not accepts:
        return graph
    bridges: list[str] = []
    trims: list[str] = []
    for number, item in enumerate(accepts, 1):
        where = f"[[accept]] {number}"
        is_bridge = item.bridge is not None
        chosen, found = bridges if is_bridge else trims, _find(graph, item, where, is_bridge)
        if found in chosen:
            raise SettingError(
                "accept-twice",
                expected="each suggestion once",
                found=f"{found} a second time",
                where=where,
                do="Remove the repeated table.",
            )
        chosen.append(found)
    return apply_choices(graph, bridges, trims, least_bore_mm)


def _find(graph: ChannelGraph, item: AcceptSettings, where: str, is_bridge: bool) -> str:
    """Returns the id of the suggestion that `item` means."""
    known: dict[str, Bridge | DeadEnd] = {
        offer.id: offer for offer in (graph.bridges if is_bridge else graph.dead_ends)
    }
    wanted = item.bridge if is_bridge else item.trim
    listed = "; ".join(_sentence(offer) for offer in known.values()) or "none"
    if isinstance(wanted, str):
        if wanted not in known:
            raise SettingError(
                "bridge-unknown" if is_bridge else "trim-unknown",
                expected=f"one of: {listed}",
                found=wanted,
                where=where,
                do="The layout no longer offers it; look at the layout and choose again.",
            )
        if item.at_mm is None:
            return wanted
        away_mm, reach_mm = _away_mm(graph, known[wanted], item.at_mm)
        if away_mm > reach_mm:
            raise SettingError(
                "accept-moved",
                expected=f"{wanted} within {reach_mm:.1f} mm of [{item.at_mm[0]:g}, {item.at_mm[1]:g}] mm",
                found=f"it {away_mm:.1f} mm away; offered: {listed}",
                where=where,
                do="The layout has changed; look at it and choose again.",
            )
        return wanted
    assert item.at_mm is not None
    return _nearest(graph, list(known.values()), item.at_mm, where, listed)


def _nearest(
    graph: ChannelGraph, known: list[Bridge | DeadEnd], at_mm: tuple[float, float], where: str, listed: str
) -> str:
    ranked = []
    for offer in known:
        away_mm, reach_mm = _away_mm(graph, offer, at_mm)
        if away_mm <= reach_mm:
            ranked.append((away_mm, offer.id))
    ranked.sort()
    if not ranked:
        raise SettingError(
            "accept-no-place",
            expected=f"a place at one of: {listed}",
            found=f"[{at_mm[0]:g}, {at_mm[1]:g}] mm, where nothing is offered",
            where=where,
            do="Look at the layout and give the place of one of them.",
        )
    if len(ranked) > 1 and ranked[1][0] - ranked[0][0] < SAME_MM:
        raise SettingError(
            "accept-ambiguous",
            expected="a place nearer to one suggestion than to others",
            found=f"[{at_mm[0]:g}, {at_mm[1]:g}] mm, as near to {ranked[0][1]} as to {ranked[1][1]}",
            where=where,
            do="Give the id instead, or a place further along its way.",
        )
    return ranked[0][1]


def _away_mm(graph: ChannelGraph, offer: Bridge | DeadEnd, at_mm: tuple[float, float]) -> tuple[float, float]:
    """Returns how far a place lies from a suggestion's way, or a dead end, and how far it may."""
    if isinstance(offer, DeadEnd):
        return _distance_mm(np.array([offer.sheet_mm]), at_mm, graph.turn_mm), REACH_BORES * offer.bore_mm
    bores = [end.bore_mm for end in graph.dead_ends if end.node in {offer.node, offer.onto}]
    return _distance_mm(offer.path_mm, at_mm, graph.turn_mm), REACH_BORES * max(bores)


def _distance_mm(path_mm: Floats, at_mm: tuple[float, float], turn_mm: float | None) -> float:
    across = path_mm[:, 0] - at_mm[0]
    if turn_mm is not None:
        across = across - turn_mm * np.round(across / turn_mm)
    return float(np.hypot(across, path_mm[:, 1] - at_mm[1]).min())


def _sentence(offer: Bridge | DeadEnd) -> str:
    if isinstance(offer, DeadEnd):
        return f"{offer.id} at [{offer.sheet_mm[0]:.1f}, {offer.sheet_mm[1]:.1f}] mm ({offer.length_mm:.1f} mm long)"
    x, y = offer.middle_mm
    return f"{offer.id} at [{x:.1f}, {y:.1f}] mm ({offer.grey_mm:.1f} mm of grey on to {offer.onto})"
