"""The signs of the sheet pictures and their legend: colour scale, hatching, one shape per port role."""

from __future__ import annotations

import numpy as np

from morph.report.areas_view import keep_out_sign
from morph.report.colour import COLOUR_STEPS, map_hex, round_ticks
from morph.report.drawing import INK, PAPER, Drawing, Point, number
from morph.settings.job import Role

PORT_COLOUR = "#7a1fa2"
TICKS, WIDE_LETTERS = 6, 4


def port_mark(x: float, y: float, role: Role) -> str:
    """Returns a port's sign at pixel (x, y): in a filled disc with a dot, out an open ring, access a crossed square."""
    line = f'stroke="{PORT_COLOUR}" stroke-width="2.4"'
    if role is Role.IN:
        return (
            f'<circle cx="{x:g}" cy="{y:g}" r="7.5" fill="{PORT_COLOUR}" stroke="{PAPER}" stroke-width="1.5"/>'
            f'<circle cx="{x:g}" cy="{y:g}" r="2.2" fill="{PAPER}"/>'
        )
    if role is Role.OUT:
        return f'<circle cx="{x:g}" cy="{y:g}" r="7" fill="{PAPER}" {line}/>'
    return (
        f'<rect x="{x - 6.5:g}" y="{y - 6.5:g}" width="13" height="13" fill="{PAPER}" {line}/>'
        f'<path d="M{x - 6.5:g} {y - 6.5:g}l13 13m0 -13l-13 13" {line}/>'
    )


def _words(x: float, y: float, words: str, anchor: str = "start") -> str:
    return f'<text x="{x:g}" y="{y:g}" dy="0.35em" font-size="12" fill="{INK}" text-anchor="{anchor}">{words}</text>'


def _colour_bar(drawing: Drawing, words: str, ends: tuple[float, float], top: float) -> None:
    """Draws the colour scale with its ticks; `words` say figure and unit."""
    left, wide, high = 20.0, 188.0, 12.0
    drawing.raw(_words(left, top, words))
    step = wide / COLOUR_STEPS
    for index, colour in enumerate(map_hex(np.arange(COLOUR_STEPS) / (COLOUR_STEPS - 1))):
        x = number(left + index * step)
        drawing.raw(f'<rect x="{x}" y="{top + 12:g}" width="{number(step + 0.5)}" height="{high:g}" fill="{colour}"/>')
    ticks = round_ticks(*ends, TICKS)
    if max(len(f"{value:g}") for value in ticks) > WIDE_LETTERS:
        ticks = round_ticks(*ends, TICKS // 2 + 1)
    for value in ticks:
        at = round(left + (value - ends[0]) / (ends[1] - ends[0]) * wide, 2)
        drawing.raw(f'<path d="M{number(at)} {top + 24:g}v5" stroke="{INK}"/>')
        drawing.raw(_words(at, top + 37.0, f"{value:g}", "middle"))


def draw_sheet_legend(
    drawing: Drawing, words: str, ends: tuple[float, float], hatch: str, high_px: float, mark: str
) -> None:
    """Draws the legend in the lowest `high_px` of the drawing.

    Args:
        drawing: the sheet.
        words: what the colours stand for, with its unit.
        ends: ends of the colour scale.
        hatch: paint of branches without through-flow.
        high_px: height kept free for it.
        mark: what the ring means; empty: there is none.
    """
    top = drawing.height_px - high_px
    drawing.scale_bar((drawing.low_mm[0] + drawing.mm(12.0), drawing.low_mm[1] + drawing.mm(8.0)), 0.2)
    _colour_bar(drawing, words, ends, top + 14.0)
    x, y = 244.0, top + 14.0
    for role in (Role.IN, Role.OUT, Role.ACCESS):
        drawing.raw(port_mark(x, y, role) + _words(x + 13.0, y, role.value))
        x += 38.0 + 4.5 * len(role.value)
    x = 236.0
    fills = f'fill="#b9b58c" stroke="{INK}"'
    drawing.raw(f'<rect x="{x:g}" y="{top + 33:g}" width="26" height="12" {fills}/>')
    edge = f'stroke="{PAPER}" stroke-width="1.6" stroke-dasharray="4 3"'
    drawing.raw(f'<rect x="{x:g}" y="{top + 33:g}" width="26" height="12" fill="{hatch}" {edge}/>')
    drawing.raw(_words(x + 32.0, top + 39.0, "no through-flow"))
    if not mark:
        return
    drawing.raw(f'<circle cx="{x + 13:g}" cy="{top + 64:g}" r="9" fill="none" stroke="{INK}" stroke-width="2.4"/>')
    drawing.raw(_words(x + 32.0, top + 64.0, mark))


def draw_keep_out_legend(drawing: Drawing, high_px: float, paint: str) -> None:
    """Adds the sign of keep-outs to the legend in the lowest `high_px` of the drawing; `paint` fills them."""
    x, y = 128.0, drawing.height_px - high_px + 70.0
    drawing.raw(keep_out_sign(x, y, paint) + _words(x + 32.0, y, "keep-out"))


def draw_port(drawing: Drawing, at: Point, role: Role) -> None:
    """Draws a port's sign at a place in mm."""
    x, y = drawing.xy(at)
    drawing.raw(port_mark(float(x), float(y), role))
