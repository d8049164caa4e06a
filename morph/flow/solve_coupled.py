"""Flows and pressures when the drop of a pipe also depends on the flows of its neighbours (junctions).

Starting from the solution without that coupling, Newton's method on all flows and pressures with every
slope; a step is halved until the unbalanced pressure falls. Where that fails, because the coupling takes
away the convexity that makes the plain problem safe, the flows are given inertia and settle as they
would in time.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, NamedTuple, Protocol

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.core.errors import FlowError
from morph.flow.grid import Grid, PressureSystem
from morph.flow.solve import GridState, Law, solve_grid

MOST_ROUNDS = 40
MOST_HALVINGS = 8
MOST_SETTLING = 900
INERTIA = (0.3, 1.0, 4.0)
"""Share of the stiffness of a pipe that damps its flow, each for a third of the rounds."""

TRY_AGAIN = 0.2
"""Newton's method is tried whenever the unbalanced pressure has fallen to this share since the last try."""

TOLERANCE = 1e-10
BALANCED = 1e-7
"""Pressure left over along a pipe at the solution, over the largest drop of a pipe."""


class Coupling(Protocol):
    """What neighbours add to the drop of pipes."""

    def drop(self, flow: Floats) -> Floats:
        """Returns what is added to the drop of each pipe (m,) at flows (m,)."""
        ...

    def pattern(self) -> tuple[Ints, Ints]:
        """Returns rows and columns (z,) of the slopes."""
        ...

    def slopes(self, flow: Floats) -> Floats:
        """Returns the slopes (z,) of each pipe's addition in each flow."""
        ...


@dataclass(slots=True, eq=False)
class CoupledSystem:
    """The linear system of a round: flows of live pipes, then pressures of free nodes; its pattern is kept.

    Args:
        system: the plain pattern. coupling: what is added.
    """

    system: PressureSystem
    coupling: Coupling
    _keep: Any = field(init=False)
    _place: Any = field(init=False)
    _n: int = field(init=False)
    _fixed_part: Floats = field(init=False)

    def __post_init__(self) -> None:
        grid, n_free = self.system.grid, len(self.system.free)
        m = grid.n_pipes
        index = np.full(grid.n_nodes, -1, dtype=np.int64)
        index[self.system.free] = m + np.arange(n_free)
        row, column = self.coupling.pattern()
        rows, columns, value = [np.arange(m), row], [np.arange(m), column], []
        for node, sign in ((index[grid.start], -1.0), (index[grid.end], 1.0)):
            known = np.flatnonzero((node >= 0) & self.system.live)
            rows += [known, node[known]]
            columns += [node[known], known]
            value += [np.full(len(known), sign), np.full(len(known), -sign)]
        self._n = m + n_free
        self._fixed_part = np.concatenate(value)
        key = np.concatenate(columns) * self._n + np.concatenate(rows)
        self._keep, self._place = np.unique(key, return_inverse=True)

    def factored(self, slope: Floats, share: float, flow: Floats) -> RoundFactor | None:
        """Returns the factored system of a round, or None when it is singular.

        Args:
            slope: (m,) of the pipes' own drop.
            share: of the coupling.
            flow: (m,) flows it stands at.
        """
        from scipy.sparse import csc_matrix
        from scipy.sparse.linalg import splu

        live = self.system.live
        flow_unit = max(float(np.abs(flow).max(initial=0.0)), 1e-300)
        pressure_unit = max(float(np.max(slope[live], initial=0.0)) * flow_unit, 1e-300)
        row, column = self.coupling.pattern()
        scale = flow_unit / pressure_unit
        own = np.where(live, slope * scale, 1.0)
        added = np.where(live[row] & live[column], share * self.coupling.slopes(flow), 0.0) * scale
        value = np.bincount(self._place, np.concatenate([own, added, self._fixed_part]), len(self._keep))
        starts = np.searchsorted(self._keep // self._n, np.arange(self._n + 1))
        matrix = csc_matrix((value, self._keep % self._n, starts), shape=(self._n, self._n))
        try:
            return RoundFactor(splu(matrix), flow_unit, pressure_unit)
        except RuntimeError:  # singular: the caller takes smaller steps
            return None


class RoundFactor(NamedTuple):
    """A factored round in scaled units: flows over `flow_unit`, pressures over `pressure_unit`."""

    factor: Any
    flow_unit: float
    pressure_unit: float

    def step(self, unbalanced: Floats, excess: Floats) -> tuple[Floats, Floats]:
        """Returns the changes of flows (m,) and pressures (u,) that take away what is left over.

        Args:
            unbalanced: (m,) pressure left over along each pipe.
            excess: (u,) flow left over at each free node.
        """
        found = self.factor.solve(np.concatenate([-unbalanced / self.pressure_unit, -excess / self.flow_unit]))
        m = len(unbalanced)
        return found[:m] * self.flow_unit, found[m:] * self.pressure_unit

    def adjoint(self, by_flow: Floats, by_pressure: Floats) -> Floats:
        """Returns how a figure changes per pressure (m,) added to the drop of each pipe, with the sign turned.

        Args:
            by_flow: (m,) slopes of the figure in the flows.
            by_pressure: (u,) slopes in the pressures of the free nodes.
        """
        right = np.concatenate([by_flow * self.flow_unit, by_pressure * self.pressure_unit])
        found = self.factor.solve(right, trans="T")
        return np.asarray(found[: len(by_flow)] / self.pressure_unit, dtype=np.float64)


def solve_coupled(
    coupled: CoupledSystem,
    law: Law,
    fixed_pressure: Floats,
    inflow: Floats | None = None,
    start_flow: Floats | None = None,
) -> GridState:
    """Returns flows and pressures of a network with coupling; arguments as for `solve_grid`.

    Raises:
        FlowError: `flow-disconnected`; `flow-not-converged` when no solution was found at full coupling.
    """
    system = coupled.system
    fed = np.zeros(system.grid.n_nodes) if inflow is None else np.asarray(inflow, dtype=np.float64)
    if start_flow is not None:
        pressure = np.zeros(system.grid.n_nodes)
        pressure[system.grid.fixed] = fixed_pressure
        begin = GridState(np.where(system.live, start_flow, 0.0), pressure, system.reached, 0)
        warm = _newton(coupled, law, fed, begin, 1.0)
        if warm is not None:
            return warm
    plain = solve_grid(system, law, fixed_pressure, fed)
    found = _newton(coupled, law, fed, plain, 1.0) or _settle(coupled, law, fed, plain)
    if found is None:
        raise FlowError(
            "flow-not-converged",
            expected="flows that settle with the loss of the junctions",
            found=f"none within {MOST_SETTLING} damped rounds",
            where="flow network",
            do="Two ways of flowing are likely near each other: change a bore or the flow a little.",
        )
    return found


def _settle(coupled: CoupledSystem, law: Law, fed: Floats, start: GridState) -> GridState | None:
    """Returns the solution the flows settle to when they have inertia, or None.

    Implicit steps in time (pseudo-transient continuation; C. T. Kelley, D. E. Keyes, Convergence analysis of
    pseudo-transient continuation, SIAM J. Numer. Anal. 35 (1998) 508-523), from the plain solution; Newton's method
    ends it.
    """
    system, grid = coupled.system, coupled.system.grid
    live, free = system.live, system.free
    flow, pressure = start.flow.copy(), start.pressure.copy()
    drop, slope = law.drop(flow)
    left = _unbalanced(grid, live, pressure, drop + coupled.coupling.drop(flow))
    row, _ = coupled.coupling.pattern()
    tried = float(np.linalg.norm(left))
    for rounds in range(1, MOST_SETTLING + 1):
        inertia = INERTIA[min(rounds * len(INERTIA) // MOST_SETTLING, len(INERTIA) - 1)]
        stiffness = slope + np.bincount(row, np.abs(coupled.coupling.slopes(flow)), len(flow))
        factor = coupled.factored(slope + inertia * stiffness, 1.0, flow)
        if factor is None:
            return None
        move, lift = factor.step(left, (grid.leaving(flow) - fed)[free])
        flow = flow + np.where(live, move, 0.0)
        pressure[free] += lift
        drop, slope = law.drop(flow)
        left = _unbalanced(grid, live, pressure, drop + coupled.coupling.drop(flow))
        now = float(np.linalg.norm(left))
        if not np.isfinite(now):
            return None
        if now < TRY_AGAIN * tried:
            tried = now
            found = _newton(coupled, law, fed, GridState(flow, pressure, start.reached, start.rounds + rounds), 1.0)
            if found is not None:
                return found
    return None


def _newton(coupled: CoupledSystem, law: Law, fed: Floats, start: GridState, share: float) -> GridState | None:
    """Returns the solution at a share of the coupling, or None when the rounds do not settle."""
    system, grid = coupled.system, coupled.system.grid
    live, free = system.live, system.free
    flow, pressure = start.flow.copy(), start.pressure.copy()
    drop, slope = law.drop(flow)
    left = _unbalanced(grid, live, pressure, drop + share * coupled.coupling.drop(flow))
    for rounds in range(1, MOST_ROUNDS + 1):
        factor = coupled.factored(slope, share, flow)
        if factor is None:
            return None
        move, lift = factor.step(left, (grid.leaving(flow) - fed)[free])
        if not (np.isfinite(move).all() and np.isfinite(lift).all()):
            return None
        size, part = float(np.abs(left).max(initial=0.0)), 1.0
        for _ in range(MOST_HALVINGS):
            next_flow = flow + part * np.where(live, move, 0.0)
            next_pressure = pressure.copy()
            next_pressure[free] += part * lift
            drop, slope = law.drop(next_flow)
            next_left = _unbalanced(grid, live, next_pressure, drop + share * coupled.coupling.drop(next_flow))
            if float(np.abs(next_left).max(initial=0.0)) <= (1.0 - 0.1 * part) * size or size == 0.0:
                break
            part *= 0.5
        else:
            if size > BALANCED * float(np.abs(drop).max(initial=0.0)):
                return None
        change = float(np.abs(next_flow - flow).sum()) / max(float(np.abs(next_flow).sum()), 1e-300)
        flow, pressure, left = next_flow, next_pressure, next_left
        settled = change < TOLERANCE or (change < 1e-7 and float(np.abs(left).max(initial=0.0)) >= 0.3 * size)
        if settled:
            solved = float(np.abs(left).max(initial=0.0)) <= BALANCED * float(np.abs(drop).max(initial=0.0))
            return GridState(flow, pressure, start.reached, start.rounds + rounds) if solved else None
    return None


def _unbalanced(grid: Grid, live: Bools, pressure: Floats, drop: Floats) -> Floats:
    return np.where(live, drop - (pressure[grid.start] - pressure[grid.end]), 0.0)
