"""What no coolant circuit does: boil, cavitate, run at absurd velocities, or need more pressure than there is."""

from __future__ import annotations

from typing import NoReturn

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import FlowError
from morph.core.units import bar_from_pa, pa_from_bar
from morph.flow.fluid import ATMOSPHERE_PA, Fluid
from morph.flow.junction import JunctionLaw
from morph.flow.solve_network import Liquid, NetworkSolver, NetworkState
from morph.settings.job import CoolantSettings

FASTEST_M_S = 20.0
"""Beyond this no circuit is run: common practice stays below 3 to 5 m/s (no source)."""

MOST_DROP_BAR = 100.0
"""No pump of a mould temperature controller gives this (common practice: up to about 10 bar, no source)."""

CAVITATION_HEADS = 1.5
"""Static pressure stands this many velocity heads above boiling, or edges cavitate (common practice, no source)."""


def require_possible(
    solver: NetworkSolver, liquid: Liquid, fluid: Fluid, state: NetworkState, coolant: CoolantSettings
) -> tuple[float, str]:
    """Returns the least absolute static pressure in bar and the branch where it is.

    Args:
        solver: the network.
        liquid: what flows in it.
        fluid: the coolant, for its vapour pressure.
        state: the solved network.
        coolant: pressure where coolant enters; without it coolant leaves at atmospheric pressure.

    Raises:
        FlowError: `velocity-absurd`, `flow-unreachable`, `coolant-boils`, `pressure-negative`, `flow-cavitates`.
    """
    ids = solver.network.branch_ids
    velocity = np.maximum.reduceat(_velocity(solver, liquid, state), solver.pipe_law(liquid).segments.first[:-1])
    worst = int(velocity.argmax())
    if velocity[worst] > FASTEST_M_S:
        _refuse(
            "velocity-absurd",
            f"velocities of at most {FASTEST_M_S:g} m/s",
            f"{velocity[worst]:.1f} m/s in {ids[worst] if worst < len(ids) else 'the hose'}",
            "Lower the flow or the pressure, or give wider bores; channels are run at up to 3 to 5 m/s.",
        )
    needed = bar_from_pa(float(np.abs(state.supply_drop_pa).max()))
    there = MOST_DROP_BAR if coolant.pressure_bar is None else coolant.pressure_bar + bar_from_pa(ATMOSPHERE_PA)
    if needed > there:
        _refuse(
            "flow-unreachable",
            f"a drop of at most {there:.3g} bar (what stands at the inlet)",
            f"{needed:.3g} bar for the flow asked for",
            "Ask for less flow, give wider bores or hoses, or raise pressure_bar if the unit can.",
        )
    at_return = ATMOSPHERE_PA
    if coolant.pressure_bar is not None:
        at_return += pa_from_bar(coolant.pressure_bar) - float(np.abs(state.supply_drop_pa).max())
    return _require_static(solver, liquid, fluid, state, at_return)


def _require_static(
    solver: NetworkSolver, liquid: Liquid, fluid: Fluid, state: NetworkState, at_return_pa: float
) -> tuple[float, str]:
    """Raises when coolant boils, and returns its least static pressure in bar and where that is."""
    ids = solver.network.branch_ids
    vapour = fluid.vapour_pa
    if vapour is not None and vapour >= at_return_pa:
        _refuse(
            "coolant-boils",
            f"more than {bar_from_pa(vapour):.3g} bar absolute, where {fluid.name} boils at {fluid.temperature_c:g} C",
            f"{bar_from_pa(at_return_pa):.3g} bar absolute at the return",
            "Lower inlet_c, or keep the circuit under pressure and say so with pressure_bar.",
        )
    static = static_pressure(solver, liquid, state) + at_return_pa
    segment = int(static.argmin())
    pipe = int(solver.pipe_law(liquid).segments.pipe[segment])
    where = ids[pipe] if pipe < len(ids) else "hose"
    if static[segment] <= 0.0:
        _refuse(
            "pressure-negative",
            "pressures above vacuum",
            f"{bar_from_pa(float(static[segment])):.3g} bar absolute in {where}",
            "Lower the flow, widen the bore there, or raise pressure_bar.",
        )
    if vapour is not None:
        head = 0.5 * liquid.density_kg_m3 * _velocity(solver, liquid, state) ** 2
        margin = static - vapour - CAVITATION_HEADS * head
        near = int(margin.argmin())
        pipe = int(solver.pipe_law(liquid).segments.pipe[near])
        if margin[near] < 0.0:
            _refuse(
                "flow-cavitates",
                f"a static pressure {CAVITATION_HEADS:g} velocity heads above boiling "
                f"({bar_from_pa(vapour + CAVITATION_HEADS * float(head[near])):.3g} bar absolute)",
                f"{bar_from_pa(float(static[near])):.3g} bar absolute in {ids[pipe] if pipe < len(ids) else 'hose'}",
                "Lower flow or temperature, widen the bore there, or raise pressure_bar.",
            )
    return bar_from_pa(float(static[segment])), where


def _velocity(solver: NetworkSolver, liquid: Liquid, state: NetworkState) -> Floats:
    part = solver.pipe_law(liquid).segments
    return np.repeat(np.abs(state.pipe_flow_m3_s), np.diff(part.first)) / part.area_m2


def static_pressure(solver: NetworkSolver, liquid: Liquid, state: NetworkState) -> Floats:
    """Returns the lower static pressure (s,) at the two ends of each segment, in Pa above the return."""
    law, flow = solver.pipe_law(liquid), state.pipe_flow_m3_s
    part, (_, cost) = law.segments, law.cost(flow)
    loss = cost.friction + cost.bend
    at_start, at_end = state.pipe_start_pa.copy(), state.pipe_end_pa.copy()
    legs = solver.network.junctions
    offset = np.where(legs.used, JunctionLaw(legs, liquid.density_kg_m3, len(flow)).ends(flow), 0.0)
    for sign, pressure in ((-1.0, at_start), (1.0, at_end)):
        here = legs.used & (legs.sign == sign)
        np.add.at(pressure, legs.pipe[here], offset[here])
    low = np.empty(len(loss))
    for e in range(len(flow)):
        piece = slice(int(part.first[e]), int(part.first[e + 1]))
        whole = loss[piece] + cost.minor[piece]
        if flow[e] >= 0.0:
            low[piece] = at_start[e] - whole.cumsum() + cost.minor[piece]
        else:
            low[piece] = at_end[e] - whole[::-1].cumsum()[::-1] + cost.minor[piece]
    velocity = _velocity(solver, liquid, state)
    return np.asarray(low - 0.5 * liquid.density_kg_m3 * velocity**2, dtype=np.float64)


def _refuse(code: str, expected: str, found: str, do: str) -> NoReturn:
    raise FlowError(code, expected=expected, found=found, where="[coolant]", do=do)
