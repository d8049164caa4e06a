"""Flows and pressures of a network by Newton's method on both together (global gradient method).

E. Todini, S. Pilati, A gradient algorithm for the analysis of pipe networks, in: Computer Applications
in Water Supply, 1988. With drops h(Q) of slope h' > 0, pressures P and inflows q at the nodes:

    pressures:  sum over pipes (P_a - P_b) / h' = what the flows Q - h / h' leave over at the node
    flows:      Q <- Q - (h - (P_a - P_b)) / h'

The solution is the least of a convex function of the flows (the content), so a step is halved while
the content rises along it: the method converges from zero flow for every law that grows with flow.
Flows are in m3/s and pressures in Pa; other units that belong together do as well.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from morph.core.arrays import Bools, Floats
from morph.core.errors import FlowError
from morph.flow.grid import Grid, PressureSystem

MOST_ROUNDS = 100
TOLERANCE = 1e-10
"""A solve ends when a round moves the flows by less than this share of their sum."""

ROUNDING = 1e-6
"""Below this share a round that gains less than a factor of three has met rounding."""

MOST_HALVINGS = 20


class Law(Protocol):
    """How the pressure drops along each pipe."""

    def typical_flow(self) -> Floats:
        """Returns a flow (m,) > 0 of each pipe at an ordinary velocity; only the first round uses it."""
        ...

    def drop(self, flow: Floats) -> tuple[Floats, Floats]:
        """Returns the drop (m,) from start to end at flows (m,), and its slope (m,) > 0."""
        ...


@dataclass(frozen=True, slots=True, eq=False)
class GridState:
    """A solved network.

    Args:
        flow: (m,) from start to end of each pipe; exactly 0 where nothing can flow.
        pressure: (n,) of each node; 0 where `reached` is False.
        reached: (n,) hangs together with a node of given pressure.
        rounds: Newton rounds taken.
    """

    flow: Floats
    pressure: Floats
    reached: Bools
    rounds: int


def solve_grid(
    grid: Grid | PressureSystem,
    law: Law,
    fixed_pressure: Floats,
    inflow: Floats | None = None,
    start_flow: Floats | None = None,
    tolerance: float = TOLERANCE,
) -> GridState:
    """Returns flows and pressures of a network.

    Args:
        grid: the network; a PressureSystem made before saves its analysis.
        law: drop of each pipe.
        fixed_pressure: (k,) pressures of `grid.fixed`.
        inflow: (n,) given flow into each node, 0 at fixed nodes; None: none.
        start_flow: (m,) flows to start from; None: rest.
        tolerance: largest change of the flows in the last round over their sum.

    Raises:
        FlowError: `flow-disconnected` when flow is given into a node that no fixed pressure reaches;
            `flow-not-converged` when a law does not grow with flow, or its numbers are not finite.
    """
    system = grid if isinstance(grid, PressureSystem) else PressureSystem(grid)
    fed = np.zeros(system.grid.n_nodes) if inflow is None else np.asarray(inflow, dtype=np.float64)
    _require_reached(system, fed)
    pressure = np.zeros(system.grid.n_nodes)
    pressure[system.grid.fixed] = fixed_pressure
    flow = np.zeros(system.grid.n_pipes) if start_flow is None else np.where(system.live, start_flow, 0.0)
    drop, slope = law.drop(flow)
    if start_flow is None:
        typical = law.typical_flow()
        slope = law.drop(typical)[0] / typical
    change = before = np.inf
    for rounds in range(1, MOST_ROUNDS + 1):
        pressure, step = _newton_step(system, fed, pressure, flow, drop, slope)
        flow, drop, slope = _accept(system, law, pressure, flow, step, drop, rounds > 1)
        before, change = change, float(np.abs(step).sum() / max(np.abs(flow).sum(), 1e-300))
        if not np.isfinite(change):
            break
        if change < tolerance or (change < ROUNDING and rounds > 2 and change > 0.3 * before):
            return GridState(flow, np.where(system.reached, pressure, 0.0), system.reached, rounds)
    raise FlowError(
        "flow-not-converged",
        expected=f"flows that settle within {MOST_ROUNDS} rounds",
        found=f"a change of {change:.2g} of the flows in the last round",
        where="flow network",
        do="Check the coolant's properties and the bores; a bore or a flow far out of range is the usual cause.",
    )


def _require_reached(system: PressureSystem, fed: Floats) -> None:
    lost = np.flatnonzero((fed != 0.0) & ~system.reached)
    if len(lost):
        raise FlowError(
            "flow-disconnected",
            expected="a way from every place where coolant enters to one where it leaves",
            found=f"flow into node {lost[0]}, from which there is no way out",
            where="flow network",
            do="Join that piece to an out port, or close its in port.",
        )


def _newton_step(
    system: PressureSystem, fed: Floats, pressure: Floats, flow: Floats, drop: Floats, slope: Floats
) -> tuple[Floats, Floats]:
    """Returns the pressures (n,) after a full round and the step (m,) of the flows.

    Solved for the change of the pressures: flows then balance to rounding however high the pressures are.
    """
    grid, live, free = system.grid, system.live, system.free
    conductance = np.where(live, 1.0 / slope, 0.0)
    bad = system.factor(conductance)
    if bad >= 0:
        return np.full(grid.n_nodes, np.nan), np.full(grid.n_pipes, np.nan)
    drive = conductance * (pressure[grid.start] - pressure[grid.end] - drop)
    lift = np.zeros(grid.n_nodes)
    lift[free] = system.solve((fed - grid.leaving(flow + drive))[free])
    step = drive + conductance * (lift[grid.start] - lift[grid.end])
    return pressure + lift, np.where(live, step, 0.0)


def _accept(
    system: PressureSystem, law: Law, pressure: Floats, flow: Floats, step: Floats, drop: Floats, search: bool
) -> tuple[Floats, Floats, Floats]:
    """Returns flows, drops and slopes after as much of the step as does not climb the content."""
    grid = system.grid
    head = pressure[grid.start] - pressure[grid.end]
    downhill = abs(float((drop - head) @ step))
    share = 1.0
    for _ in range(MOST_HALVINGS):
        moved = flow + share * step
        drop, slope = law.drop(moved)
        if not search or float((drop - head) @ step) <= 0.5 * downhill:
            break
        share *= 0.5
    return moved, drop, slope
