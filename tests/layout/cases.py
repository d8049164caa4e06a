"""Runs the layout stage on a synthetic case and says how it went; shared by the tests and the table."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.layout.density import Density
from morph.layout.extract import find_graph
from morph.layout.graph import ChannelGraph
from morph.layout.join import apply_bridges
from morph.settings.job import LayoutSettings, PortSettings, Role, Samples, Seam
from tests.layout.compare import Errors, found_from_graph, loops, measure, same_graph
from tests.layout.synthetic import Case

PITCH_MM = 0.5


@dataclass
class Outcome:
    case: Case
    graph: ChannelGraph
    joined: ChannelGraph
    right: bool  # suggestions accepted, against the graph as drawn
    right_cut: bool  # nothing accepted, against the graph with the necks below the level cut
    loops_lost: int
    errors: Errors


def run_case(case: Case) -> Outcome:
    graph = find_graph(*inputs(case))
    joined = apply_bridges(graph, [bridge.id for bridge in graph.bridges if bridge.likely])
    pitch = (PITCH_MM, PITCH_MM)
    with_all = found_from_graph(graph, pitch, loose=True)
    accepted = found_from_graph(joined, pitch)
    n_loops = loops(len(joined.nodes), [(a, b) for a, b, _, _ in accepted.branches])
    wanted = loops(len(case.truth.nodes), [(e.a, e.b) for e in case.truth.edges])
    return Outcome(
        case, graph, joined,
        same_graph(accepted, case.truth, 2.0 * case.width),
        same_graph(with_all, case.cut, 2.0 * case.width),
        max(0, wanted - n_loops),
        measure(with_all, case.cut, case.width),
    )  # fmt: skip


def inputs(case: Case):
    rows, columns = case.value.shape
    size_mm = (columns * PITCH_MM, rows * PITCH_MM)
    density = Density(case.value, size_mm, Samples.CELLS, Seam.OPEN, "synthetic.npy", "0" * 16)
    settings = LayoutSettings(image=None, size_mm=size_mm)  # type: ignore[arg-type]
    ports = tuple(
        PortSettings(f"p{i}", Role(role), tuple(float(v) for v in np.clip(place * PITCH_MM, 0, size_mm)))
        for i, (role, place) in enumerate(case.ports)
    )
    return density, settings, ports
