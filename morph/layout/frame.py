"""Where channels meet the frame of the image, and how they are carried on past it.

A run of coolant pixels along the frame is either a channel **cut by the frame** (about as wide as
the channel behind it) or a **wall contact** (a channel that runs along the frame and touches it).
Channels cut by the frame are continued outside along their own direction, so that thinning and
centring see a channel there and not an end wall.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Any

import numpy as np
from numpy.typing import NDArray

from morph.core.arrays import Bools, Floats
from morph.layout.level import Grid, Picture

CUT_RATIO = 3.2
"""A run up to this many half-widths long is a channel cut by the frame (2 straight, 2.83 at 45 degrees)."""
WIDENING = 1.6
"""Behind a channel cut by the frame the coolant is at most this many times as wide; a body touching it opens wider."""


class Side(StrEnum):
    """A side of the sheet."""

    BOTTOM = "bottom"
    TOP = "top"
    LEFT = "left"
    RIGHT = "right"


class RunKind(StrEnum):
    """What a run of coolant along the frame is."""

    CUT = "cut by frame"
    CONTACT = "wall contact"


@dataclass(frozen=True, slots=True)
class FrameRun:
    """Coolant pixels `first` up to, not including, `last` along `side`, counted from the left or the bottom."""

    side: Side
    first: int
    last: int
    kind: RunKind

    @property
    def middle_px(self) -> float:
        """Middle of the run as a fractional pixel index along the side."""
        return 0.5 * (self.first + self.last - 1)


@dataclass(frozen=True, slots=True, eq=False)
class Extended:
    """The picture with its cut channels carried on past the frame.

    Args:
        field: (rows, columns) density, padded on all sides. mask: field > level.
        outside_px: (rows, columns) distance outside the frame in pixels, 0 inside.
        mouth: (rows, columns) number of the mouth a pixel outside belongs to, -1 elsewhere.
        reach_px: (n_mouths,) how far outside each mouth's channel is to be followed.
        grid: places of the padded samples.
    """

    field: Floats
    mask: Bools
    outside_px: NDArray[np.int32]
    mouth: NDArray[np.int32]
    reach_px: Floats
    grid: Grid


def seen_from_side(array: NDArray[Any], side: Side) -> NDArray[Any]:
    """Returns a view of `array (rows, columns)` with row 0 at `side` and columns running along it."""
    if side is Side.BOTTOM:
        return array
    if side is Side.TOP:
        return array[::-1]
    return array.T if side is Side.LEFT else array[:, ::-1].T


def find_frame_runs(mask: Bools) -> tuple[FrameRun, ...]:
    """Returns the runs of coolant along the four sides of `mask`, side by side, each from its start."""
    runs = []
    for side in Side:
        view = seen_from_side(mask, side)
        step = np.diff(np.concatenate([[0], view[0].astype(np.int8), [0]]))
        for first, last in zip(np.flatnonzero(step == 1), np.flatnonzero(step == -1), strict=True):
            runs.append(FrameRun(side, int(first), int(last), _kind_of(view, int(first), int(last))))
    return tuple(runs)


def _kind_of(view: Bools, first: int, last: int) -> RunKind:
    """Compares the run's length with the half-width of the channel behind it, the frame taken as open."""
    from scipy import ndimage

    n = last - first
    if n < 2:
        return RunKind.CONTACT
    depth = min(math.ceil(1.2 * n) + 2, view.shape[0])
    left, right = max(0, first - n), min(view.shape[1], last + n)
    behind = np.pad(view[:depth, left:right], ((depth, 0), (0, 0)), mode="edge")
    distance = ndimage.distance_transform_edt(np.pad(behind, ((0, 1), (1, 1))))[:-1, 1:-1]
    half_width = float(distance[depth, first - left : last - left].max())
    straight = n <= CUT_RATIO * half_width and _width_behind(view, first, last) <= WIDENING * n + 2
    return RunKind.CUT if straight else RunKind.CONTACT


def _width_behind(view: Bools, first: int, last: int) -> int:
    """Returns how wide the coolant behind the middle of a run is, half the run's length in from the frame."""
    row, column = min((last - first) // 2, view.shape[0] - 1), (first + last - 1) // 2
    line = view[row]
    if not line[column]:
        return 0
    metal = np.flatnonzero(~line)
    after = int(np.searchsorted(metal, column))
    left = int(metal[after - 1]) if after > 0 else -1
    right = int(metal[after]) if after < len(metal) else len(line)
    return right - left - 1


def side_of(sheet_mm: tuple[float, float], size_mm: tuple[float, float]) -> tuple[Side, float]:
    """Returns the side nearest to a place on the sheet, and its distance in mm."""
    x, y = sheet_mm
    away = {Side.BOTTOM: y, Side.TOP: size_mm[1] - y, Side.LEFT: x, Side.RIGHT: size_mm[0] - x}
    return min(away.items(), key=lambda item: abs(item[1]))


def find_mouths(picture: Picture, ports_mm: Floats, size_mm: tuple[float, float]) -> tuple[FrameRun, ...]:
    """Returns the stretches of the frame past which a channel is carried on.

    These are all runs cut by the frame, and on a wall contact a window around each declared port
    there, as wide as the coolant behind it is deep.

    Args:
        picture: coolant on the fine grid.
        ports_mm: (n, 2) declared ports.
        size_mm: of the sheet.
    """
    runs = find_frame_runs(picture.mask)
    mouths = _one_per_corner([run for run in runs if run.kind is RunKind.CUT], picture, ports_mm)
    for port, place in zip(ports_mm, picture.grid.row_column(ports_mm), strict=True):
        side, away_mm = side_of((float(port[0]), float(port[1])), size_mm)
        if abs(away_mm) > 0.75 * picture.width_mm:
            continue
        along = float(place[1] if side in {Side.BOTTOM, Side.TOP} else place[0])
        for run in runs:
            if run.side is side and run.kind is RunKind.CONTACT and run.first - 1 <= along <= run.last:
                mouths.append(_window(picture.mask, run, along))
    return tuple(mouths)


def _one_per_corner(runs: list[FrameRun], picture: Picture, ports_mm: Floats) -> list[FrameRun]:
    """Returns `runs` with one of every two that share a corner: the one nearer to a port, else the longer."""
    rows, columns = picture.mask.shape
    along = {Side.BOTTOM: columns, Side.TOP: columns, Side.LEFT: rows, Side.RIGHT: rows}
    kept = list(runs)
    for level in (Side.BOTTOM, Side.TOP):
        for upright in (Side.LEFT, Side.RIGHT):
            pair = [
                next((r for r in kept if r.side is side and _touches(r, other, along[side])), None)
                for side, other in ((level, upright), (upright, level))
            ]
            if pair[0] is not None and pair[1] is not None:
                first, second = pair[0], pair[1]
                away = [_away_from_ports(run, picture, ports_mm) for run in (first, second)]
                shorter = second if first.last - first.first >= second.last - second.first else first
                kept.remove(shorter if away[0] == away[1] else first if away[0] > away[1] else second)
    return kept


def _touches(run: FrameRun, corner_side: Side, n: int) -> bool:
    return run.first == 0 if corner_side in {Side.LEFT, Side.BOTTOM} else run.last == n


def _away_from_ports(run: FrameRun, picture: Picture, ports_mm: Floats) -> float:
    rows, columns = picture.mask.shape
    across = {Side.BOTTOM: 0.0, Side.TOP: rows - 1.0, Side.LEFT: 0.0, Side.RIGHT: columns - 1.0}[run.side]
    upright = run.side in {Side.LEFT, Side.RIGHT}
    place = np.array([[run.middle_px, across] if upright else [across, run.middle_px]])
    away = np.hypot(*(ports_mm - picture.grid.sheet_mm(place)).T)
    return float(away.min()) if len(away) else math.inf


def _window(mask: Bools, run: FrameRun, along: float) -> FrameRun:
    column = min(max(round(along), run.first), run.last - 1)
    behind = seen_from_side(mask, run.side)[:, column]
    depth = len(behind) if behind.all() else int(np.argmin(behind))
    half = max(2, min(depth, run.last - run.first)) / 2.0
    first, last = max(run.first, math.floor(column - half)), min(run.last, math.ceil(column + half))
    return FrameRun(run.side, first, last, RunKind.CUT)


def _slope(view: Bools, first: int, last: int) -> float:
    """Returns how many pixels the channel behind a mouth moves along the side per pixel inwards, within +-1."""
    n = last - first
    middle, at = 0.5 * (first + last - 1), 0.5 * (first + last - 1)
    deep = 0
    for row in range(1, min(view.shape[0], max(3, n // 2))):
        line, column = view[row], round(at)
        if not 0 <= column < len(line) or not line[column]:
            break
        left = column - int(np.argmin(line[column::-1])) if not line[: column + 1].all() else -1
        right = column + int(np.argmin(line[column:])) if not line[column:].all() else len(line)
        if right - left - 1 > 1.4 * n + 1 or left < 0 or right >= len(line):
            break
        at, deep = 0.5 * (left + right), row
    return float(np.clip((at - middle) / deep, -1.0, 1.0)) if deep >= 2 else 0.0


def extend(picture: Picture, mouths: tuple[FrameRun, ...]) -> Extended:
    """Returns `picture` padded with metal, the channel behind each mouth carried on outside along its direction."""
    n_out = [math.ceil(1.2 * (mouth.last - mouth.first)) + 4 for mouth in mouths]
    pad = max([*n_out, 2]) + 3
    field = np.pad(picture.field, pad, constant_values=0.0)
    number = np.full(field.shape, -1, dtype=np.int32)
    for index, (mouth, n_rows) in enumerate(zip(mouths, n_out, strict=True)):
        inner = seen_from_side(picture.field, mouth.side)
        outer, outer_number = seen_from_side(field, mouth.side), seen_from_side(number, mouth.side)
        slope = _slope(seen_from_side(picture.mask, mouth.side), mouth.first, mouth.last)
        first, last = max(0, mouth.first - 2), min(inner.shape[1], mouth.last + 2)
        span = np.arange(first, last)
        for row in range(1, n_rows + 1):
            shifted = np.arange(math.floor(first - slope * row), math.ceil(last - slope * row) + 1)
            line = np.interp(shifted + slope * row, span, inner[0, first:last], left=0.0, right=0.0)
            inside = (shifted + pad >= 1) & (shifted + pad < outer.shape[1] - 1)
            where = shifted[inside] + pad
            outer[pad - row, where] = np.maximum(outer[pad - row, where], line[inside])
            outer_number[pad - row, where] = index
    outside = _outside_px(field.shape, pad)
    x, y = picture.grid.first_mm
    step_x, step_y = picture.grid.pitch_mm
    grid = Grid((x - pad * step_x, y - pad * step_y), picture.grid.pitch_mm)
    reach = np.array([0.5 * (mouth.last - mouth.first) + 1.0 for mouth in mouths])
    return Extended(field, field > picture.level, outside, number, reach, grid)


def _outside_px(shape: tuple[int, ...], pad: int) -> NDArray[np.int32]:
    row, column = np.arange(shape[0], dtype=np.int32), np.arange(shape[1], dtype=np.int32)
    out_y = np.maximum(np.maximum(pad - row, row - (shape[0] - 1 - pad)), 0)
    out_x = np.maximum(np.maximum(pad - column, column - (shape[1] - 1 - pad)), 0)
    return np.asarray(np.maximum(out_y[:, None], out_x[None, :]), dtype=np.int32)
