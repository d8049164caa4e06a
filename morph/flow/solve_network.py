"""Flow in every branch of an insert at what drives it: the working point of network, hoses and pump."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.core.units import l_min_from_m3_s
from morph.flow.drive import Drive, GivenDrop, PumpCurve, require_meeting
from morph.flow.grid import Grid, PressureSystem
from morph.flow.junction import JunctionLaw
from morph.flow.network import FlowNetwork, join_segments
from morph.flow.pipe_law import PipeLaw
from morph.flow.solve_coupled import CoupledSystem, solve_coupled
from morph.settings.job import Role

PUMP_TOLERANCE = 1e-12
"""Relative tolerance of the flow at which pump and system meet."""


class Liquid(NamedTuple):
    """Density and dynamic viscosity of the coolant where it flows."""

    density_kg_m3: float
    viscosity_pa_s: float


@dataclass(frozen=True, slots=True, eq=False)
class NetworkState:
    """A solved network.

    Args:
        flow_m3_s: (m,) from start to end of each branch; exactly 0 where nothing can flow.
        node_pa: (n,) total pressure of nodes above the return; 0 at nodes that `reached` leaves out.
        reached: (n,) hangs together with a supply.
        supply_flow_m3_s, supply_drop_pa: (k,) flow and drop between feed and return of each supply.
        rounds: Newton rounds of the last solve.
        pipe_flow_m3_s: (m + hoses,) the same flows and those of the hoses.
        pipe_start_pa, pipe_end_pa: (m + hoses,) total pressures of the nodes at both ends.
    """

    flow_m3_s: Floats
    node_pa: Floats
    reached: Bools
    supply_flow_m3_s: Floats
    supply_drop_pa: Floats
    rounds: int
    pipe_flow_m3_s: Floats
    pipe_start_pa: Floats
    pipe_end_pa: Floats


@dataclass(slots=True, eq=False)
class NetworkSolver:
    """A network ready to be solved many times: the patterns are analysed once per kind of drive.

    Args:
        network: the channels.
        reverse: coolant enters by the out ports and leaves by the in ports.
        hose_supply: the supply of each hose; hoses come after the branches.
    """

    network: FlowNetwork
    reverse: bool = False
    _node: Ints = field(init=False)
    _feed: Ints = field(init=False)
    _return: Ints = field(init=False)
    _start: Ints = field(init=False)
    _end: Ints = field(init=False)
    _n_nodes: int = field(init=False)
    hose_supply: Ints = field(init=False)
    _systems: dict[bool, PressureSystem] = field(init=False, default_factory=dict)
    _coupled: dict[bool, CoupledSystem] = field(init=False, default_factory=dict)

    def __post_init__(self) -> None:
        network = self.network
        n, k = len(network.node_ids), network.n_supplies
        self._n_nodes = n + 2 * k
        self._feed, self._return = n + np.arange(k), n + k + np.arange(k)
        self._node = np.arange(n, dtype=np.int64)
        hose_start: list[int] = []
        hose_end: list[int] = []
        supplies: list[int] = []
        for port in network.ports:
            feeds = (port.role is Role.IN) != self.reverse
            manifold = int((self._feed if feeds else self._return)[port.supply])
            if network.hose is not None and port.role is Role.IN:
                hose_start.append(manifold)
                hose_end.append(port.node)
                supplies.append(port.supply)
            else:
                self._node[port.node] = manifold
        self.hose_supply = np.array(supplies, dtype=np.int64)
        self._start = np.concatenate([self._node[network.start], np.array(hose_start, dtype=np.int64)])
        self._end = np.concatenate([self._node[network.end], np.array(hose_end, dtype=np.int64)])

    def with_network(self, network: FlowNetwork) -> NetworkSolver:
        """Returns a solver of a network of the same shape with other bores; what was analysed is kept."""
        solver = NetworkSolver(network, self.reverse)
        solver._systems, solver._coupled = self._systems, self._coupled
        return solver

    def pipe_law(self, liquid: Liquid) -> PipeLaw:
        """Returns the law of branches, then hoses."""
        segments = self.network.segments
        n_hoses = len(self._start) - self.network.n_branches
        if n_hoses and self.network.hose is not None:
            segments = join_segments([segments, *[self.network.hose] * n_hoses])
        return PipeLaw(segments, liquid.density_kg_m3, liquid.viscosity_pa_s)

    def solve(self, liquid: Liquid, drive: Drive, warm: NetworkState | None = None) -> NetworkState:
        """Returns the flows at what drives the coolant.

        Args:
            liquid: the coolant.
            drive: the same for every supply.
            warm: a solution near by to start from.

        Raises:
            FlowError: `pump-never-meets`; `flow-not-converged`.
        """
        k = self.network.n_supplies
        if isinstance(drive, PumpCurve):
            return self._solve_pump(liquid, drive)
        if isinstance(drive, GivenDrop):
            return self.solve_drops(liquid, np.full(k, drive.drop_pa), warm)
        return self.solve_flows(liquid, np.full(k, drive.flow_m3_s), warm)

    def solve_flows(self, liquid: Liquid, flow_m3_s: Floats, warm: NetworkState | None = None) -> NetworkState:
        """Returns the state at given flows (k,) of the supplies."""
        fed = np.zeros(self._n_nodes)
        fed[self._feed] = flow_m3_s
        return self._solve_given(liquid, False, np.zeros(len(flow_m3_s)), fed, warm)

    def solve_drops(self, liquid: Liquid, drop_pa: Floats, warm: NetworkState | None = None) -> NetworkState:
        """Returns the state at given drops (k,) of the supplies."""
        fixed = np.concatenate([np.zeros(len(drop_pa)), drop_pa])
        return self._solve_given(liquid, True, fixed, np.zeros(self._n_nodes), warm)

    def _solve_pump(self, liquid: Liquid, curve: PumpCurve) -> NetworkState:
        """Returns the state where each supply's pump meets its part of the network; supplies do not touch."""
        from scipy.optimize import brentq

        k = self.network.n_supplies
        last = float(curve.flow_m3_s[-1])
        at_last = self.solve_flows(liquid, np.full(k, last))
        flow = np.empty(k)
        for supply in range(k):
            require_meeting(curve, float(at_last.supply_drop_pa[supply]), l_min_from_m3_s(last))

            def short_of(share: float, supply: int = supply) -> float:
                if share == 0.0:
                    return float(curve.head_pa[0])
                found = self.solve_flows(liquid, np.full(k, share * last), at_last)
                return curve.at(share * last) - float(found.supply_drop_pa[supply])

            flow[supply] = last * brentq(short_of, 0.0, 1.0, xtol=PUMP_TOLERANCE, rtol=1e-12)
        return self.solve_flows(liquid, flow, at_last)

    def slopes_by_log_bore(
        self,
        liquid: Liquid,
        state: NetworkState,
        by_flow: Floats,
        by_drop: Floats,
        drop_given: bool = False,
        share: Floats | None = None,
    ) -> Floats:
        """Returns how a figure changes (m,) with ln of the bores of each branch, lengths and bends held (adjoint).

        Args:
            liquid: the coolant.
            state: a solution of this network.
            by_flow: (m,) slopes of the figure in the flows of branches.
            by_drop: (k,) slopes in the drops of the supplies; they do not count when those are given.
            drop_given: the drops of the supplies are given, else their flows.
            share: (s,) how much of the change each segment takes part in, 1 everywhere when None.

        Raises:
            ValueError: the network cannot be told from one that stands still at this state.
        """
        system, flow, m = self._system(drop_given), state.pipe_flow_m3_s, self.network.n_branches
        law = self.pipe_law(liquid)
        junctions = JunctionLaw(self.network.junctions, liquid.density_kg_m3, len(flow))
        factor = CoupledSystem(system, junctions).factored(law.drop(flow)[1], 1.0, flow)
        if factor is None:
            raise ValueError("state: expected a solution whose flows hang together")
        pressure = np.zeros(self._n_nodes)
        pressure[self._feed], pressure[self._return] = by_drop, -np.asarray(by_drop)
        own = np.concatenate([by_flow, np.zeros(len(flow) - m)])
        weight = np.where(system.live, factor.adjoint(np.where(system.live, own, 0.0), pressure[system.free]), 0.0)
        size, cost = law.cost(flow)
        part = np.ones(len(law.segments.length_m))
        if share is not None:
            part[: len(share)] = share
        by_bore = law.segments.summed(part * (2.0 * cost.by_log_area + cost.by_log_diameter)) * flow / size
        row, segment, slope = junctions.by_log_area(flow)
        branch = law.segments.pipe[segment]
        total = -weight * by_bore - np.bincount(branch, 2.0 * part[segment] * weight[row] * slope, len(flow))
        return np.asarray(total[:m], dtype=np.float64)

    def _system(self, drop_given: bool) -> PressureSystem:
        if drop_given not in self._systems:
            fixed = np.concatenate([self._return, self._feed]) if drop_given else self._return
            self._systems[drop_given] = PressureSystem(Grid(self._n_nodes, self._start, self._end, fixed))
        return self._systems[drop_given]

    def _solve_given(
        self, liquid: Liquid, drop_given: bool, fixed: Floats, fed: Floats, warm: NetworkState | None
    ) -> NetworkState:
        """Returns the state for pressures of the fixed nodes and flows (n,) fed into nodes."""
        network, system, law = self.network, self._system(drop_given), self.pipe_law(liquid)
        junctions = JunctionLaw(network.junctions, liquid.density_kg_m3, len(self._start))
        coupled = self._coupled.setdefault(drop_given, CoupledSystem(system, junctions))
        coupled.coupling = junctions
        state = solve_coupled(coupled, law, fixed, fed, None if warm is None else warm.pipe_flow_m3_s)
        leaving = system.grid.leaving(state.flow)
        return NetworkState(
            flow_m3_s=state.flow[: network.n_branches],
            node_pa=state.pressure[self._node],
            reached=state.reached[self._node],
            supply_flow_m3_s=leaving[self._feed],
            supply_drop_pa=state.pressure[self._feed] - state.pressure[self._return],
            rounds=state.rounds,
            pipe_flow_m3_s=state.flow,
            pipe_start_pa=state.pressure[self._start],
            pipe_end_pa=state.pressure[self._end],
        )
