"""Bores as written: the largest ball around the centreline, along every branch and from port to port.

At each centreline sample the distance to the written channel wall is raised by moving the ball's
centre across the channel, away from what it touches; the diameter found is what an inspector's ball
gauge feels. The largest ball that passes port to port through a branch is the largest size at which
the branch still lies in one 2-connected block with two openings (joined outside).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.flow_path import through_openings
from morph.body.plan import ChannelPlan
from morph.check.centreline import Centrelines
from morph.check.channel_wall import ChannelWall
from morph.check.rows import judge_length, name_list, place
from morph.check.subject import CheckSubject
from morph.core.arrays import Bools, Floats, Ints
from morph.core.pieces import Pieces
from morph.core.verdict import COMMON_PRACTICE, Outcome, Verdict
from morph.geometry.tree import closest_points
from morph.settings.job import Role

CLIMB_STEPS = 8
"""Moves of a ball's centre; the step starts at a tenth of the radius and halves when it gains nothing."""


def measure_bores(lines: Centrelines, wall: ChannelWall) -> Floats:
    """Returns the diameter (n,) in mm of the largest ball in the written channel near each centreline sample.

    Exact at a sample that is already the middle; else the last step leaves at most about a
    hundredth of the radius. A ball never moves more than half its radius from the centreline.
    """
    centre = lines.xyz_mm.copy()
    radius, _, touch = closest_points(wall.tree, centre)
    step = np.full(len(centre), 0.1)
    # A round channel whose wall lies at half the bore has nothing to gain: only the others climb.
    active = np.flatnonzero(np.abs(radius - 0.5 * lines.bore_mm) > 0.01 * lines.bore_mm)
    for _ in range(CLIMB_STEPS):
        if len(active) == 0:
            break
        away = centre[active] - touch[active]
        along = np.einsum("ij,ij->i", away, lines.tangent[active])
        away -= along[:, None] * lines.tangent[active]
        length = np.linalg.norm(away, axis=1)
        away /= np.where(length > 0.0, length, 1.0)[:, None]
        trial = centre[active] + (step[active] * radius[active])[:, None] * away
        trial_radius, _, trial_touch = closest_points(wall.tree, trial)
        offset = np.linalg.norm(trial - lines.xyz_mm[active], axis=1)
        better = (trial_radius > radius[active]) & (offset <= 0.25 * lines.bore_mm[active])
        gain = active[better]
        centre[gain], radius[gain], touch[gain] = trial[better], trial_radius[better], trial_touch[better]
        step[active[~better]] *= 0.5
    return 2.0 * radius


@dataclass(frozen=True, slots=True, eq=False)
class Passages:
    """The largest ball through each branch (m,) in mm (0 for none), its own narrowest bore, and the best way through.

    Args:
        narrowest_mm: (m,) smallest measured bore along each branch. narrowest_sample: (m,) where.
        ball_mm: (m,) largest ball that enters by one opening, passes the branch and leaves by another.
        best_mm: the largest ball that passes from an in port to an out port on the best way (0 for none).
    """

    narrowest_mm: Floats
    narrowest_sample: Ints
    ball_mm: Floats
    best_mm: float


def measure_passages(lines: Centrelines, bore_mm: Floats) -> Passages:
    """Returns the passages of a plan whose measured bores are `bore_mm (n,)`."""
    plan = lines.plan
    spans = list(zip(lines.first[:-1].tolist(), lines.first[1:].tolist(), strict=True))
    sample = np.array([low + int(np.argmin(bore_mm[low:high])) for low, high in spans], dtype=np.int64)
    narrowest = bore_mm[sample]
    number = {node.id: index for index, node in enumerate(plan.nodes)}
    ends = [(number[branch.start], number[branch.end]) for branch in plan.branches]
    openings = [number[exit_.node] for exit_ in plan.exits]
    ball = np.zeros(len(ends))
    sizes = np.unique(narrowest)
    _search_sizes(len(plan.nodes), ends, openings, narrowest, sizes, 0, len(sizes), np.ones(len(ends), bool), ball)
    return Passages(narrowest, sample, ball, _widest_way_mm(plan, number, ends, narrowest))


def _search_sizes(
    n_nodes: int,
    ends: list[tuple[int, int]],
    openings: list[int],
    narrowest: Floats,
    sizes: Floats,
    low: int,
    high: int,
    asked: Bools,
    ball: Floats,
) -> None:
    """Fills `ball` for the branches `asked`, whose size is one of sizes[low:high] or nothing larger than before.

    Passing is easier for smaller balls, so the sizes are halved until each branch has its own.
    """
    if low >= high or not asked.any():
        return
    middle = (low + high) // 2
    usable = np.flatnonzero(narrowest >= sizes[middle])
    passes = np.zeros(len(ends), dtype=bool)
    passes[usable] = through_openings(n_nodes, [ends[i] for i in usable], openings)
    ball[passes & asked] = sizes[middle]
    _search_sizes(n_nodes, ends, openings, narrowest, sizes, middle + 1, high, asked & passes, ball)
    _search_sizes(n_nodes, ends, openings, narrowest, sizes, low, middle, asked & ~passes, ball)


def _widest_way_mm(plan: ChannelPlan, number: dict[str, int], ends: list[tuple[int, int]], narrowest: Floats) -> float:
    """Returns the largest ball that passes from any in port to any out port, 0 for none."""
    inlets = [number[e.node] for e in plan.exits if e.role is Role.IN]
    outlets = [number[e.node] for e in plan.exits if e.role is Role.OUT]
    pieces = Pieces(len(plan.nodes))
    for edge in np.argsort(-narrowest, kind="stable"):
        a, b = ends[int(edge)]
        pieces.join(a, b)
        if {pieces.root(i) for i in inlets} & {pieces.root(i) for i in outlets}:
            return float(narrowest[edge])
    return 0.0


def check_bores(subject: CheckSubject, lines: Centrelines, bore_mm: Floats) -> list[Verdict]:
    """Returns the `bore-smallest` and `ball-through` rows."""
    passages = measure_passages(lines, bore_mm)
    return [_bore_row(subject, lines, passages), _ball_row(subject, lines, passages)]


def _bore_row(subject: CheckSubject, lines: Centrelines, passages: Passages) -> Verdict:
    service, process = subject.service.smallest_bore_mm, subject.profile.smallest_bore_mm
    limit = max(service, process.value)
    source = f"[service] smallest_bore_mm: {COMMON_PRACTICE}"
    if process.value > service:
        source = f"process profile smallest_bore_mm: {process.source}"
    worst = int(np.argmin(passages.narrowest_mm))
    value, sample = float(passages.narrowest_mm[worst]), int(passages.narrowest_sample[worst])
    band = subject.profile.bore_band_mm.value
    outcome = judge_length(value, limit, band)
    below = [
        branch.id
        for branch, bore in zip(lines.plan.branches, passages.narrowest_mm, strict=True)
        if judge_length(float(bore), limit, band) is Outcome.FAIL
    ]
    others = f" {len(below)} branches are below it." if len(below) > 1 else ""
    ids = dict.fromkeys([lines.branch_of(sample).id, *below])
    return Verdict(
        "bore-smallest",
        outcome,
        f"The smallest bore as written is {value:.2f} mm, in {lines.branch_of(sample).id}; it must be {service:.2f} mm "
        f"in service and {process.value:.2f} mm to print after a band of {band:.2f} mm.{others}",
        value=value,
        unit="mm",
        limit=limit,
        band=band,
        source=source,
        branch_ids=tuple(ids),
        sheet_mm=lines.sheet_of(sample),
        xyz_mm=place(lines.xyz_mm[sample]),
        hint="" if outcome is Outcome.PASS else "Raise bore_scale or the lower end of bore_range_mm.",
    )


def _ball_row(subject: CheckSubject, lines: Centrelines, passages: Passages) -> Verdict:
    limit, band = subject.profile.powder_ball_mm, subject.profile.bore_band_mm.value
    through = np.flatnonzero(passages.ball_mm > 0.0)
    blind = [branch.id for branch, ball in zip(lines.plan.branches, passages.ball_mm, strict=True) if ball == 0.0]
    if len(through) == 0:
        return Verdict(
            "ball-through",
            Outcome.FAIL,
            "No ball passes from one opening to another through any branch.",
            value=0.0,
            unit="mm",
            limit=limit.value,
            source=limit.source,
            branch_ids=tuple(blind),
            hint="Give every circuit two open ports.",
        )
    worst = int(through[np.argmin(passages.ball_mm[through])])
    value = float(passages.ball_mm[worst])
    neck = int(np.argmin(np.abs(passages.narrowest_mm - value)))
    sample = int(passages.narrowest_sample[neck])
    outcome = judge_length(value, limit.value, band)
    rest = f" Through {name_list(blind)} none passes." if blind else ""
    return Verdict(
        "ball-through",
        outcome,
        f"The largest ball that passes port to port through every through branch is {value:.2f} mm, stopped in "
        f"{lines.branch_of(sample).id}; on the best way from in to out {passages.best_mm:.2f} mm passes. Powder needs "
        f"{limit.value:.2f} mm after a band of {band:.2f} mm.{rest}",
        value=value,
        unit="mm",
        limit=limit.value,
        band=band,
        source=limit.source,
        branch_ids=tuple(dict.fromkeys([lines.branch_of(sample).id, lines.plan.branches[worst].id])),
        sheet_mm=lines.sheet_of(sample),
        xyz_mm=place(lines.xyz_mm[sample]),
        hint="" if outcome is Outcome.PASS else "Widen the branch that stops the ball.",
    )
