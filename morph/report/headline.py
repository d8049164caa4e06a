"""The outcome in one word, and the five figures an engineer asks for first, each with limit and place."""

from __future__ import annotations

from dataclasses import dataclass, replace

from morph.body.plan import ChannelPlan
from morph.core.verdict import Outcome, Verdict, sort_verdicts
from morph.report.section import MERGE, wall_after_band_mm, wall_verdicts


@dataclass(frozen=True, slots=True)
class Figure:
    """One of the five figures.

    Args:
        key: stable name. title: what it is. outcome: how it was judged.
        value: the figure, None when there is none. unit: of value and limit.
        shown: value with its unit for a person. limit: the limit for a person.
        branch_ids: the branches concerned. sheet_mm, xyz_mm: where, or None.
        note: what else must be said.
    """

    key: str
    title: str
    outcome: Outcome
    value: float | None
    unit: str
    shown: str
    limit: str
    branch_ids: tuple[str, ...] = ()
    sheet_mm: tuple[float, float] | None = None
    xyz_mm: tuple[float, float, float] | None = None
    note: str = ""


def sorted_verdicts(verdicts: tuple[Verdict, ...]) -> list[Verdict]:
    """Returns the verdicts as fail, not checked, watch, pass; else in their order."""
    return list(sort_verdicts(verdicts))


def _missing(key: str, title: str, unit: str) -> Figure:
    return Figure(key, title, Outcome.NOT_CHECKED, None, unit, "not checked", "no verdict gave this figure")


def _worst(verdicts: tuple[Verdict, ...], code: str) -> Verdict | None:
    return next((v for v in sorted_verdicts(verdicts) if v.code == code), None)


def _from_verdict(key: str, title: str, verdict: Verdict, shown: str, limit: str, note: str = "") -> Figure:
    return Figure(
        key,
        title,
        verdict.outcome,
        verdict.value,
        verdict.unit,
        shown,
        limit,
        verdict.branch_ids,
        verdict.sheet_mm,
        verdict.xyz_mm,
        note,
    )


def _thinnest_wall(verdicts: tuple[Verdict, ...]) -> Figure:
    """Returns the wall with the least share of its limit left; channels that run together are the worst wall of all."""
    key, title = "wall_after_band_mm", "Worst wall after its band"
    walls = wall_verdicts(verdicts)
    if not walls:
        return _missing(key, title, "mm")
    worst, thinnest = walls[0], min(walls, key=wall_after_band_mm)
    after = wall_after_band_mm(worst)
    shown, limit = f"{after:.2f} mm", "" if worst.limit is None else f"at least {worst.limit:.2f} mm"
    note = f"{worst.code}, {worst.value:.2f} mm less a band of {worst.band:.2f} mm"
    if worst.code == MERGE:
        limit, note = "must stay apart", "two channels run together; see branches-merge"
        shown = f"{-worst.value:.2f} mm overlap" if worst.value is not None and worst.value <= 0.0 else shown
    elif wall_after_band_mm(thinnest) < after:
        note += f"; thinner, with more margin: {thinnest.code} {wall_after_band_mm(thinnest):.2f} mm"
    return replace(_from_verdict(key, title, worst, shown, limit, note), value=after)


def _length(verdicts: tuple[Verdict, ...], code: str, key: str, title: str, word: str) -> Figure:
    verdict = _worst(verdicts, code)
    if verdict is None or verdict.value is None:
        return _missing(key, title, "mm")
    limit = "" if verdict.limit is None else f"{word} {verdict.limit:.2f} mm after a band of {verdict.band:.2f} mm"
    return _from_verdict(key, title, verdict, f"{verdict.value:.2f} mm", limit)


def _without_flow(verdicts: tuple[Verdict, ...], plan: ChannelPlan) -> Figure:
    key, title = "branches_without_through_flow", "Branches without through-flow"
    verdict = _worst(verdicts, "dead-ends")
    idle = [branch for branch in plan.branches if not branch.through_flow]
    shown = f"{len(idle)} of {len(plan.branches)}"
    if verdict is not None:
        return _from_verdict(key, title, verdict, shown, "none wanted", "leads included")
    outcome = Outcome.WATCH if idle else Outcome.PASS
    ids = tuple(branch.id for branch in idle)
    return Figure(key, title, outcome, float(len(idle)), "count", shown, "none wanted", ids)


def _openings(verdicts: tuple[Verdict, ...]) -> Figure:
    key, title = "openings_found", "Openings found / declared"
    verdict = _worst(verdicts, "openings")
    if verdict is None or verdict.value is None or verdict.limit is None:
        return _missing(key, title, "count")
    return _from_verdict(key, title, verdict, f"{verdict.value:.0f} / {verdict.limit:.0f}", "equal")


def five_figures(verdicts: tuple[Verdict, ...], plan: ChannelPlan) -> tuple[Figure, ...]:
    """Returns wall, ball, through-flow, span and openings, in this order; what no verdict gives is not checked."""
    return (
        _thinnest_wall(verdicts),
        _length(verdicts, "ball-through", "ball_through_mm", "Largest ball through every branch", "at least"),
        _without_flow(verdicts, plan),
        _length(verdicts, "span", "span_mm", "Largest unsupported span in channels", "at most"),
        _openings(verdicts),
    )
