"""Accepted bridges: the suggested ways on from dead ends made part of the graph."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import SettingError
from morph.layout.assemble import Parts, assemble
from morph.layout.bridges import Suggestion
from morph.layout.graph import Branch, Bridge, ChannelGraph, DropReason
from morph.layout.ports import split_run
from morph.layout.web import Joint, Run, Web, arc_mm, join_through

STANDING_NOTICES = ("topology-differs", "level-decides")
"""Notices about the image; the others are about nodes and branches and are made anew."""
NEAR_JOINT = 1.2
"""A bridge that lands within this many half-widths of a junction lands on it."""


def apply_bridges(graph: ChannelGraph, ids: Iterable[str]) -> ChannelGraph:
    """Returns `graph` with the suggested bridges `ids` built; loose pieces they reach become part of it.

    The bridge is as wide as the dead end it starts from, or tapers to the dead end it meets. Branches
    that no bridge touches stay as they are; ids are numbered anew by position.

    Args:
        graph: a channel graph with suggestions.
        ids: ids of suggestions ("G1" ...), applied in order of their number.

    Raises:
        SettingError: `bridge-unknown`.
    """
    by_id = {bridge.id: bridge for bridge in graph.bridges}
    wanted = set(ids)
    unknown = sorted(wanted - by_id.keys())
    if unknown:
        raise SettingError(
            "bridge-unknown",
            expected=f"one of {', '.join(by_id) or 'no suggestion at all'}",
            found=", ".join(unknown),
            where="accepted bridges",
            do="Use the ids that the layout lists.",
        )
    web, joint_of, kept = _web_of(graph)
    for bridge in graph.bridges:
        if bridge.id in wanted:
            _build(web, joint_of, bridge)
    left = [bridge for bridge in graph.bridges if bridge.id not in wanted]
    parts = Parts(
        graph.size_mm,
        graph.level,
        graph.area_ratio,
        tuple(item for item in graph.dropped if item.reason is not DropReason.NO_PORT),
        graph.levels,
        tuple(notice for notice in graph.notices if notice.code in STANDING_NOTICES),
        0.0,
    )
    suggestions = [item for bridge in left if (item := _suggestion(web, joint_of, bridge)) is not None]
    return assemble(web, parts, suggestions, {key: branch for key, branch in kept.items() if key in web.runs})


def _web_of(graph: ChannelGraph) -> tuple[Web, dict[str, int], dict[int, Branch]]:
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
        key = web.add_run(Run(joint_of[branch.start], joint_of[branch.end], branch.sheet_mm, half, free))
        kept[key] = branch
    return web, joint_of, kept


def _nearest_run(web: Web, place_mm: Floats, without: int | None) -> tuple[int, int]:
    """Returns the run and the sample on it nearest to a place, `without` one run unless it is the only one."""
    keys = [key for key in sorted(web.runs) if key != without] or sorted(web.runs)
    away = {key: np.hypot(*(web.runs[key].place_mm - place_mm).T) for key in keys}
    key = min(keys, key=lambda k: (float(away[k].min()), k))
    return key, int(np.argmin(away[key]))


def _landing(web: Web, joint_of: dict[str, int], bridge: Bridge) -> int:
    """Returns the joint the bridge meets; a run is split where it lands."""
    joint = joint_of.get(bridge.onto)
    if joint is not None and joint in web.joints:
        return joint
    key, sample = _nearest_run(web, bridge.path_mm[-1], None)
    run = web.runs[key]
    arc = arc_mm(run.place_mm)
    for end, away in ((run.start, float(arc[sample])), (run.end, float(arc[-1] - arc[sample]))):
        if away < NEAR_JOINT * web.joints[end].radius_mm and end != joint_of[bridge.node]:
            return end
    return split_run(web, key, sample)


def _build(web: Web, joint_of: dict[str, int], bridge: Bridge) -> None:
    tip = joint_of[bridge.node]
    if tip not in web.joints or web.degree(tip) != 1:
        return
    run = web.runs[web.at[tip][0]]
    half = float(run.half_mm[0] if run.start == tip else run.half_mm[-1])
    landing = _landing(web, joint_of, bridge)
    if landing == tip:
        return
    blind = web.degree(landing) == 1 and web.joints[landing].port is None
    far_half = half
    if blind:
        other = web.runs[web.at[landing][0]]
        far_half = float(other.half_mm[0] if other.start == landing else other.half_mm[-1])
    path = bridge.path_mm.copy()
    path[0], path[-1] = web.joints[tip].place_mm, web.joints[landing].place_mm
    arc = arc_mm(path)
    n = max(5, round(float(arc[-1]) / (0.25 * min(half, far_half))) + 1)
    at = np.linspace(0.0, arc[-1], n)
    place = np.column_stack([np.interp(at, arc, path[:, axis]) for axis in (0, 1)])
    web.add_run(Run(tip, landing, place, np.linspace(half, far_half, n), np.zeros(n, dtype=bool)))
    join_through(web, tip)
    join_through(web, landing)


def _suggestion(web: Web, joint_of: dict[str, int], bridge: Bridge) -> Suggestion | None:
    """Returns the bridge in terms of the changed web, or None when its dead end is none any more."""
    tip = joint_of[bridge.node]
    if tip not in web.joints or web.degree(tip) != 1:
        return None
    onto = joint_of.get(bridge.onto)
    key, _ = _nearest_run(web, bridge.path_mm[-1], web.at[tip][0])
    return Suggestion(
        tip,
        onto if onto in web.joints else None,
        key,
        bridge.path_mm,
        bridge.gap_mm,
        bridge.lowest_density,
        bridge.likely,
    )
