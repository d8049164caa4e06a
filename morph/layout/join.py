"""Accepted suggestions: ways on from dead ends made part of the graph, dead ends taken off."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import SettingError
from morph.layout import notices as say
from morph.layout.assemble import Parts, assemble
from morph.layout.bridges import Suggestion
from morph.layout.dead_ends import known_of
from morph.layout.graph import Accepted, Branch, Bridge, ChannelGraph, DeadEnd, Dropped, DropReason
from morph.layout.ports import split_run
from morph.layout.web import Joint, Run, Web, arc_mm, join_through, moved_along

STANDING_NOTICES = (
    "topology-differs",
    "level-decides",
    "bridge-built",
    "dead-end-trimmed",
    "crop-rounded",
    "image-overruled",
    "image-size-differs",
)
"""Notices about the image; the others are about nodes and branches and are made anew."""
TAPER_SHARE = 0.25
"""A bridge changes from the bore at its ends to that of its grey way within this share of its length."""
NEAR_JOINT = 1.2
"""A bridge that lands within this many half-widths of a junction lands on it."""


def apply_bridges(graph: ChannelGraph, ids: Iterable[str], least_bore_mm: float = 0.0) -> ChannelGraph:
    """Returns `graph` with the suggested bridges `ids` built, as `apply_choices` does.

    Raises:
        SettingError: `bridge-unknown`.
    """
    return apply_choices(graph, ids, (), least_bore_mm)


def apply_choices(
    graph: ChannelGraph, bridges: Iterable[str], trims: Iterable[str], least_bore_mm: float = 0.0
) -> ChannelGraph:
    """Returns `graph` with suggested bridges built and dead ends trimmed; loose pieces reached become part of it.

    A bridge is as wide as its grey way, at least `least_bore_mm`, at most as the wider of the two channels it
    joins, and tapers to the dead ends at its ends. Branches that no choice touches stay as they are; nodes and
    branches are numbered anew by position, suggestions and dead ends that are left keep their ids.

    Args:
        graph: a channel graph with suggestions.
        bridges: ids of suggestions ("G1" ...), applied in order of their number.
        trims: ids of dead ends ("D1" ...), taken off after the bridges are built.
        least_bore_mm: least bore of a bridge.

    Raises:
        SettingError: `bridge-unknown`, `trim-unknown`, `accept-conflict` or `trim-takes-port`.
    """
    wanted, cut = set(bridges), set(trims)
    _require_known(graph, wanted, cut)
    web, joint_of, kept = web_of(graph)
    done = []
    for bridge in graph.bridges:
        if bridge.id in wanted:
            done.append(_build(web, joint_of, bridge, least_bore_mm, graph.turn_mm))
    dropped = [item for item in graph.dropped if item.reason is not DropReason.NO_PORT]
    for blind in graph.dead_ends:
        if blind.id in cut:
            done.append(_trim(web, joint_of[blind.node], blind))
            dropped.append(Dropped(DropReason.TRIMMED, blind.sheet_mm, done[-1].length_mm * done[-1].bore_mm))
    left = [bridge for bridge in graph.bridges if bridge.id not in wanted]
    parts = Parts(
        graph.size_mm,
        graph.level,
        graph.area_ratio,
        tuple(dropped),
        graph.levels,
        tuple(notice for notice in graph.notices if notice.code in STANDING_NOTICES) + tuple(map(say.accepted, done)),
        0.0,
        graph.turn_mm,
        {joint_of[end.node]: known_of(end) for end in graph.dead_ends},
        graph.accepted + tuple(done),
    )
    suggestions = [item for bridge in left if (item := _suggestion(web, joint_of, bridge, graph.turn_mm)) is not None]
    return assemble(web, parts, suggestions, {key: branch for key, branch in kept.items() if key in web.runs})


def _require_known(graph: ChannelGraph, wanted: set[str], cut: set[str]) -> None:
    """Raises unless all ids exist and no end is both bridged and trimmed."""
    bridges, ends = [bridge.id for bridge in graph.bridges], [end.id for end in graph.dead_ends]
    for code, chosen, known, what in (
        ("bridge-unknown", wanted, bridges, "suggestion"),
        ("trim-unknown", cut, ends, "dead end"),
    ):
        unknown = sorted(chosen - set(known))
        if unknown:
            raise SettingError(
                code,
                expected=f"one of {', '.join(known) or f'no {what} at all'}",
                found=", ".join(unknown),
                where="[[accept]]",
                do="Use the ids that the layout lists.",
            )
    trimmed = {end.node: end.id for end in graph.dead_ends if end.id in cut}
    for bridge in graph.bridges:
        both = [trimmed[node] for node in (bridge.node, bridge.onto) if bridge.id in wanted and node in trimmed]
        if both:
            raise SettingError(
                "accept-conflict",
                expected="each dead end bridged or trimmed, not both",
                found=f"bridge {bridge.id} and trim {both[0]} at the same end",
                where="[[accept]]",
                do="Remove one of the two.",
            )


def web_of(graph: ChannelGraph) -> tuple[Web, dict[str, int], dict[int, Branch]]:
    """Returns the graph as a web, the joint of each node, and the branch of each run."""
    web, joint_of, kept = Web(), {}, {}
    branches = graph.branches + graph.loose_branches
    radius = dict.fromkeys((node.id for node in graph.nodes + graph.loose_nodes), 0.0)
    for branch in branches:
        for end, bore in ((branch.start, branch.bore_mm[0]), (branch.end, branch.bore_mm[-1])):
            radius[end] = max(radius[end], 0.5 * float(bore))
    for node in graph.nodes + graph.loose_nodes:
        x, y = node.sheet_mm
        on_frame = min(x, y, graph.size_mm[0] - x, graph.size_mm[1] - y) < 1e-6
        mouth = 0 if on_frame and node.port is None else -1
        joint_of[node.id] = web.add_joint(Joint(node.sheet_mm, radius[node.id], mouth, node.port))
    for branch in branches:
        half = 0.5 * branch.bore_mm
        free = np.ones(len(half), dtype=bool)
        first, last, shift_mm = joint_of[branch.start], joint_of[branch.end], 0.0
        if graph.turn_mm is not None:
            past_mm = float(branch.sheet_mm[-1, 0] - web.joints[last].place_mm[0])
            shift_mm = graph.turn_mm * round(past_mm / graph.turn_mm)
        key = web.add_run(Run(first, last, branch.sheet_mm, half, free, shift_mm))
        kept[key] = branch
    return web, joint_of, kept


def _nearest_run(web: Web, place_mm: Floats, without: int | None, turn_mm: float | None) -> tuple[int, int]:
    """Returns the run and the sample on it nearest to a place, `without` one run unless it is the only one."""
    keys = [key for key in sorted(web.runs) if key != without] or sorted(web.runs)
    away = {key: _away_mm(web.runs[key].place_mm, place_mm, turn_mm) for key in keys}
    key = min(keys, key=lambda k: (float(away[k].min()), k))
    return key, int(np.argmin(away[key]))


def _away_mm(line_mm: Floats, place_mm: Floats, turn_mm: float | None) -> Floats:
    """Returns the distances (k,) of `line_mm (k, 2)` from a place, by the shorter way around a repeating sheet."""
    x, y = (line_mm - place_mm).T
    if turn_mm is not None:
        x = x - turn_mm * np.round(x / turn_mm)
    return np.asarray(np.hypot(x, y), dtype=np.float64)


def _landing(web: Web, joint_of: dict[str, int], bridge: Bridge, turn_mm: float | None) -> int:
    """Returns the joint the bridge meets; a run is split where it lands."""
    joint = joint_of.get(bridge.onto)
    if joint is not None and joint in web.joints:
        return joint
    key, sample = _nearest_run(web, bridge.path_mm[-1], None, turn_mm)
    run = web.runs[key]
    arc = arc_mm(run.place_mm)
    for end, away in ((run.start, float(arc[sample])), (run.end, float(arc[-1] - arc[sample]))):
        if away < NEAR_JOINT * web.joints[end].radius_mm and end != joint_of[bridge.node]:
            return end
    return split_run(web, key, sample)


def _build(web: Web, joint_of: dict[str, int], bridge: Bridge, least_bore_mm: float, turn_mm: float | None) -> Accepted:
    tip = joint_of[bridge.node]
    at = (float(bridge.path_mm[0, 0]), float(bridge.path_mm[0, 1]))
    if tip not in web.joints or web.degree(tip) != 1:
        return Accepted(bridge.id, "bridge", at, 0.0, 0.0)  # its end was bridged from the other side
    run = web.runs[web.at[tip][0]]
    half = float(run.half_mm[0] if run.start == tip else run.half_mm[-1])
    landing = _landing(web, joint_of, bridge, turn_mm)
    if landing == tip:
        return Accepted(bridge.id, "bridge", at, 0.0, 0.0)
    blind = web.degree(landing) == 1 and web.joints[landing].port is None
    far_half = half
    if blind:
        other = web.runs[web.at[landing][0]]
        far_half = float(other.half_mm[0] if other.start == landing else other.half_mm[-1])
    grey_half = max(0.5 * least_bore_mm, min(0.5 * bridge.width_mm, max(half, far_half)))
    path = bridge.path_mm.copy()
    shift_mm = 0.0
    if turn_mm is not None:
        shift_mm = turn_mm * round(float(path[-1, 0] - web.joints[landing].place_mm[0]) / turn_mm)
    path[0], path[-1] = web.joints[tip].place_mm, moved_along(web.joints[landing].place_mm, shift_mm)
    arc = arc_mm(path)
    n = max(5, round(float(arc[-1]) / (0.25 * min(half, far_half, grey_half))) + 1)
    at_arc = np.linspace(0.0, arc[-1], n)
    place = np.column_stack([np.interp(at_arc, arc, path[:, axis]) for axis in (0, 1)])
    ends = [half, grey_half, grey_half, far_half if blind else grey_half]
    halves = np.interp(at_arc, np.array([0.0, TAPER_SHARE, 1.0 - TAPER_SHARE, 1.0]) * arc[-1], ends)
    web.add_run(Run(tip, landing, place, halves, np.zeros(n, dtype=bool), shift_mm))
    join_through(web, tip)
    join_through(web, landing)
    return Accepted(bridge.id, "bridge", at, float(arc[-1]), 2.0 * float(halves.mean()))


def _trim(web: Web, tip: int, end: DeadEnd) -> Accepted:
    """Takes the branch of a dead end off, up to the junction it hangs on.

    Raises:
        SettingError: `trim-takes-port` when no junction but a port, or another dead end, lies at its other end.
    """
    key = web.at[tip][0] if tip in web.joints and web.degree(tip) == 1 else None
    run = web.runs[key] if key is not None else None
    root = None if run is None else run.end if run.start == tip else run.start
    if key is None or run is None or root is None or web.degree(root) < 2:
        raise SettingError(
            "trim-takes-port",
            expected="a dead end that hangs on a junction",
            found=f"{end.id} at [{end.sheet_mm[0]:.1f}, {end.sheet_mm[1]:.1f}] mm, whose branch {end.branch} is all "
            "there is between it and its other end",
            where="[[accept]]",
            do="Trimming it would take the whole piece off; bridge it, or leave it.",
        )
    done = Accepted(end.id, "trim", end.sheet_mm, run.length_mm, 2.0 * float(run.half_mm.mean()))
    web.remove_run(key)
    web.remove_joint(tip)
    join_through(web, root)
    return done


def _suggestion(web: Web, joint_of: dict[str, int], bridge: Bridge, turn_mm: float | None) -> Suggestion | None:
    """Returns the bridge in terms of the changed web, or None when its dead end is none any more."""
    tip = joint_of[bridge.node]
    if tip not in web.joints or web.degree(tip) != 1:
        return None
    onto = joint_of.get(bridge.onto)
    key, _ = _nearest_run(web, bridge.path_mm[-1], web.at[tip][0], turn_mm)
    return Suggestion(
        tip,
        onto if onto in web.joints else None,
        key,
        bridge.path_mm,
        bridge.gap_mm,
        bridge.lowest_density,
        bridge.likely,
        bridge.width_mm,
        bridge.grey,
        bridge.grey_mm,
        bridge.middle_mm,
        bridge.id,
    )
