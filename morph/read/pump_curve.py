"""A pump's curve from a CSV file of a stranger: flow in L/min and head in bar, one point a line."""

from __future__ import annotations

import csv
import io
import math
from pathlib import Path
from typing import NoReturn

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import InputError

LARGEST_BYTES = 100_000
MOST_POINTS = 1000
LARGEST_FLOW_L_MIN, LARGEST_HEAD_BAR = 10_000.0, 1000.0


def read_pump_curve(path: Path) -> tuple[Floats, Floats]:
    """Returns flows (k,) in L/min and heads (k,) in bar of a pump's table, 2 to 1000 points.

    A first line of words is skipped; columns are parted by commas or semicolons, decimals by points.

    Args:
        path: the CSV file, at most 100 kB; flow grows from 0 or more, head never grows and starts above 0.

    Raises:
        InputError: `pump-unreadable` when the file is missing, too large or not text; `pump-values` when a line is
            not two numbers in range, or flow or head run the wrong way.
    """
    rows = _rows(_text(path))
    points: list[tuple[float, float]] = []
    for number, row in rows:
        values = [value for value in map(_number, row) if value is not None]
        if not points and not values:
            continue  # the heading
        if len(values) != 2 or len(row) != 2:
            _refuse(
                path, number, "two numbers, decimals with a point: flow in L/min and head in bar", " | ".join(row)[:60]
            )
        flow, head = values
        if not (0.0 <= flow <= LARGEST_FLOW_L_MIN and 0.0 <= head <= LARGEST_HEAD_BAR):
            _refuse(
                path,
                number,
                f"flow in 0 to {LARGEST_FLOW_L_MIN:g} L/min, head in 0 to {LARGEST_HEAD_BAR:g} bar",
                f"{flow:g} L/min, {head:g} bar",
            )
        if points and (flow <= points[-1][0] or head > points[-1][1]):
            _refuse(path, number, "flow that grows and head that does not", f"{flow:g} L/min, {head:g} bar")
        points.append((flow, head))
    if not 2 <= len(points) <= MOST_POINTS or points[0][1] == 0.0:
        last = rows[-1][0] if rows else 1
        found = f"{len(points)} points" + (", no column marks (comma or semicolon)" if not points and rows else "")
        _refuse(path, last, f"2 to {MOST_POINTS} points, the first with head", found)
    table = np.array(points)
    return table[:, 0].copy(), table[:, 1].copy()


def _text(path: Path) -> str:
    where = path.name[:80] or "[coolant] pump"
    try:
        with path.open("rb") as stream:
            content = stream.read(LARGEST_BYTES + 1)
        if len(content) > LARGEST_BYTES:
            raise ValueError(f"more than {LARGEST_BYTES} bytes")
        return content.decode("utf-8-sig")
    except (OSError, ValueError) as error:
        found = (error.strerror or type(error).__name__) if isinstance(error, OSError) else str(error)[:100]
        if isinstance(error, UnicodeDecodeError):
            found = "a file that is not text"
        raise InputError(
            "pump-unreadable",
            expected=f"a pump curve: CSV text of at most {LARGEST_BYTES} bytes",
            found=found,
            where=where,
            do="Check [coolant] pump; a relative path starts from the job file's folder.",
        ) from error


def _rows(text: str) -> list[tuple[int, list[str]]]:
    """Returns the lines that hold something, with their numbers, at most a few more than allowed."""
    mark = ";" if ";" in text else ","
    try:
        table = list(csv.reader(io.StringIO(text), delimiter=mark))
    except csv.Error:
        return [(1, ["a table that is not CSV"])]
    return [(k, [cell.strip() for cell in row]) for k, row in enumerate(table, 1) if any(cell.strip() for cell in row)]


def _number(cell: str) -> float | None:
    try:
        value = float(cell)
    except ValueError:
        return None
    return value if math.isfinite(value) else None


def _refuse(path: Path, line: int, expected: str, found: str) -> NoReturn:
    raise InputError(
        "pump-values",
        expected=expected,
        found=found,
        where=f"{path.name[:80]}: line {line}",
        do="Write one point a line, such as 10, 2.5 for 10 L/min at 2.5 bar, in the order of growing flow.",
    )
