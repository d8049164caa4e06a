"""The bench test in the report: flow against pressure with the band of the bores, and which blocked branch it shows."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np

from morph.core.arrays import Floats
from morph.flow.gauge import Gauge, GaugePoint
from morph.report.colour import round_ticks
from morph.report.drawing import FAINT, INK, Drawing, number

WIDE, HIGH = 400.0, 250.0
LEFT, RIGHT, BELOW, ABOVE = 52.0, 14.0, 44.0, 12.0
BAND, LINE = "#c9d6e8", "#1d4f91"


def gauge_block(gauge: Gauge) -> dict[str, Any]:
    """Returns the bench test for summary.json."""
    return {
        "water_c": gauge.test_c,
        "curves": [[dataclasses.asdict(point) for point in curve] for curve in gauge.curves],
        "blocked": [dataclasses.asdict(row) for row in gauge.blocked],
    }


def gauge_rows(gauge: Gauge) -> list[dict[str, str]]:
    """Returns what a blocked branch does to the test, as words."""
    return [
        {
            "id": row.id,
            "loss": f"{100.0 * row.flow_loss_ratio:.1f} %",
            "seen": "yes" if row.detectable else "no",
            "method": row.method,
        }
        for row in gauge.blocked
    ]


def point_rows(curve: tuple[GaugePoint, ...]) -> list[tuple[str, str, str]]:
    """Returns a curve as (pressure, flow, flow with the bore band) in words."""
    rows = []
    for point in curve:
        low, nominal, high = point.flow_l_min
        rows.append((f"{point.drop_bar:.3f} bar", f"{nominal:.2f} L/min", f"{low:.2f} to {high:.2f} L/min"))
    return rows


def draw_gauge(curve: tuple[GaugePoint, ...], key: str) -> str:
    """Returns a curve as SVG: pressure along, flow up, the band of the bores as an area.

    Args:
        curve: points by rising pressure.
        key: unique on the page.
    """
    drop = np.array([0.0, *(point.drop_bar for point in curve)])
    flow = np.array([(0.0, 0.0, 0.0), *(point.flow_l_min for point in curve)])
    x_ticks, y_ticks = round_ticks(0.0, float(drop[-1])), round_ticks(0.0, float(flow.max()))
    ends = max(float(drop[-1]), x_ticks[-1]), 1.04 * max(float(flow.max()), y_ticks[-1])
    words = "Flow of water through the insert against the pressure between its ports, with the band of the bores"
    drawing = Drawing((0.0, 0.0), (WIDE, HIGH), WIDE, key, words)

    def at(x: Floats, y: Floats) -> Floats:
        wide, high = WIDE - LEFT - RIGHT, HIGH - BELOW - ABOVE
        return np.column_stack([LEFT + x / ends[0] * wide, BELOW + y / ends[1] * high])

    for value in y_ticks:
        (x1, y1), (x2, _) = at(np.array([0.0, ends[0]]), np.full(2, value)).tolist()
        drawing.line((x1, y1), (x2, y1), FAINT, 0.4)
        drawing.label((x1 - 6.0, y1), f"{value:g}", anchor="end")
    for value in x_ticks:
        ((x, y),) = at(np.array([value]), np.zeros(1)).tolist()
        drawing.line((x, y), (x, y - 4.0), INK, 1.0)
        drawing.label((x, y - 13.0), f"{value:g}")
    area = np.concatenate([at(drop, flow[:, 0]), at(drop, flow[:, 2])[::-1]])
    drawing.shape(drawing.path_data(area, closed=True), fill=BAND, stroke="none")
    drawing.shape(drawing.path_data(at(drop, flow[:, 1])), fill="none", stroke=LINE, stroke_width="2.2")
    for x, y in at(drop[1:], flow[1:, 1]).tolist():
        drawing.raw(f'<circle cx="{number(x)}" cy="{number(HIGH - y)}" r="3" fill="{LINE}"/>')
    (x1, y1), (x2, _), (_, y3) = at(np.array([0.0, ends[0], 0.0]), np.array([0.0, 0.0, ends[1]])).tolist()
    drawing.line((x1, y1), (x2, y1), INK, 1.2)
    drawing.line((x1, y1), (x1, y3), INK, 1.2)
    drawing.label((0.5 * (x1 + x2), 8.0), "pressure between the ports, bar")
    drawing.raw(
        f'<text transform="translate(12 {number(0.5 * HIGH - 10.0)}) rotate(-90)" font-size="12" fill="{INK}" '
        'text-anchor="middle">flow, L/min</text>'
    )
    return drawing.svg()
