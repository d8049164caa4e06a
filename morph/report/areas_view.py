"""Areas on the sheet pictures: keep-outs with their clearance, and regions wider than the largest legal bore."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from morph.core.arrays import Floats
from morph.layout.keep_out import outline_mm
from morph.layout.wide import WideRegion
from morph.report.drawing import PAPER, Drawing, number
from morph.report.seam import copies_mm
from morph.settings.job import KeepOutSettings

KEEP_OUT, WIDE = "#00585c", "#1d4f91"
HATCH = "keep-out"

Seen = Callable[[Floats], Floats]


def middle_mm(outline: Floats) -> Floats:
    """Returns the middle (2,) of the box around an outline (k, 2)."""
    return np.asarray(0.5 * (outline.min(axis=0) + outline.max(axis=0)))


def _open_clip(drawing: Drawing, size_mm: tuple[float, float], name: str) -> None:
    """Opens a group that is cut at the edges of the sheet; it is closed by the caller."""
    (left, top), ident = drawing.xy((0.0, size_mm[1])), f"{drawing.ident}-{name}"
    size = " ".join(
        f'{key}="{number(length * drawing.px_per_mm)}"'
        for key, length in zip(("width", "height"), size_mm, strict=True)
    )
    drawing.define(f'<clipPath id="{ident}"><rect x="{left}" y="{top}" {size}/></clipPath>')
    drawing.raw(f'<g clip-path="url(#{ident})">')


def draw_keep_outs(
    drawing: Drawing,
    keep_outs: tuple[KeepOutSettings, ...],
    size_mm: tuple[float, float],
    turn_mm: float | None,
    seen: Seen = lambda points: points,
) -> list[tuple[str, Floats]]:
    """Draws keep-outs hatched, with their clearance as a dashed line around, and returns (name, middle) of each.

    Args:
        drawing: the sheet.
        keep_outs: of the job.
        size_mm: of the sheet, at whose edges they are cut.
        turn_mm: width after which the sheet repeats, None on an open sheet.
        seen: turns sheet points (k, 2) into those of the drawing.
    """
    if not keep_outs:
        return []
    hatch = drawing.hatch(HATCH, KEEP_OUT, 7.0, -45.0, 0.7)
    _open_clip(drawing, size_mm, "areas")
    middles = []
    for item in keep_outs:
        outline = seen(outline_mm(item))
        for points in copies_mm(outline, turn_mm):
            data = drawing.path_data(points, closed=True)
            drawing.shape(data, fill=PAPER, fill_opacity="0.75", stroke=KEEP_OUT, stroke_width="1.8")
            drawing.shape(data, fill=hatch, stroke="none")
        if item.clearance_mm > 0.0:
            for points in copies_mm(seen(outline_mm(item, item.clearance_mm)), turn_mm):
                data = drawing.path_data(points, closed=True)
                drawing.shape(data, fill="none", stroke=KEEP_OUT, stroke_width="1.4", stroke_dasharray="5 3")
        on_sheet = np.clip(outline, 0.0, np.asarray(size_mm)) if turn_mm is None else outline
        middles.append((item.name, middle_mm(on_sheet)))
    drawing.raw("</g>")
    return middles


def keep_out_sign(x: float, y: float, paint: str) -> str:
    """Returns the sign of a keep-out for a legend, its left middle at pixel (x, y)."""
    edge = f'stroke="{KEEP_OUT}" stroke-width="1.8"'
    return f'<rect x="{x:g}" y="{y - 6:g}" width="26" height="12" fill="{paint}" {edge}/>'


def draw_wide(
    drawing: Drawing, regions: tuple[WideRegion, ...], size_mm: tuple[float, float], turn_mm: float | None
) -> None:
    """Draws the outlines of wide regions."""
    if not regions:
        return
    _open_clip(drawing, size_mm, "wide")
    for region in regions:
        for points in copies_mm(np.asarray(region.outline_mm), turn_mm):
            data = drawing.path_data(points, closed=True)
            drawing.shape(data, fill=WIDE, fill_opacity="0.16", stroke=PAPER, stroke_width="4")
            drawing.shape(data, fill="none", stroke=WIDE, stroke_width="2", stroke_dasharray="9 3")
    drawing.raw("</g>")
