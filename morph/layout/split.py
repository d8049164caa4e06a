"""Wide stretches split into parallel branches that part and meet again at its two ends."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats
from morph.layout.assemble import Parts, assemble
from morph.layout.dead_ends import known_of
from morph.layout.graph import ChannelGraph
from morph.layout.join import web_of
from morph.layout.web import Joint, Run, Web, arc_mm
from morph.layout.wide import BORE_POWER, LAMINAR_POWER, LENGTH_POWER, Done, Stretch

MOST_WAYS = 24
STEEPEST = 1.0
"""The ways part at no more than this slope (45 degrees)."""
BULGE = 1.5
"""Largest slope of the way aside, over its mean slope."""
TIGHTEST = 0.3
"""A way aside keeps at least this share of the centreline's length on the inner side of a bend."""


@dataclass(frozen=True, slots=True, eq=False)
class _Ways:
    """Parallel ways (k, 2) of one bore, and what they carry."""

    place_mm: tuple[Floats, ...]
    done: Done


def split_stretches(
    graph: ChannelGraph, stretches: list[Stretch], widest_mm: float, wall_mm: float, least_bore_mm: float
) -> tuple[ChannelGraph, dict[int, Done]]:
    """Returns the graph with its wide stretches split, and what each became by its number.

    Args:
        graph: the channel graph.
        stretches: of its branches.
        widest_mm: largest legal bore.
        wall_mm: least metal between two ways, and between a way and another branch.
        least_bore_mm: least bore of a way.
    """
    found = {
        number: _make_ways(graph, item, widest_mm, wall_mm, least_bore_mm) for number, item in enumerate(stretches)
    }
    done = {number: ways.done for number, ways in found.items()}
    if all(item.ways == 1 for item in done.values()):
        return graph, done
    web, joint_of, kept = web_of(graph)
    run_of = {branch.id: key for key, branch in kept.items()}
    for branch in graph.branches:
        mine = [(number, item) for number, item in enumerate(stretches) if item.branch.id == branch.id]
        mine = [(number, item) for number, item in mine if done[number].ways > 1]
        if mine:
            _replace(web, run_of[branch.id], [(item, found[number]) for number, item in mine])
    parts = Parts(
        graph.size_mm,
        graph.level,
        graph.area_ratio,
        graph.dropped,
        graph.levels,
        tuple(notice for notice in graph.notices if not notice.branch_ids),
        0.0,
        graph.turn_mm,
        {joint_of[end.node]: known_of(end) for end in graph.dead_ends},
        graph.accepted,
    )
    left = {key: branch for key, branch in kept.items() if key in web.runs}
    return assemble(web, parts, [], left), done


def _make_ways(graph: ChannelGraph, item: Stretch, widest_mm: float, wall_mm: float, least_bore_mm: float) -> _Ways:
    """Returns the fewest ways that carry what the stretch carries; the most that fit when so many do not."""
    place, bore = item.place_mm, np.asarray(item.bore_mm)
    wanted = _flow(place, bore, BORE_POWER, LENGTH_POWER)
    laminar = _flow(place, bore, LAMINAR_POWER, -1.0)
    best, why_not = None, "it is too short to part and meet again"
    for n in range(2, MOST_WAYS + 1):
        lines = _lines(place, n, widest_mm + wall_mm)
        if lines is None:
            break
        hit = _hit(graph, item, lines, widest_mm, wall_mm)
        if hit:
            why_not = hit
            break
        share = sum(float(arc_mm(line)[-1]) ** LENGTH_POWER for line in lines)
        needed = (wanted / share) ** (1.0 / BORE_POWER)
        bore_mm = min(max(needed, least_bore_mm), widest_mm)
        flow = share * bore_mm**BORE_POWER
        slow = sum(bore_mm**LAMINAR_POWER / float(arc_mm(line)[-1]) for line in lines)
        best = _Ways(tuple(lines), Done(n, bore_mm, flow / wanted, slow / laminar))
        if needed <= widest_mm:
            break
    return best or _Ways((), Done(1, widest_mm, 1.0, 1.0, why_not))


def _flow(place: Floats, bore: Floats, bore_power: float, length_power: float) -> float:
    """Returns what the stretch carries at one unit of head, by Q = L^length_power d^bore_power per piece."""
    loss = float(np.trapezoid(bore ** (bore_power / length_power), arc_mm(place)))
    return float(loss**length_power)


def _lines(place: Floats, n: int, pitch_mm: float) -> list[Floats] | None:
    """Returns `n` lines beside each other, `pitch_mm` apart, that part and meet at both ends; None without room."""
    arc = arc_mm(place)
    offset = (np.arange(n) - 0.5 * (n - 1)) * pitch_mm
    ramp_mm = BULGE * float(offset[-1]) / STEEPEST
    if arc[-1] < 2.0 * ramp_mm + pitch_mm:
        return None
    at = np.linspace(0.0, arc[-1], max(20, int(arc[-1] / 0.25) + 1))
    middle = np.column_stack([np.interp(at, arc, place[:, axis]) for axis in (0, 1)])
    tangent = np.gradient(middle, at, axis=0)
    tangent /= np.hypot(*tangent.T)[:, None]
    turn = np.gradient(np.unwrap(np.arctan2(tangent[:, 1], tangent[:, 0])), at)
    if float(np.abs(turn).max()) * float(offset[-1]) > 1.0 - TIGHTEST:
        return None
    share = np.clip(np.minimum(at, arc[-1] - at) / ramp_mm, 0.0, 1.0)
    aside = share**2 * (3.0 - 2.0 * share)
    normal = np.column_stack([-tangent[:, 1], tangent[:, 0]])
    return [middle + (value * aside)[:, None] * normal for value in offset]


def _hit(graph: ChannelGraph, item: Stretch, lines: list[Floats], bore_mm: float, wall_mm: float) -> str:
    """Returns what the outer ways run into, or nothing."""
    width, height = graph.size_mm
    inner = slice(len(lines[0]) // 20, -max(1, len(lines[0]) // 20))
    ends = {item.branch.start, item.branch.end}
    for line in (lines[0][inner], lines[-1][inner]):
        low, high = line.min(axis=0) - 0.5 * bore_mm, line.max(axis=0) + 0.5 * bore_mm
        if low[1] < 0.0 or high[1] > height or (graph.turn_mm is None and (low[0] < 0.0 or high[0] > width)):
            return "more ways would leave the sheet"
        for other in graph.branches:
            if other.id == item.branch.id:
                continue
            away = line[:, None] - other.sheet_mm[None, :: max(1, len(other.sheet_mm) // 200)]
            if graph.turn_mm is not None:
                away[..., 0] -= graph.turn_mm * np.round(away[..., 0] / graph.turn_mm)
            bore = np.asarray(other.bore_mm)[:: max(1, len(other.sheet_mm) // 200)]
            gap = np.hypot(away[..., 0], away[..., 1]) - 0.5 * bore - 0.5 * bore_mm
            if {other.start, other.end} & ends:
                near = np.minimum(*(np.hypot(*(line - place).T) for place in item.place_mm[[0, -1]]))
                gap = gap[near > 2.0 * bore_mm + wall_mm]
            if gap.size and float(gap.min()) < wall_mm:
                return f"more ways would come too near to branch {other.id}"
    return ""


def _replace(web: Web, key: int, parts: list[tuple[Stretch, _Ways]]) -> None:
    """Puts the ways in place of the stretches of one run."""
    run = web.remove_run(key)
    n, at, start = len(run.place_mm), 0, run.start
    for item, ways in sorted(parts, key=lambda part: part[0].first):
        first, last = item.first, item.last
        begin = start if first == 0 else web.add_joint(Joint(run.place_mm[first].copy(), float(run.half_mm[first])))
        if first > at:
            _add(web, start, begin, run.place_mm[at : first + 1], run.half_mm[at : first + 1], 0.0)
        whole = last == n - 1
        end = run.end if whole else web.add_joint(Joint(run.place_mm[last].copy(), float(run.half_mm[last])))
        for line in ways.place_mm:
            half = np.full(len(line), 0.5 * ways.done.bore_mm)
            _add(web, begin, end, line, half, run.shift_mm if whole else 0.0)
        at, start = last, end
    if at < n - 1:
        _add(web, start, run.end, run.place_mm[at:], run.half_mm[at:], run.shift_mm)


def _add(web: Web, start: int, end: int, place: Floats, half: Floats, shift_mm: float) -> None:
    web.add_run(Run(start, end, place, half, np.ones(len(half), dtype=np.bool_), shift_mm))
