"""The layout over the level in the report: pieces and loops, groups of joined ports, and area, as steps."""

from __future__ import annotations

import itertools

import numpy as np

from morph.core.arrays import Floats
from morph.core.words import counted
from morph.layout.level_report import LevelReport, LevelRow
from morph.report.colour import round_ticks
from morph.report.drawing import FAINT, INK, Drawing

WIDE, PANEL, GAP = 440.0, 92.0, 26.0
LEFT, RIGHT, BELOW, ABOVE = 46.0, 12.0, 42.0, 26.0
BAND, FIRST, SECOND = "#dfe7f1", "#1d4f91", "#c2560c"
MOST_TICKS = 5
PANELS = ("area", "groups", "pieces")
"""Panels from the bottom up."""


def group_words(row: LevelRow) -> str:
    """Returns which ports are on one piece, such as "feed + return" or "feed | return" when they are apart."""
    return " | ".join(" + ".join(names) for names in row.joined)


def level_words(report: LevelReport) -> str:
    """Returns what the level decides, as sentences."""
    here = next(row for row in report.rows if row.level == report.level)
    text = (
        f"From level {report.low:.3f} to {report.high:.3f} the design is the same: "
        f"{counted(here.components, 'piece')}, {counted(here.loops, 'loop')}, ports joined as {group_words(here)}."
    )
    for side, row in (("Below", report.below), ("Above", report.above)):
        if row is not None:
            text += (
                f" {side} that, at {row.level:.3f}, it has {counted(row.components, 'piece')} and "
                f"{counted(row.loops, 'loop')}"
            )
            text += "." if row.joined == here.joined else f", ports joined as {group_words(row)}."
    return text


def level_rows(report: LevelReport) -> list[dict[str, str]]:
    """Returns the levels as words, neighbouring ones of one design as one row."""
    rows = []
    for _, run in itertools.groupby(report.rows, key=lambda row: row.design):
        same = list(run)
        ends = sorted({row.dead_ends for row in same if row.dead_ends is not None})
        used = any(row.level == report.level for row in same)
        rows.append(
            {
                "level": _span([row.level for row in same], "{:.3f}") + (", in use" if used else ""),
                "pieces": str(same[0].components),
                "loops": str(same[0].loops),
                "ports": group_words(same[0]),
                "dead_ends": "not counted" if not ends else _span(ends, "{:.0f}"),
                "area": _span([100.0 * row.area_ratio for row in reversed(same)], "{:.1f}") + " %",
            }
        )
    return rows


def _span(values: list[float] | list[int], form: str) -> str:
    low, high = form.format(values[0]), form.format(values[-1])
    return low if low == high else f"{low} to {high}"


def all_rows(report: LevelReport) -> list[LevelRow]:
    """Returns the rows with the first other designs among them, by increasing level."""
    more = [row for row in (report.below, report.above) if row is not None]
    known = {row.level: row for row in [*more, *report.rows]}
    return [known[level] for level in sorted(known)]


def step_points(report: LevelReport, value: dict[float, float]) -> Floats:
    """Returns the corners (k, 2) of a step line: level, value; a value holds from half way to its neighbours.

    At the ends of the interval of the design in use the step stands where it was found.

    Args:
        report: the levels.
        value: by level, for every level of `all_rows`.
    """
    levels = [row.level for row in all_rows(report)]
    points = [(levels[0], value[levels[0]])]
    for a, b in itertools.pairwise(levels):
        at = 0.5 * (a + b)
        if report.below is not None and a == report.below.level:
            at = report.low
        if report.above is not None and b == report.above.level:
            at = report.high
        points += [(at, value[a]), (at, value[b])]
    return np.array([*points, (levels[-1], value[levels[-1]])])


class _Panel:
    """One panel of the plot: its foot in pixels above the drawing's, and the scale of its values."""

    def __init__(self, drawing: Drawing, number: int, top: float) -> None:
        self.drawing, self.foot, self.top = drawing, BELOW + number * (PANEL + GAP), top

    def at(self, level: float, value: float) -> tuple[float, float]:
        return LEFT + level * (WIDE - LEFT - RIGHT), self.foot + value / self.top * PANEL

    def axes(self, words: str, ticks: list[float]) -> None:
        for value in ticks:
            x, y = self.at(0.0, value)
            self.drawing.line((x, y), self.at(1.0, value), FAINT, 0.4)
            self.drawing.label((x - 6.0, y), f"{value:g}", anchor="end", size_px=11.0)
        self.drawing.line(self.at(0.0, 0.0), self.at(1.0, 0.0), INK, 1.0)
        self.drawing.label((LEFT, self.foot + PANEL + 10.0), words, anchor="start", size_px=12.0, bold=True)

    def curve(self, points: Floats, colour: str, dash: str = "none") -> None:
        placed = np.array([self.at(level, value) for level, value in points.tolist()])
        self.drawing.shape(
            self.drawing.path_data(placed),
            fill="none",
            stroke=colour,
            stroke_width="2.2",
            stroke_dasharray=dash,
            stroke_linejoin="round",
        )


def _whole_ticks(most: float) -> list[float]:
    """Returns ticks from 0 that are whole numbers and reach `most`."""
    ticks = [tick for tick in round_ticks(0.0, max(most, 1.0), MOST_TICKS) if tick == round(tick)]
    return ticks if len(ticks) > 1 else [0.0, max(most, 1.0)]


def draw_levels(report: LevelReport, key: str) -> str:
    """Returns the layout over the level as SVG: the interval of the design shaded, the level in use as a line.

    Args:
        report: the levels.
        key: unique on the page.
    """
    high = BELOW + ABOVE + len(PANELS) * PANEL + (len(PANELS) - 1) * GAP
    title = "Pieces, loops, groups of joined ports and coolant area of the layout over the level"
    drawing = Drawing((0.0, 0.0), (WIDE, high), WIDE, key, title, level_words(report))
    rows = all_rows(report)
    pieces = {row.level: float(row.components) for row in rows}
    loops = {row.level: float(row.loops) for row in rows}
    groups = {row.level: float(len(row.joined)) for row in rows}
    area = np.array([(row.level, 100.0 * row.area_ratio) for row in rows])
    tops = (float(area[:, 1].max()), max(groups.values()), max(*pieces.values(), *loops.values()))
    panels = [_Panel(drawing, number, 1.06 * max(top, 1.0)) for number, top in enumerate(tops)]
    for panel in panels:
        (x1, y1), (x2, y2) = panel.at(report.low, 0.0), panel.at(report.high, panel.top)
        box = np.array([(x1, y1), (x2, y1), (x2, y2), (x1, y2)])
        drawing.shape(drawing.path_data(box, closed=True), fill=BAND, stroke="none")
    panels[0].axes("coolant area, % of the sheet", round_ticks(0.0, max(tops[0], 1.0), MOST_TICKS))
    panels[1].axes("groups of ports (1: all on one piece)", _whole_ticks(tops[1]))
    panels[2].axes("", _whole_ticks(tops[2]))
    for panel in panels:
        drawing.line(panel.at(report.level, 0.0), panel.at(report.level, panel.top), INK, 1.6)
    panels[0].curve(area, FIRST)
    panels[1].curve(step_points(report, groups), FIRST)
    panels[2].curve(step_points(report, loops), SECOND, "7 3")
    panels[2].curve(step_points(report, pieces), FIRST)
    _signs(drawing, panels, report)
    return drawing.svg()


def _signs(drawing: Drawing, panels: list[_Panel], report: LevelReport) -> None:
    """Writes the scale of the levels, the level in use, and which line is which."""
    foot, top = panels[0], panels[-1]
    for value in (0.0, 0.2, 0.4, 0.6, 0.8, 1.0):
        x, y = foot.at(value, 0.0)
        drawing.line((x, y), (x, y - 4.0), INK, 1.0)
        drawing.label((x, y - 13.0), f"{value:g}", size_px=11.0)
    drawing.label((LEFT + 0.5 * (WIDE - LEFT - RIGHT), 10.0), "level: density at which coolant ends")
    line, (at, _) = top.foot + PANEL + 10.0, top.at(report.level, 0.0)
    early = report.level < 0.4  # the names of the lines stand where the level in use does not
    x = LEFT + 242.0 if early else LEFT
    for words, colour, dash, wide in (("pieces", FIRST, "", 78.0), ("loops", SECOND, "7 3", 0.0)):
        drawing.line((x, line), (x + 22.0, line), colour, 2.2, dash)
        drawing.label((x + 27.0, line), words, anchor="start", bold=True)
        x += wide
    late = report.level > 0.75
    words = f"in use {report.level:.3f}"
    drawing.label((at + (5.0 if late else -5.0), line), words, anchor="end" if late else "start", bold=True)
