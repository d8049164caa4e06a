"""The flow stage: a channel plan and what drives its coolant in, a FlowResult out."""

from __future__ import annotations

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.progress import SILENT, Progress
from morph.core.units import bar_from_pa, l_min_from_m3_s, m3_s_from_l_min, pa_from_bar
from morph.flow.branch_rows import branch_rows, dead_water, velocity_spread
from morph.flow.drive import Drive, GivenDrop, GivenFlow, PumpCurve
from morph.flow.fluid import Fluid, make_fluid
from morph.flow.limits import require_possible
from morph.flow.network import FlowNetwork, make_network
from morph.flow.result import FlowBand, FlowResult, SupplyFlow
from morph.flow.solve_network import Liquid, NetworkSolver, NetworkState
from morph.settings.job import CoolantSettings
from morph.settings.profile import Profile


def make_drive(coolant: CoolantSettings) -> Drive:
    """Returns what drives the coolant, the pump's table read.

    Raises:
        InputError: `pump-unreadable`, `pump-values`.
    """
    from morph.read.pump_curve import read_pump_curve

    if coolant.flow_l_min is not None:
        return GivenFlow(m3_s_from_l_min(coolant.flow_l_min))
    if coolant.drop_bar is not None:
        return GivenDrop(pa_from_bar(coolant.drop_bar))
    if coolant.pump is None:
        raise ValueError("coolant: expected one of flow, drop and pump")
    flow, head = read_pump_curve(coolant.pump)
    return PumpCurve(flow / 60_000.0, head * 1e5)


def measure_flow(
    plan: ChannelPlan,
    coolant: CoolantSettings,
    profile: Profile,
    reverse: bool = False,
    progress: Progress = SILENT,
) -> FlowResult:
    """Returns flow, velocity, regime and pressure of every branch, and totals with their band.

    Args:
        plan: every branch and lead with its bore.
        coolant: what flows and what drives it.
        profile: roughness and bore band of the process.
        reverse: fed by the out ports.
        progress: told between the solutions.

    Raises:
        InputError: `pump-unreadable`, `pump-values`.
        FlowError: `coolant-freezes`, `coolant-too-hot`, `coolant-boils`, `flow-disconnected`, `flow-blocked`,
            `flow-unreachable`, `flow-cavitates`, `pressure-negative`, `velocity-absurd`, `pump-never-meets`,
            `flow-not-converged`.
    """
    drive, fluid = make_drive(coolant), make_fluid(coolant.fluid, coolant.inlet_c)
    liquid = Liquid(fluid.density_kg_m3, fluid.viscosity_pa_s)
    progress.step("flow", 0, 2)
    network = make_network(plan, coolant, profile)
    solver = NetworkSolver(network, reverse)
    state = solver.solve(liquid, drive)
    least_bar, least_in = require_possible(solver, liquid, fluid, state, coolant)
    progress.step("flow", 1, 2)
    band_mm = profile.bore_band_mm.value
    changed = [make_network(plan, coolant, profile, change) for change in (-band_mm, band_mm)]
    bands = measure_bands(solver, liquid, state, (changed[0], changed[1]), band_mm)
    progress.step("flow", 2, 2)
    return make_result(solver, fluid, drive, state, bands, (least_bar, least_in))


def make_result(
    solver: NetworkSolver,
    fluid: Fluid,
    drive: Drive,
    state: NetworkState,
    bands: tuple[FlowBand, ...],
    static_least: tuple[float, str],
) -> FlowResult:
    """Returns the result of a solved network.

    Args:
        solver: the network.
        fluid: the coolant.
        drive: what moves it.
        state: the solution.
        bands: totals with the bore band.
        static_least: least static pressure in bar and the branch where it is.
    """
    liquid = Liquid(fluid.density_kg_m3, fluid.viscosity_pa_s)
    network = solver.network
    rows = branch_rows(solver, liquid, state)
    mean, most_over_least, percentiles = velocity_spread(rows, network.segments.summed(network.segments.length_m))
    node_bar = tuple(
        (name, bar_from_pa(float(state.node_pa[k])) if state.reached[k] else None)
        for k, name in enumerate(network.node_ids)
    )
    return FlowResult(
        fluid=fluid,
        drive=drive,
        reverse=solver.reverse,
        branches=rows,
        node_bar=node_bar,
        supplies=_supplies(solver, state),
        bands=bands,
        velocity_mean_m_s=mean,
        velocity_max_over_min=most_over_least,
        velocity_p95_over_p5=percentiles,
        dead_water=dead_water(rows, mean),
        static_least_bar=static_least[0],
        static_least_in=static_least[1],
        network=network,
        state=state,
    )


def _supplies(solver: NetworkSolver, state: NetworkState) -> tuple[SupplyFlow, ...]:
    """Returns flow, drop and the flow-weighted part of the hoses of each supply."""
    m, k = solver.network.n_branches, solver.network.n_supplies
    hose_flow = np.abs(state.pipe_flow_m3_s[m:])
    power = hose_flow * np.abs(state.pipe_start_pa[m:] - state.pipe_end_pa[m:])
    by_supply = np.bincount(solver.hose_supply, power, k) / np.maximum(np.abs(state.supply_flow_m3_s), 1e-300)
    return tuple(
        SupplyFlow(
            l_min_from_m3_s(float(state.supply_flow_m3_s[j])),
            bar_from_pa(float(state.supply_drop_pa[j])),
            bar_from_pa(float(by_supply[j])),
        )
        for j in range(k)
    )


def measure_bands(
    solver: NetworkSolver,
    liquid: Liquid,
    state: NetworkState,
    changed: tuple[FlowNetwork, FlowNetwork],
    band_mm: float,
) -> tuple[FlowBand, ...]:
    """Returns what the bore band does to each supply: drop at its flow, and flow at its drop.

    Args:
        solver: the nominal network.
        liquid: the coolant.
        state: its solution.
        changed: the networks with all bores at the lower and the upper end of the band.
        band_mm: the band.
    """
    drops, flows = [], []
    for network in changed:
        other = solver.with_network(network)
        drops.append(other.solve_flows(liquid, state.supply_flow_m3_s, state).supply_drop_pa / 1e5)
        flows.append(other.solve_drops(liquid, state.supply_drop_pa, state).supply_flow_m3_s * 60_000.0)
    return tuple(
        FlowBand(
            bore_mm=band_mm,
            drop_at_flow_bar=(float(drops[1][k]), bar_from_pa(float(state.supply_drop_pa[k])), float(drops[0][k])),
            flow_at_drop_l_min=(
                float(flows[0][k]),
                l_min_from_m3_s(float(state.supply_flow_m3_s[k])),
                float(flows[1][k]),
            ),
        )
        for k in range(solver.network.n_supplies)
    )
