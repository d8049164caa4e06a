"""The bench test of a printed insert: what flow at what pressure, and which blocked channel it would show.

Water through the whole insert, without hoses: flow by pressure with the band of the printed bores. A blocked branch
shows only where the flow falls by more than the meter's error and that band together. Where it does not, flow
between another pair of ports, the others plugged, may show it; else no flow test does.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.arrays import Floats
from morph.core.progress import SILENT, Progress
from morph.core.units import bar_from_pa, l_min_from_m3_s
from morph.flow.fluid import make_fluid
from morph.flow.network import FlowNetwork, FlowPort, make_network
from morph.flow.result import FlowResult
from morph.flow.solve_network import Liquid, NetworkSolver, NetworkState
from morph.settings.job import CoolantSettings, FluidSettings, Role
from morph.settings.profile import Profile

METER_RATIO = 0.03
"""Error of a bench flow meter (common practice, no source)."""

STEPS = (0.25, 0.5, 0.75, 1.0, 1.5, 2.0)
"""Points of the curve, in drops of the insert at its working point."""

MOST_PAIRS = 8
"""Other pairs of ports that are tried."""

NO_FLOW_TEST = "no flow test shows it: look in with a borescope or an X-ray, or watch warm water with a thermal camera"


@dataclass(frozen=True, slots=True)
class GaugePoint:
    """Flow of a supply in L/min at a drop in bar between its ports: low, nominal, high bores."""

    drop_bar: float
    flow_l_min: tuple[float, float, float]


@dataclass(frozen=True, slots=True)
class BlockedBranch:
    """What a blocked branch does to the test.

    Args:
        id: of the branch.
        flow_loss_ratio: how much less flows through the whole insert at the working drop.
        threshold_ratio: meter error and bore band together.
        detectable: the loss exceeds the threshold.
        method: how to find it.
    """

    id: str
    flow_loss_ratio: float
    threshold_ratio: float
    detectable: bool
    method: str


@dataclass(frozen=True, slots=True, eq=False)
class Gauge:
    """The bench test: water at `test_c`, curves one per supply, branches with through-flow in the plan's order."""

    test_c: float
    curves: tuple[tuple[GaugePoint, ...], ...]
    blocked: tuple[BlockedBranch, ...]


def measure_gauge(
    plan: ChannelPlan,
    coolant: CoolantSettings,
    profile: Profile,
    result: FlowResult,
    test_c: float = 20.0,
    progress: Progress = SILENT,
) -> Gauge:
    """Returns the bench test of an insert.

    Args:
        plan: every branch and lead.
        coolant: roughness and supplies; its fluid, drive and hoses do not count.
        profile: bore band.
        result: the flow at the working point, whose drops are tested.
        test_c: temperature of the water.
        progress: told of every blocked branch.
    """
    water = make_fluid(FluidSettings(), test_c)
    liquid = Liquid(water.density_kg_m3, water.viscosity_pa_s)
    bare = replace(coolant, hose_mm=None)
    band = profile.bore_band_mm.value
    solvers = [NetworkSolver(make_network(plan, bare, profile, change)) for change in (-band, 0.0, band)]
    working = 1e5 * np.array([row.drop_bar - row.hose_bar for row in result.supplies])
    flows = np.array([[s.solve_drops(liquid, step * working).supply_flow_m3_s for s in solvers] for step in STEPS])
    curves = tuple(
        tuple(
            GaugePoint(
                bar_from_pa(step * float(working[k])),
                (
                    l_min_from_m3_s(float(flows[j, 0, k])),
                    l_min_from_m3_s(float(flows[j, 1, k])),
                    l_min_from_m3_s(float(flows[j, 2, k])),
                ),
            )
            for j, step in enumerate(STEPS)
        )
        for k in range(len(working))
    )
    at = STEPS.index(1.0)
    threshold = METER_RATIO + float((1.0 - flows[at, 0] / flows[at, 1]).max())
    others = _other_pairs(plan, solvers[1].network)
    return Gauge(test_c, curves, _all_blocked(solvers[1], liquid, working, threshold, others, progress))


def _all_blocked(
    solver: NetworkSolver,
    liquid: Liquid,
    working_pa: Floats,
    threshold: float,
    others: list[tuple[FlowPort, ...]],
    progress: Progress,
) -> tuple[BlockedBranch, ...]:
    network = solver.network
    whole = solver.solve_drops(liquid, working_pa)
    chosen = np.flatnonzero(network.through)
    rows = []
    for done, e in enumerate(chosen):
        progress.step("gauge", done, len(chosen))
        left = _flow_without(network, network.ports, int(e), liquid, working_pa, whole)
        loss = float((1.0 - left / whole.supply_flow_m3_s).max())
        method = "flow through the whole insert"
        if loss <= threshold:
            method = _find_pair(network, int(e), liquid, float(working_pa.max()), threshold, others)
        rows.append(BlockedBranch(network.branch_ids[e], loss, threshold, loss > threshold, method))
    progress.step("gauge", len(chosen), len(chosen))
    return tuple(rows)


def _flow_without(
    network: FlowNetwork,
    ports: tuple[FlowPort, ...],
    branch: int | None,
    liquid: Liquid,
    drop_pa: Floats,
    warm: NetworkState | None,
) -> Floats:
    """Returns the flows (k,) of the supplies with one branch closed; 0 where nothing is left to flow through."""
    other = network.opened(ports, branch)
    if not other.through.any():
        return np.zeros(len(drop_pa))
    return NetworkSolver(other).solve_drops(liquid, drop_pa, warm).supply_flow_m3_s


def _other_pairs(plan: ChannelPlan, network: FlowNetwork) -> list[tuple[FlowPort, ...]]:
    """Returns pairs of ports to test between, each as an in and an out; none when the insert has only two ports."""
    index = {name: k for k, name in enumerate(network.node_ids)}
    if len(plan.exits) < 3:
        return []
    pairs: list[tuple[FlowPort, ...]] = [
        (FlowPort(a.port, Role.IN, index[a.node], 0), FlowPort(b.port, Role.OUT, index[b.node], 0))
        for a, b in combinations(plan.exits, 2)
    ]
    return pairs[:MOST_PAIRS]


def _find_pair(
    network: FlowNetwork,
    branch: int,
    liquid: Liquid,
    drop_pa: float,
    threshold: float,
    others: list[tuple[FlowPort, ...]],
) -> str:
    """Returns the pair of ports between which the flow falls most when a branch is blocked, if it falls enough."""
    best, found = threshold, NO_FLOW_TEST
    drop = np.array([drop_pa])
    for pair in others:
        free = _flow_without(network, pair, None, liquid, drop, None)
        if free[0] <= 0.0:
            continue
        loss = float(1.0 - _flow_without(network, pair, branch, liquid, drop, None)[0] / free[0])
        if loss > best:
            best = loss
            found = (
                f"flow from {pair[0].name} to {pair[1].name}, other ports plugged: "
                f"{100.0 * loss:.0f} % less at {bar_from_pa(drop_pa):.2g} bar"
            )
    return found
