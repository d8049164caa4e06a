"""The rows of a solved network: velocity, Reynolds number, regime and the parts of the drop of each branch."""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats
from morph.core.units import bar_from_pa, l_min_from_m3_s
from morph.flow.friction import turbulent_only, white_ratio
from morph.flow.junction import JunctionLaw
from morph.flow.pipe_law import PipeLaw
from morph.flow.result import DEAD_SHARE, LAMINAR_TO, TURBULENT_FROM, BranchFlow, DeadWater, Regime
from morph.flow.solve_network import Liquid, NetworkSolver, NetworkState

STILL = 1e-6
"""A branch with less than this share of its supplies' flow stands still: solving leaves no more."""


def branch_rows(solver: NetworkSolver, liquid: Liquid, state: NetworkState) -> tuple[BranchFlow, ...]:
    """Returns one row per branch and lead, in the order of the plan."""
    network, law = solver.network, solver.pipe_law(liquid)
    flow = state.pipe_flow_m3_s
    part = law.segments
    _, cost = law.cost(flow)
    joined = JunctionLaw(network.junctions, liquid.density_kg_m3, len(flow)).drop(flow)
    velocity = np.repeat(np.abs(flow), np.diff(part.first)) / part.area_m2
    length = np.maximum(part.summed(part.length_m), 1e-300)
    mean_velocity = part.summed(velocity * part.length_m) / length
    largest = np.maximum.reduceat(velocity, part.first[:-1])
    mean_re = part.summed(law.reynolds(flow) * part.length_m) / length
    parts = [np.sign(flow) * part.summed(value) for value in (cost.friction, cost.bend, cost.minor)]
    between = _between(law, flow)
    least = STILL * float(np.abs(state.supply_flow_m3_s).max(initial=0.0))
    rows = []
    for e, name in enumerate(network.branch_ids):
        still = abs(flow[e]) <= least
        regime = Regime.STILL if still else regime_of(float(mean_re[e]))
        pieces = [bar_from_pa(float(value[e])) for value in (*parts, joined)]
        if still:
            pieces = [0.0] * 4
        rows.append(
            BranchFlow(
                id=name,
                is_channel=bool(network.is_channel[e]),
                through=bool(network.through[e]),
                flow_l_min=0.0 if still else l_min_from_m3_s(float(flow[e])),
                velocity_m_s=0.0 if still else float(mean_velocity[e]),
                velocity_max_m_s=0.0 if still else float(largest[e]),
                reynolds=0.0 if still else float(mean_re[e]),
                regime=regime,
                drop_bar=sum(pieces),
                friction_bar=pieces[0],
                bends_bar=pieces[1],
                ends_bar=pieces[2],
                junctions_bar=pieces[3],
                drop_between_bar=(
                    (bar_from_pa(float(between[0][e])), bar_from_pa(float(between[1][e])))
                    if regime is Regime.TRANSITION
                    else None
                ),
            )
        )
    return tuple(rows)


def regime_of(reynolds: float) -> Regime:
    """Returns the regime at a Reynolds number > 0.

    >>> regime_of(2299.0).value, regime_of(3000.0).value, regime_of(4001.0).value
    ('laminar', 'transition, uncertain', 'turbulent')
    """
    if reynolds < LAMINAR_TO:
        return Regime.LAMINAR
    return Regime.TRANSITION if reynolds <= TURBULENT_FROM else Regime.TURBULENT


def _between(law: PipeLaw, flow: Floats) -> tuple[Floats, Floats]:
    """Returns the friction (m,) in Pa by the laminar and by the turbulent law alone."""
    part, re = law.segments, np.maximum(law.reynolds(flow), 1.0)
    size = np.repeat(np.abs(flow), np.diff(part.first))
    gauge = part.length_m / part.diameter_m * 0.5 * law.density_kg_m3 * (size / part.area_m2) ** 2
    bent = white_ratio(re * np.sqrt(0.5 * part.diameter_m * part.curvature_1_m))[0]
    laminar = part.summed(part.friction_re * bent / re * gauge)
    turbulent = part.summed(turbulent_only(re, part.roughness_m / part.diameter_m) * gauge)
    return laminar, turbulent


def velocity_spread(rows: tuple[BranchFlow, ...], length_m: Floats) -> tuple[float, float, float]:
    """Returns mean velocity in m/s, largest over least, and the 95th over the 5th percentile by length.

    Over channel branches with through-flow; infinite when one stands still, and (0, 1, 1) without any.

    Args:
        rows: all branches.
        length_m: (m,) their lengths.
    """
    chosen = [k for k, row in enumerate(rows) if row.is_channel and row.through]
    if not chosen:
        return 0.0, 1.0, 1.0
    velocity = np.array([rows[k].velocity_m_s for k in chosen])
    weight = np.maximum(np.asarray(length_m)[chosen], 1e-12)
    mean = float((velocity * weight).sum() / weight.sum())
    low, high = (weighted_percentile(velocity, weight, share) for share in (0.05, 0.95))
    least = float(velocity.min())
    return mean, float(velocity.max()) / least if least > 0.0 else np.inf, high / low if low > 0.0 else np.inf


def weighted_percentile(value: Floats, weight: Floats, share: float) -> float:
    """Returns the value that `share` of the weight lies at or below.

    >>> weighted_percentile(np.array([3.0, 1.0, 2.0]), np.array([1.0, 1.0, 8.0]), 0.05)
    1.0
    """
    order = np.argsort(value, kind="stable")
    reached = weight[order].cumsum() / weight.sum()
    return float(value[order][min(int(np.searchsorted(reached, share - 1e-12)), len(value) - 1)])


def dead_water(rows: tuple[BranchFlow, ...], mean_m_s: float) -> tuple[DeadWater, ...]:
    """Returns the branches and leads slower than a quarter of the channels' mean velocity, slowest first."""
    found = [
        DeadWater(row.id, row.velocity_m_s / mean_m_s if mean_m_s > 0.0 else 0.0)
        for row in rows
        if row.velocity_m_s < DEAD_SHARE * mean_m_s or row.regime is Regime.STILL
    ]
    return tuple(sorted(found, key=lambda one: one.velocity_ratio))
