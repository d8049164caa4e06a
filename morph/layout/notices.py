"""The sentences of the layout stage: what it left out, what is odd, each with place and figure."""

from __future__ import annotations

from morph.core.verdict import Notice
from morph.core.words import counted
from morph.layout.graph import Accepted, Bridge, Dropped, LevelCount

Place = tuple[float, float]


def _at(place: Place) -> str:
    return f"[{place[0]:.1f}, {place[1]:.1f}] mm"


def topology_differs(picture: tuple[int, int], graph: tuple[int, int]) -> Notice:
    """Says that pieces or loops of the graph are not those of the picture, on any grid tried."""
    return Notice(
        "topology-differs",
        f"The graph has {counted(graph[0], 'piece')} and {counted(graph[1], 'loop')}, the image "
        f"{counted(picture[0], 'piece')} and {counted(picture[1], 'hole')}; "
        "look at the layout before building on it.",
    )


def level_decides(levels: tuple[LevelCount, ...], level: float) -> list[Notice]:
    """Says that a level a little lower or higher gives other pieces or holes."""
    here = next(count for count in levels if count.level == level)
    others = [c for c in levels if (c.pieces, c.holes) != (here.pieces, here.holes)]
    if not others:
        return []
    listed = "; ".join(f"{counted(c.pieces, 'piece')} and {counted(c.holes, 'hole')} at {c.level:.2f}" for c in levels)
    return [Notice("level-decides", f"The level decides what is connected: {listed}. Used: {level:.3f}.")]


def dead_end(place: Place, branch: str, length_mm: float) -> Notice:
    """Names a branch that ends blind."""
    return Notice(
        "dead-end", f"Branch {branch} ends blind at {_at(place)}; it is {length_mm:.1f} mm long.", (branch,), place
    )


def open_end(place: Place, branch: str, bore_mm: float) -> Notice:
    """Names a channel cut by the frame that no port claims."""
    return Notice(
        "open-end-not-declared",
        f"Branch {branch} is cut by the frame at {_at(place)} with a bore of {bore_mm:.1f} mm, but no port is declared "
        "there; it ends blind.",
        (branch,),
        place,
    )


def wide_region(place: Place, branch: str, bore_mm: float, length_mm: float) -> Notice:
    """Names a branch that is wider than it is long."""
    return Notice(
        "wide-region",
        f"Branch {branch} at {_at(place)} is {bore_mm:.1f} mm wide and only {length_mm:.1f} mm long: a wide region is "
        "read as one fat branch.",
        (branch,),
        place,
    )


def piece_without_port(dropped: Dropped) -> Notice:
    """Names a piece that is left out because no port reaches it."""
    return Notice(
        "piece-without-port",
        f"The piece around {_at(dropped.sheet_mm)} ({dropped.area_mm2:.1f} mm2) has no port and is left out.",
        (),
        dropped.sheet_mm,
    )


def fit_deviation(place: Place, branch: str, deviation_mm: float, allowed_mm: float) -> Notice:
    """Says that a fitted centreline is further from the measured one than promised."""
    return Notice(
        "fit-deviation",
        f"The centreline of branch {branch} is {deviation_mm:.3f} mm off the measured one near {_at(place)}; "
        f"{allowed_mm:.3f} mm (0.10 of the local width) was the bound.",
        (branch,),
        place,
    )


def likely_bridge(bridge: Bridge) -> Notice:
    """Names a grey gap that looks like a blocked channel."""
    place = (float(bridge.path_mm[0, 0]), float(bridge.path_mm[0, 1]))
    return Notice(
        "bridge-suggested",
        f"Suggestion {bridge.id}: the dead end at {_at(place)} looks blocked; {bridge.gap_mm:.1f} mm on, through a "
        f"density of at least {bridge.lowest_density:.2f}, it would meet {bridge.onto}. "
        "It is not built unless accepted.",
        (),
        place,
    )


def accepted(done: Accepted) -> Notice:
    """Says what was built or taken off because the job accepts it."""
    if done.what == "bridge":
        return Notice(
            "bridge-built",
            f"Suggestion {done.id} is built as accepted: from {_at(done.sheet_mm)}, {done.length_mm:.1f} mm long, mean "
            f"bore {done.bore_mm:.1f} mm.",
            (),
            done.sheet_mm,
        )
    return Notice(
        "dead-end-trimmed",
        f"Dead end {done.id} at {_at(done.sheet_mm)} is taken off as accepted: {done.length_mm:.1f} mm, mean bore "
        f"{done.bore_mm:.1f} mm.",
        (),
        done.sheet_mm,
    )
