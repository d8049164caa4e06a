"""Bores that share the flow as wanted, within what prints and fits.

The bounds are settled before; inside them the aim is lowered by a quasi-Newton method with bounds (L-BFGS-B, Byrd,
Lu, Nocedal, Zhu 1995). Where bounds hold a branch back it is named, with how much the aim would gain.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import FlowError
from morph.core.progress import SILENT, Progress
from morph.flow.aim import Aim
from morph.flow.bore_range import BoreRange, carry_range, make_bore_range
from morph.flow.measure import measure_flow
from morph.flow.result import FlowResult
from morph.flow.solve_network import Liquid
from morph.settings.job import Balance, CoolantSettings
from morph.settings.profile import Profile

MOST_ROUNDS = 400
STARTS, ENOUGH = 6, 0.01
"""The search starts anew from its best point, without what it learnt of curvature, until that gains less than 1 %."""

WALL = 10.0
"""What is added to the aim where the flows do not settle."""

AT_BOUND = 1e-6
"""A factor within this (in ln) of its bound is held by it."""

PLANS, AGREES = 3, 0.02
"""At most this many plans are made; a plan agrees with its search when its aim is no larger than this above."""

FRAGILE = 0.1
"""A balance whose aim rises by more than this under scatter is fragile: 0.1 is a spread of a third."""

LEAST_GAIN = 1e-4
"""A bound counts as holding when the aim falls by more than this per unit of ln bore beyond it."""


@dataclass(frozen=True, slots=True)
class BoundBranch:
    """A branch that its range holds back.

    Args:
        id: of the branch. upper: at its upper end, else at its lower one.
        limit: what holds it: "face:<name>", "branch:<id>", "hole:<id>" or the allowed range.
        multiplier: how much the aim falls per unit of ln bore beyond the bound (Lagrange multiplier).
    """

    id: str
    upper: bool
    limit: str
    multiplier: float


@dataclass(frozen=True, slots=True, eq=False)
class Balanced:
    """What a balance found.

    Args:
        log_factor: (m,) ln of the factor on the bores of each branch.
        bore_mm: (n,) the bores of all samples.
        aim_before, aim_after: the number that was lowered.
        bound: the branches held back, most telling first.
        rounds: evaluations it took.
    """

    log_factor: Floats
    bore_mm: Floats
    aim_before: float
    aim_after: float
    bound: tuple[BoundBranch, ...]
    rounds: int

    def __post_init__(self) -> None:
        for name in ("log_factor", "bore_mm"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (None,)))


@dataclass(frozen=True, slots=True, eq=False)
class FlowBalance:
    """A balance that went into the plan.

    Args:
        kind: what was to be equal.
        before: the flow with the layout's own bores.
        found: what the search found.
        bore_before_mm: (m,) mean bore of each branch before.
        heat: (m,) share of the heat each branch collects; 0 everywhere unless the balance is by heat.
        reversible: both flow directions counted alike.
    """

    kind: Balance
    before: FlowResult
    found: Balanced
    bore_before_mm: Floats
    heat: Floats
    reversible: bool = False

    def __post_init__(self) -> None:
        for name in ("bore_before_mm", "heat"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (None,)))


def balance_plan(
    plan: ChannelPlan,
    coolant: CoolantSettings,
    profile: Profile,
    allowed_mm: tuple[float, float],
    heat: Floats | None,
    replan: Callable[[dict[str, Floats]], ChannelPlan],
    progress: Progress = SILENT,
) -> tuple[ChannelPlan, FlowResult, FlowBalance]:
    """Returns the plan whose bores share the flow as the job wants it, its flow, and how it was found.

    The search works on the network of a plan with its lengths held; the plan made from its bores is measured anew,
    and where the two do not agree the search goes on from there, in the same range. The best plan measured is taken.

    Args:
        plan: with the layout's own bores.
        coolant: what shall be equal.
        profile: roughness, bore band.
        allowed_mm: least and greatest bore.
        heat: (m,) heat each branch collects, needed for by-heat.
        replan: makes the plan for wanted bores (k,) of the channels by id.
        progress: told at every evaluation.

    Raises:
        FlowError: as for `measure_flow`.
    """
    before = flow = measure_flow(plan, coolant, profile)
    share = np.zeros(len(plan.branches)) if heat is None else heat
    mean = np.array([float(branch.bore_mm.mean()) for branch in plan.branches])
    weigh = np.ones(len(share)) if heat is None else heat
    bores = make_bore_range(plan, allowed_mm)
    aim = _aim(before, coolant, bores, weigh)
    start = best = aim.value(np.zeros(len(mean)))[0]
    kept, found = plan, None
    for _ in range(PLANS):
        searched = _search(aim, profile.bore_band_mm.value / mean, progress)
        trial = replan(_by_id(plan, searched))
        measured = measure_flow(trial, coolant, profile)
        aim = _aim(measured, coolant, carry_range(bores, trial, allowed_mm), weigh)
        value = aim.value(np.zeros(len(mean)))[0]
        if found is None or value < best:
            best, kept, flow, found = value, trial, measured, searched
        if value <= searched.aim_after + AGREES:
            break
    if found is None:  # the loop always searches once
        raise ValueError("PLANS: expected at least 1")
    return (
        kept,
        flow,
        FlowBalance(
            coolant.balance,
            before,
            replace(found, aim_after=best, aim_before=start),
            mean,
            share,
            coolant.reversible,
        ),
    )


def _aim(flow: FlowResult, coolant: CoolantSettings, bores: BoreRange, weigh: Floats) -> Aim:
    liquid = Liquid(flow.fluid.density_kg_m3, flow.fluid.viscosity_pa_s)
    kind, given = coolant.balance, flow.state.supply_flow_m3_s
    return Aim(flow.network, bores, kind, weigh, liquid, given, coolant.reversible)


def _search(aim: Aim, band: Floats, progress: Progress) -> Balanced:
    """Returns the best bores, sought anew with printed scatter `band` (m,) in ln bore where that upsets them."""
    found = find_balance(aim, progress)
    wary = replace(aim, scatter=_scatter(band))
    try:
        fragile = wary.value(found.log_factor)[0] > found.aim_after + FRAGILE
        return find_balance(wary, progress) if fragile else found
    except FlowError:  # some of the scattered bores let the flows not settle: they tell nothing of the others
        return found


def _scatter(part: Floats) -> tuple[Floats, ...]:
    """Returns the four changes of ln bore (m,) by `part` that set neighbours in the list against each other."""
    every = np.arange(len(part))
    one, two = np.where(every % 2 == 0, part, -part), np.where(every // 2 % 2 == 0, part, -part)
    return one, -one, two, -two


def _by_id(plan: ChannelPlan, found: Balanced) -> dict[str, Floats]:
    """Returns the bores (k,) that were found for every branch of the plan, by id."""
    first = np.concatenate([[0], np.cumsum([len(branch.bore_mm) for branch in plan.branches])])
    return {
        branch.id: found.bore_mm[low:high]
        for branch, low, high in zip(plan.branches, first[:-1], first[1:], strict=True)
    }


def find_balance(aim: Aim, progress: Progress = SILENT) -> Balanced:
    """Returns the bores that lower the aim most, from the present ones.

    Args:
        aim: what shall be equal, and the ranges.
        progress: told at every evaluation.

    Raises:
        FlowError: `flow-not-converged`.
    """
    from scipy.optimize import Bounds, minimize

    low, high = aim.bores.ends()
    begin = np.zeros(len(low))
    before, _ = aim.value(begin)
    best, after, count = begin, before, 0

    def told(x: Floats) -> tuple[float, Floats]:
        nonlocal count, best, after
        count += 1
        progress.step("flow", min(count, MOST_ROUNDS), MOST_ROUNDS)
        try:
            value, slope = aim.value(x)
        except FlowError:  # a trial step may ask for flows that do not settle: a wall the line search turns back from
            return after + WALL, np.zeros(len(x))
        if value < after:
            best, after = np.clip(x, low, high), value
        return value, slope

    for _ in range(STARTS):
        was, left = after, MOST_ROUNDS - count
        options: Any = {"maxcor": 30, "ftol": 1e-12, "gtol": 1e-8, "maxfun": left, "maxiter": left}
        if left > 0:
            search: Any = minimize  # its stubs know no function that returns slopes beside a method and bounds
            search(told, best, jac=True, method="L-BFGS-B", bounds=Bounds(low, high), options=options)
        if was - after < ENOUGH * was:
            break
    return Balanced(best, aim.bores.at(best).bore_mm, before, after, _bound(aim, best), count)


def _bound(aim: Aim, factor: Floats) -> tuple[BoundBranch, ...]:
    """Returns the branches at an end of their range that would go on beyond it."""
    low, high = aim.bores.ends()
    slope = aim.value(factor, beyond=True)[1]
    rows = []
    for e in np.flatnonzero(aim.bores.free):
        upper, lower = high[e] - factor[e] < AT_BOUND, factor[e] - low[e] < AT_BOUND
        gain = -float(slope[e]) if upper else float(slope[e])
        if (upper or lower) and gain > LEAST_GAIN:
            rows.append(BoundBranch(aim.network.branch_ids[e], bool(upper), aim.bores.limit(int(e), bool(upper)), gain))
    return tuple(sorted(rows, key=lambda row: (-round(row.multiplier, 9), row.id)))
