"""Pictures of a sheet whose left and right edge are one line: what runs past one edge shows again at the other."""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager

import numpy as np

from morph.core.arrays import Floats
from morph.report.drawing import Drawing, number


def copies_mm(points_mm: Floats, turn_mm: float | None) -> list[Floats]:
    """Returns the copies of `points_mm (k, 2)`, whole turns apart, that reach onto the sheet; itself on an open one.

    >>> len(copies_mm(np.array([[90.0, 5.0], [104.0, 5.0]]), 100.0))
    2
    """
    if turn_mm is None:
        return [points_mm]
    low, high = float(points_mm[:, 0].min()), float(points_mm[:, 0].max())
    turns = range(math.ceil(-high / turn_mm), math.floor((turn_mm - low) / turn_mm) + 1)
    return [points_mm + np.array([turn * turn_mm, 0.0]) for turn in turns]


def on_sheet_mm(place_mm: Floats, turn_mm: float | None) -> Floats:
    """Returns the place (2,), or places (k, 2), moved by whole turns onto the sheet."""
    if turn_mm is None:
        return place_mm
    moved = np.array(place_mm, dtype=np.float64)
    moved[..., 0] = moved[..., 0] % turn_mm
    return moved


@contextmanager
def clipped(drawing: Drawing, size_mm: tuple[float, float], turn_mm: float | None) -> Iterator[None]:
    """Clips what is drawn within at the sheet's left and right edge, on a sheet that repeats."""
    if turn_mm is None:
        yield
        return
    (left, top), (_, bottom) = drawing.xy((0.0, drawing.high_mm[1])), drawing.xy((0.0, drawing.low_mm[1]))
    width, height = number(size_mm[0] * drawing.px_per_mm), number(float(bottom) - float(top))
    name = f"{drawing.ident}-turn"
    drawing.define(f'<clipPath id="{name}"><rect x="{left}" y="{top}" width="{width}" height="{height}"/></clipPath>')
    drawing.raw(f'<g clip-path="url(#{name})">')
    yield
    drawing.raw("</g>")
