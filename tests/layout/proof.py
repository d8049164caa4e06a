"""Runs the layout stage on a case of any mode and says how it went; shared by the slow tests and the table."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.layout.extract import find_graph
from morph.layout.fit import curvature_per_mm
from morph.layout.graph import ChannelGraph
from morph.layout.join import apply_bridges
from tests.layout.compare import Errors, found_from_graph, loops, measure, same_graph
from tests.layout.synthetic_more import PITCH_MM, Laid


@dataclass
class Proof:
    laid: Laid
    graph: ChannelGraph
    right: bool  # suggestions accepted, against the graph as drawn
    right_cut: bool  # nothing accepted, against the graph with the necks below the level cut
    loops_lost: int
    errors: Errors
    over_bound: int  # branches whose fit is further off than 0.10 of the width
    bends: list[float]  # per branch: largest curvature times bore away from its ends


def prove(laid: Laid) -> Proof:
    graph = find_graph(laid.density, laid.settings, laid.ports)
    joined = apply_bridges(graph, [bridge.id for bridge in graph.bridges if bridge.likely])
    with_all, accepted = (_turned_back(g, laid, loose) for g, loose in ((graph, True), (joined, False)))
    n_loops = loops(len(joined.nodes), [(a, b) for a, b, _, _ in accepted.branches])
    wanted = loops(len(laid.truth.nodes), [(e.a, e.b) for e in laid.truth.edges])
    reach = 2.0 * laid.width
    return Proof(
        laid, graph, same_graph(accepted, laid.truth, reach), same_graph(with_all, laid.cut, reach),
        max(0, wanted - n_loops), measure(with_all, laid.cut, laid.width),
        sum(b.deviation_mm > 0.10 * float(b.bore_mm.max()) + 1e-9 for b in graph.branches),
        [float((curvature_per_mm(b.curve, b.parameter) * b.bore_mm).max()) for b in graph.branches],
    )  # fmt: skip


def _turned_back(graph, laid, loose):
    """The found graph in pixels of the image before it was turned."""
    found = found_from_graph(graph, (PITCH_MM, PITCH_MM), loose)
    if not laid.turned:
        return found
    columns = laid.density.value.shape[1]
    places = found.places.copy()
    places[:, 0] = (places[:, 0] - laid.turned) % columns
    branches = []
    for a, b, line, half in found.branches:
        moved = line - np.array([laid.turned, 0.0])
        moved[:, 0] += columns * np.round((places[a, 0] - moved[0, 0]) / columns)
        branches.append((a, b, moved, half))
    return replace(found, places=places, branches=branches)
