"""What a build found, as a short table for a person: headline, five figures, what else is not a pass, files."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from morph.core.verdict import HEADLINE_ORDER, Notice, Outcome, Verdict

FIGURES = (
    ("thinnest wall", "wall-"),
    ("ball through", "ball-through"),
    ("through-flow", "dead-ends"),
    ("widest ceiling", "ceiling-span"),
    ("openings", "openings"),
)
"""Label of a figure, and the start of the codes of the verdicts it is chosen from."""


def result_lines(
    name: str, headline: Outcome, verdicts: Sequence[Verdict], notices: Sequence[Notice], paths: Sequence[Path]
) -> list[str]:
    """Returns the lines of the table.

    Args:
        name: the job's name.
        headline: the worst outcome of what was checked.
        verdicts: all rows.
        notices: degraded or surprising paths.
        paths: the files written.
    """
    count = {outcome: sum(row.outcome is outcome for row in verdicts) for outcome in Outcome}
    counted = ", ".join(f"{count[outcome]} {outcome.value}" for outcome in Outcome)
    lines = [f"{name}: {headline.value}   ({counted})", ""]
    shown: list[Verdict] = []
    for label, prefix in FIGURES:
        row = worst([item for item in verdicts if item.code.startswith(prefix)])
        if row is None:
            lines.append(f"  {label:<15} {'not measured':<12}")
            continue
        shown.append(row)
        lines.append(f"  {label:<15} {row.outcome.value:<12} {_figure(row)}{row.text}")
    rest = [row for row in verdicts if row.outcome is not Outcome.PASS and row not in shown]
    if rest:
        lines.append("")
        lines += [f"  {row.outcome.value:<12} [{row.code}] {row.text}" for row in rest]
    if notices:
        lines.append("")
        lines += [f"  notice       [{notice.code}] {notice.text}" for notice in notices]
    if paths:
        folder = paths[0].parent
        lines += ["", f"wrote {len(paths)} files to {folder}; open {folder / 'report.html'}"]
    return lines


def worst(rows: Sequence[Verdict]) -> Verdict | None:
    """Returns the row with the worst outcome, and among these the least relative margin after its band."""
    return min(rows, key=lambda row: (HEADLINE_ORDER[row.outcome], _margin(row)), default=None)


def _margin(row: Verdict) -> float:
    if row.value is None or row.limit is None:
        return 0.0
    gap = row.value - row.band - row.limit if row.limit_is == "least" else row.limit - row.value - row.band
    return gap / max(abs(row.limit), 1e-9)


def _figure(row: Verdict) -> str:
    """Returns figure, band and limit with their unit, such as "4.21 - 0.15 mm, at least 3 mm: "."""
    if row.value is None:
        return ""
    unit = "" if row.unit in {"", "count"} else f" {row.unit}"
    sign = "-" if row.limit_is == "least" else "+"
    band = f" {sign} {row.band:g}" if row.band else ""
    words = {"least": "at least", "most": "at most", "equal": "equal to"}[row.limit_is]
    limit = "" if row.limit is None else f", {words} {row.limit:.4g}{unit}"
    return f"{row.value:.4g}{band}{unit}{limit}: "
