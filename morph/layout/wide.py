"""Headers and lakes: stretches of the layout wider than any legal bore, outlined and treated by rule.

`cap` leaves one branch, which later gets the largest legal bore; `split` puts several parallel branches of legal
bore in its place, joined at both ends; `error` refuses. A split keeps the conductance of the stretch as drawn for
turbulent flow in smooth round bores after Blasius (1913): the loss along a bore d is proportional to
L Q^(7/4) d^(-19/4), so parallel ways of bore d and lengths L_i carry what one of bore b(s) carries when

    sum(L_i^(-4/7)) d^(19/7) = (integral of b^(-19/4) ds)^(-4/7).

Coolant in moulds is kept turbulent (common practice, no source); in laminar flow, where a bore counts with its fourth
power, the ways carry less, and that share is told too.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import GeometryError
from morph.core.verdict import Notice
from morph.layout.graph import Branch, ChannelGraph
from morph.settings.job import ServiceSettings, WideRule

SLACK = 1e-3
SHORTEST_BORES = 0.5
"""What is left of a branch beside a wide stretch is part of it when it is shorter than this many legal bores."""
LAW = "turbulent flow in smooth round bores after Blasius"
BORE_POWER, LENGTH_POWER = 19.0 / 7.0, -4.0 / 7.0
LAMINAR_POWER = 4.0


@dataclass(frozen=True, slots=True, eq=False)
class WideRegion:
    """A connected stretch of the layout wider than the largest legal bore.

    Args:
        id: "W1" ..., numbered by (y, x) of its middle. branches: ids in the graph before anything was split.
        outline_mm: (k, 2) closed outline. sheet_mm: middle.
        widest_mm: largest bore. length_mm: of centrelines. area_mm2: of the region.
        lost_mm2: area that is lost when it is capped; 0 when all of it is split.
        ways: parallel branches in its place, 1 where it is capped. bore_mm: theirs.
        conductance_ratio: flow they carry over that of the stretch as drawn, by the law.
        laminar_ratio: the same in laminar flow.
        said: what was done, as a sentence.
    """

    id: str
    branches: tuple[str, ...]
    outline_mm: Floats
    sheet_mm: tuple[float, float]
    widest_mm: float
    length_mm: float
    area_mm2: float
    lost_mm2: float
    ways: int
    bore_mm: float
    conductance_ratio: float
    laminar_ratio: float
    said: str

    def __post_init__(self) -> None:
        object.__setattr__(self, "outline_mm", frozen_floats("outline_mm", self.outline_mm, (None, 2)))


@dataclass(frozen=True, slots=True)
class Stretch:
    """Samples `first` to `last` of a branch, both included, that are wider than legal."""

    branch: Branch
    first: int
    last: int

    @property
    def place_mm(self) -> Floats:
        """(k, 2) its samples."""
        return self.branch.sheet_mm[self.first : self.last + 1]

    @property
    def bore_mm(self) -> Floats:
        """(k,) its bores."""
        return self.branch.bore_mm[self.first : self.last + 1]


def legal_bore_mm(range_mm: tuple[float, float], depth_mm: float | None, service: ServiceSettings) -> float:
    """Returns the largest bore that the range and, at a given depth, the service wall to the face allow, in mm.

    wall = depth - bore / 2 must reach wall_face_mm and wall_face_bores times the bore (roofs need more; room says).
    """
    if depth_mm is None:
        return range_mm[1]
    by_wall = 2.0 * (depth_mm - service.wall_face_mm)
    by_bores = depth_mm / (0.5 + service.wall_face_bores)
    return max(min(range_mm[1], by_wall, by_bores), range_mm[0])


def find_stretches(graph: ChannelGraph, widest_mm: float) -> list[Stretch]:
    """Returns the stretches of branches with a bore above `widest_mm`, short remains beside them included."""
    found = []
    for branch in graph.branches:
        wide = np.asarray(branch.bore_mm) > widest_mm * (1.0 + SLACK)
        step = np.diff(np.concatenate([[0], wide.astype(np.int8), [0]]))
        arc = _arc_mm(branch.sheet_mm)
        spans: list[list[int]] = []
        for first, last in zip(
            np.flatnonzero(step == 1).tolist(), (np.flatnonzero(step == -1) - 1).tolist(), strict=True
        ):
            if spans and arc[first] - arc[spans[-1][1]] < SHORTEST_BORES * widest_mm:
                spans[-1][1] = last
            else:
                spans.append([first, last])
        for first, last in spans:
            low = 0 if arc[first] < SHORTEST_BORES * widest_mm else first
            high = len(arc) - 1 if arc[-1] - arc[last] < SHORTEST_BORES * widest_mm else last
            if high > low:
                found.append(Stretch(branch, low, high))
    return found


def treat_wide(
    graph: ChannelGraph, rule: WideRule, widest_mm: float, wall_mm: float, least_bore_mm: float = 0.0
) -> tuple[ChannelGraph, tuple[WideRegion, ...]]:
    """Returns the graph with its wide regions treated by `rule`, and the regions with what was done.

    Args:
        graph: the channel graph; ids of branches are numbered anew when something is split.
        rule: cap, split or error.
        widest_mm: the largest legal bore, in the layout's own scale.
        wall_mm: least metal between two parallel branches.
        least_bore_mm: no branch of a split is narrower.

    Raises:
        GeometryError: `wide-region-refused` when the rule is error and there is one.
    """
    from morph.layout.split import split_stretches

    stretches = find_stretches(graph, widest_mm)
    if not stretches:
        return graph, ()
    if rule is WideRule.ERROR:
        worst = max(stretches, key=lambda item: float(item.bore_mm.max()))
        x, y = worst.place_mm[int(np.argmax(worst.bore_mm))].tolist()
        raise GeometryError(
            "wide-region-refused",
            expected=f"channels up to the largest legal bore of {widest_mm:.2f} mm",
            found=f"{float(worst.bore_mm.max()):.2f} mm on branch {worst.branch.id} at [{x:.1f}, {y:.1f}] mm"
            + (f", and {len(stretches) - 1} other stretches" if len(stretches) > 1 else ""),
            where='[layout] wide = "error"',
            do='Narrow the layout there, or set wide to "cap" or "split".',
        )
    done: dict[int, Done] = {}
    if rule is WideRule.SPLIT:
        graph, done = split_stretches(graph, stretches, widest_mm, wall_mm, least_bore_mm)
    return graph, _regions(stretches, widest_mm, done)


def settle_wide(
    graph: ChannelGraph, rule: WideRule, widest_mm: float, wall_mm: float, least_bore_mm: float = 0.0
) -> tuple[ChannelGraph, tuple[WideRegion, ...]]:
    """Returns what `treat_wide` returns, each region that was to be split told as a notice of the graph.

    Arguments as for `treat_wide`; with the rule cap nothing is changed and nothing told: the bores are capped, and
    named, where room is known.

    Raises:
        GeometryError: `wide-region-refused`.
    """
    graph, regions = treat_wide(graph, rule, widest_mm, wall_mm, least_bore_mm)
    if rule is WideRule.CAP:
        return graph, regions
    told = tuple(
        Notice(
            "wide-treated",
            f"Wide region {item.id} at [{item.sheet_mm[0]:.1f}, {item.sheet_mm[1]:.1f}] mm, {item.length_mm:.1f} mm "
            f"long and up to {item.widest_mm:.1f} mm wide, is {item.said}.",
            (),
            item.sheet_mm,
        )
        for item in regions
    )
    return replace(graph, notices=graph.notices + told), regions


def settled(
    graph: ChannelGraph, rule: WideRule, widest_mm: float, wall_mm: float, least_bore_mm: float = 0.0
) -> ChannelGraph:
    """Returns the graph of `settle_wide` alone."""
    return settle_wide(graph, rule, widest_mm, wall_mm, least_bore_mm)[0]


@dataclass(frozen=True, slots=True)
class Done:
    """What a stretch was split into: ways, their bore, flow over the drawn one's by the law and in laminar flow."""

    ways: int
    bore_mm: float
    conductance_ratio: float
    laminar_ratio: float
    why_not: str = ""


def _regions(stretches: list[Stretch], widest_mm: float, done: dict[int, Done]) -> tuple[WideRegion, ...]:
    """Returns the connected regions that the stretches cover."""
    from shapely import unary_union

    shapes = [_shape(item, None) for item in stretches]
    whole = unary_union(shapes)
    found = []
    for area in getattr(whole, "geoms", [whole]):
        members = [number for number, shape in enumerate(shapes) if area.intersects(shape.representative_point())]
        split = {number: done[number] for number in members if number in done and done[number].ways > 1}
        capped = [number for number in members if number not in split]
        narrow = unary_union([_shape(stretches[number], widest_mm) for number in capped]).area if capped else 0.0
        wide = unary_union([shapes[number] for number in capped]).area if capped else 0.0
        found.append(_region(area, [stretches[number] for number in members], members, done, widest_mm, wide - narrow))
    found.sort(key=lambda item: (round(item.sheet_mm[1], 1), round(item.sheet_mm[0], 1)))
    return tuple(replace(item, id=f"W{number}") for number, item in enumerate(found, 1))


def _region(
    area: Any, stretches: list[Stretch], members: list[int], done: dict[int, Done], widest_mm: float, lost_mm2: float
) -> WideRegion:
    worst = max(range(len(members)), key=lambda index: float(stretches[index].bore_mm.max()))
    result = done.get(members[worst], Done(1, widest_mm, 1.0, 1.0))
    middle = area.representative_point()
    drawn = [_drawn_flow(item, BORE_POWER, LENGTH_POWER) for item in stretches]
    if result.ways == 1:
        length_mm = _arc_mm(stretches[worst].place_mm)[-1]
        result = replace(
            result,
            bore_mm=widest_mm,
            conductance_ratio=float(length_mm**LENGTH_POWER * widest_mm**BORE_POWER / drawn[worst]),
            laminar_ratio=float(
                widest_mm**LAMINAR_POWER / length_mm / _drawn_flow(stretches[worst], LAMINAR_POWER, -1.0)
            ),
        )
    return WideRegion(
        "W0",
        tuple(dict.fromkeys(item.branch.id for item in stretches)),
        np.asarray(area.exterior.coords, dtype=np.float64),
        (float(middle.x), float(middle.y)),
        float(max(item.bore_mm.max() for item in stretches)),
        float(sum(_arc_mm(item.place_mm)[-1] for item in stretches)),
        float(area.area),
        max(0.0, float(lost_mm2)),
        result.ways,
        result.bore_mm,
        result.conductance_ratio,
        result.laminar_ratio,
        _said(result, lost_mm2),
    )


def _said(result: Done, lost_mm2: float) -> str:
    by_law, laminar = 100.0 * result.conductance_ratio, 100.0 * result.laminar_ratio
    kept = f"{by_law:.0f} % of the flow as drawn ({LAW}; {laminar:.0f} % if laminar)"
    if result.ways > 1:
        return f"split into {result.ways} ways of {result.bore_mm:.2f} mm, which carry {kept}"
    because = f" because {result.why_not}" if result.why_not else ""
    return f"capped to one branch of {result.bore_mm:.2f} mm{because}: {lost_mm2:.1f} mm2 are lost, it carries {kept}"


def _drawn_flow(item: Stretch, bore_power: float, length_power: float) -> float:
    """Returns what the stretch as drawn carries at one unit of head, by Q = L^length_power d^bore_power per piece."""
    arc = _arc_mm(item.place_mm)
    loss = np.trapezoid(item.bore_mm ** (bore_power / length_power), arc)
    return float(loss**length_power)


def _shape(item: Stretch, most_mm: float | None) -> Any:
    """Returns the area that a stretch covers, its bores held to `most_mm`."""
    from shapely import Point, unary_union

    keep = np.unique(np.linspace(0, len(item.place_mm) - 1, min(len(item.place_mm), 200)).round().astype(int))
    bore = item.bore_mm if most_mm is None else np.minimum(item.bore_mm, most_mm)
    discs = [Point(*item.place_mm[index]).buffer(0.5 * float(bore[index])) for index in keep]
    return unary_union([one.union(two).convex_hull for one, two in itertools.pairwise(discs)] or discs)


def _arc_mm(place_mm: Floats) -> Floats:
    return np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(place_mm, axis=0).T))])
