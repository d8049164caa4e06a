"""The layout block of summary.json: how the density was read, the graph, and what the layout stage knows about it."""

from __future__ import annotations

import math
from typing import Any

from morph.layout.density import Density
from morph.layout.graph import Branch, Bridge, ChannelGraph, DeadEnd, Node, NodeKind, count_loops
from morph.layout.level_report import LevelReport, LevelRow
from morph.layout.wide import WideRegion

Block = dict[str, Any]


def layout_block(
    density: Density, graph: ChannelGraph, levels: LevelReport | None, wide: tuple[WideRegion, ...]
) -> Block:
    """Returns the layout as mappings, lists, text and numbers; places and lengths in mm on the sheet.

    Args:
        density: as read.
        graph: the graph that was built.
        levels: what other levels would give, or None.
        wide: regions wider than the largest legal bore.
    """
    number = {node.id: index for index, node in enumerate(graph.nodes)}
    ends = [(number[branch.start], number[branch.end]) for branch in graph.branches]
    pieces, loops = count_loops(len(graph.nodes), ends)
    known = {end.node: end for end in graph.dead_ends}
    dead = [node for node in graph.nodes if node.kind is NodeKind.DEAD_END]
    loose = [node for node in graph.loose_nodes if node.id in known]
    return {
        "origin": density.origin,
        "pixel_mm": density.pitch_mm,
        "components": pieces,
        "loops": loops,
        "area_ratio": graph.area_ratio,
        "level_ratio": graph.level,
        "size_mm": graph.size_mm,
        "nodes": len(graph.nodes),
        "branches": len(graph.branches),
        "length_mm": sum(branch.length_mm for branch in graph.branches),
        "fit_deviation_max_mm": max((branch.deviation_mm for branch in graph.branches), default=0.0),
        "dead_ends": len(dead),
        "dead_end_places": _dead_ends(dead, graph.branches, known),
        "loose_dead_end_places": _dead_ends(loose, graph.loose_branches, known),
        "dropped": [
            {"reason": item.reason, "sheet_mm": item.sheet_mm, "area_mm2": item.area_mm2} for item in graph.dropped
        ],
        "suggestions": [_suggestion(item) for item in graph.bridges],
        "accepted": [
            {"id": i.id, "what": i.what, "sheet_mm": i.sheet_mm, "length_mm": i.length_mm, "bore_mm": i.bore_mm}
            for i in graph.accepted
        ],
        "wide": [_wide(item) for item in wide],
        "levels": [{"level_ratio": i.level, "pieces": i.pieces, "holes": i.holes} for i in graph.levels],
        "level_report": None if levels is None else _levels(levels),
    }


def _dead_ends(nodes: list[Node], branches: tuple[Branch, ...], known: dict[str, DeadEnd]) -> list[Block]:
    return [
        {"node": node.id, "branch": branch.id, "length_mm": branch.length_mm, "sheet_mm": node.sheet_mm}
        | _ahead(known.get(node.id))
        for node in nodes
        for branch in branches
        if node.id in (branch.start, branch.end)
    ]


def _ahead(end: DeadEnd | None) -> Block:
    """Returns what is known of a dead end beyond its node and branch; None throughout where nothing is."""
    return {
        "id": None if end is None else end.id,
        "end_mm": None if end is None else end.sheet_mm,
        "bore_mm": None if end is None else end.bore_mm,
        "ahead": None if end is None else end.ahead,
        "suggestion": None if end is None else end.bridge,
        "onto": None if end is None else end.onto,
        "grey_mm": None if end is None else end.gap_mm,
        "lowest_density_ratio": None if end is None else end.lowest_density,
    }


def _suggestion(item: Bridge) -> Block:
    return {
        "id": item.id,
        "node": item.node,
        "onto": item.onto,
        "gap_mm": item.gap_mm,
        "lowest_density_ratio": item.lowest_density,
        "likely": item.likely,
        "sheet_mm": item.path_mm[0],
        "width_mm": item.width_mm if math.isfinite(item.width_mm) else None,
        "grey": item.grey,
        "grey_mm": item.grey_mm,
        "middle_mm": item.middle_mm,
    }


def _wide(item: WideRegion) -> Block:
    return {
        "id": item.id,
        "sheet_mm": item.sheet_mm,
        "widest_mm": item.widest_mm,
        "length_mm": item.length_mm,
        "area_mm2": item.area_mm2,
        "lost_mm2": item.lost_mm2,
        "ways": item.ways,
        "bore_mm": item.bore_mm,
        "conductance_ratio": item.conductance_ratio,
        "laminar_ratio": item.laminar_ratio,
        "said": item.said,
    }


def _levels(report: LevelReport) -> Block:
    return {
        "level_ratio": report.level,
        "low_ratio": report.low,
        "high_ratio": report.high,
        "below": None if report.below is None else _row(report.below),
        "above": None if report.above is None else _row(report.above),
        "rows": [_row(row) for row in report.rows],
    }


def _row(row: LevelRow) -> Block:
    return {
        "level_ratio": row.level,
        "components": row.components,
        "loops": row.loops,
        "dead_ends": row.dead_ends,
        "ports_joined": row.joined,
        "area_ratio": row.area_ratio,
    }
