"""What a build found, as a short table for a person: headline, five figures, what else is not a pass, files."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from morph.core.verdict import Outcome
from morph.pipeline import Result
from morph.report.headline import Figure, five_figures


def result_lines(result: Result, paths: Sequence[Path]) -> list[str]:
    """Returns the lines of the table.

    Args:
        result: what the build found.
        paths: the files written.
    """
    count = {outcome: sum(row.outcome is outcome for row in result.verdicts) for outcome in Outcome}
    counted = ", ".join(f"{count[outcome]} {outcome.value}" for outcome in Outcome)
    lines = [f"{result.job.name}: {result.headline.value}   ({counted})", ""]
    lines += [_figure_line(figure) for figure in five_figures(result.verdicts, result.records.plan)]
    rest = [row for row in result.verdicts if row.outcome is not Outcome.PASS]
    if rest:
        lines += ["", *(f"  {row.outcome.value:<12} [{row.code}] {row.text}" for row in rest)]
    if result.notices:
        lines += ["", *(f"  notice       [{notice.code}] {notice.text}" for notice in result.notices)]
    if paths:
        folder = paths[0].parent
        lines += ["", f"wrote {len(paths)} files to {folder}; open {folder / 'report.html'}"]
    return lines


def _figure_line(figure: Figure) -> str:
    where = ", ".join(figure.branch_ids[:3]) + (" ..." if len(figure.branch_ids) > 3 else "")
    if figure.xyz_mm is not None:
        where += " at [" + ", ".join(f"{round(at, 1) + 0.0:.1f}" for at in figure.xyz_mm) + "] mm"
    return f"  {figure.outcome.value:<12} {figure.title:<36} {figure.shown:<12} {figure.limit}  {where}".rstrip()
