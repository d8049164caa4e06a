"""Verdicts and warnings: what a check says, and what a degraded path must say.

A Verdict carries the figure, its limit, the band it was judged after, its place and its source,
so that the same row serves the report, the CSV and the summary.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from enum import StrEnum

COMMON_PRACTICE = "common practice, no source"


class Outcome(StrEnum):
    """How a check ended; the headline order is fail, not checked, watch, pass."""

    FAIL = "fail"
    NOT_CHECKED = "not checked"
    WATCH = "watch"
    PASS = "pass"


HEADLINE_ORDER = {outcome: rank for rank, outcome in enumerate(Outcome)}


@dataclass(frozen=True, slots=True)
class Verdict:
    """One row of the verdict table.

    Args:
        code: stable name such as ``wall-face``; explained by ``morph explain``.
        outcome: fail, not checked, watch or pass.
        text: one sentence for a person, with the figure and its unit.
        value: the measured figure before its band, or None when there is none.
        unit: unit of value, limit and band ("mm", "mm2", "count", "ratio", "deg").
        limit: what the figure is judged against.
        limit_is: "least" (the figure must not be below), "most" (not above) or "equal".
        band: what is taken off (least) or added (most) before judging, same unit.
        source: where the limit comes from.
        branch_ids: the branches concerned, worst first.
        sheet_mm: place on the sheet (x, y), or None.
        xyz_mm: place in the part frame, or None.
        hint: what to change when it does not pass.
    """

    code: str
    outcome: Outcome
    text: str
    value: float | None = None
    unit: str = ""
    limit: float | None = None
    limit_is: str = "least"
    band: float = 0.0
    source: str = COMMON_PRACTICE
    branch_ids: tuple[str, ...] = ()
    sheet_mm: tuple[float, float] | None = None
    xyz_mm: tuple[float, float, float] | None = None
    hint: str = ""


def worst_outcome(verdicts: Iterable[Verdict]) -> Outcome:
    """Returns the worst outcome in headline order; without a verdict nothing was checked.

    >>> worst_outcome([Verdict("flow", Outcome.NOT_CHECKED, ""), Verdict("bend", Outcome.WATCH, "")]).value
    'not checked'
    """
    return min((v.outcome for v in verdicts), key=HEADLINE_ORDER.__getitem__, default=Outcome.NOT_CHECKED)


def sort_verdicts(verdicts: Iterable[Verdict]) -> tuple[Verdict, ...]:
    """Returns the verdicts in headline order: fail, not checked, watch, pass; else in their own."""
    return tuple(sorted(verdicts, key=lambda verdict: HEADLINE_ORDER[verdict.outcome]))


@dataclass(frozen=True, slots=True)
class Notice:
    """A degraded or surprising path that the report must show.

    Args:
        code: stable name; explained by ``morph explain``.
        text: one sentence with figure, unit and place.
        branch_ids: the branches concerned.
        sheet_mm: place on the sheet (x, y), or None.
    """

    code: str
    text: str
    branch_ids: tuple[str, ...] = ()
    sheet_mm: tuple[float, float] | None = None


def judge(value: float, limit: float, band: float, limit_is: str, watch_ratio: float = 1.1) -> Outcome:
    """Returns the outcome of `value` against `limit` after its band has been spent.

    Args:
        value: the measured figure.
        limit: the limit in the same unit.
        band: the uncertainty that must be spent before the figure passes, >= 0.
        limit_is: "least", "most" or "equal".
        watch_ratio: the figure after its band must clear the limit by this factor to pass;
            between 1 and this factor it is a watch. "equal" knows no watch.
    """
    if math.isnan(value):
        return Outcome.FAIL  # a figure that could not be formed holds no limit
    if limit_is == "equal":
        return Outcome.PASS if abs(value - limit) <= band else Outcome.FAIL
    if limit_is == "least":
        after = value - band
        if after < limit:
            return Outcome.FAIL
        return Outcome.PASS if after >= limit * watch_ratio else Outcome.WATCH
    after = value + band
    if after > limit:
        return Outcome.FAIL
    return Outcome.PASS if after * watch_ratio <= limit else Outcome.WATCH
