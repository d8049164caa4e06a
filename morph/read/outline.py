"""Outlines of channels as a density: the share of each cell of the sheet that lies within them, exactly.

Rings that lie within others are metal islands, and so on inwards; rings that overlap are one channel. Each edge is
cut at the lines of the grid; in the cell it lies in, a piece leaves the area beside it uncovered, and covers the
cells beyond it whole (signed area by Green's theorem). A drawing along the borders of the cells comes out as 0 and 1.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import InputError
from morph.read.image_fault import LARGEST_SIDE, SMALLEST_SIDE, Decoded, damaged, too_large

CELLS_PER_WIDTH = 10.0
LARGEST_DEFAULT_SIDE = 4096
SQUARE_SLACK = 0.002
ROUNDED_TO = 12
MOST_RINGS = 5000
MOST_CORNERS = 400_000
CLOSED_MM = 1e-3
"""Ends this near are one point."""
FLAT_MM = 0.002
"""Curves are cut into chords that stay this near."""


@dataclass(frozen=True, slots=True, eq=False)
class Outlines:
    """What a drawing holds, in mm with the sheet's lower left corner as origin, y up.

    Args:
        rings: (k, 2) closed outlines, the first corner not repeated.
        open_lines: (k, 2) lines that are not closed.
        note: format and unit as words. remarks: what was left out.
        size_mm: width and height the drawing gives itself, or None.
        flip: y runs downwards from the sheet's top and is turned about its height.
    """

    rings: tuple[Floats, ...]
    open_lines: tuple[Floats, ...]
    note: str
    remarks: tuple[str, ...] = ()
    size_mm: tuple[float, float] | None = None
    flip: bool = False


def fill_outlines(drawing: Outlines, size_mm: tuple[float, float], pixel_mm: float | None, name: str) -> Decoded:
    """Returns the density of `drawing` on a sheet of `size_mm`.

    Args:
        drawing: the outlines.
        size_mm: width and height of the sheet.
        pixel_mm: side of a cell; None: a tenth of the mean channel width.
        name: base name of the file, for messages.

    Raises:
        InputError: no outline, open lines, outlines that cross themselves, nothing on the sheet, or too fine a grid.
    """
    rings = list(drawing.rings) + join_lines(drawing.open_lines, name)
    if drawing.flip:
        rings = [ring * np.array([1.0, -1.0]) + np.array([0.0, size_mm[1]]) for ring in rings]
    area = _united(rings, name)
    remarks = list(drawing.remarks)
    from shapely import box

    inside = area.intersection(box(0.0, 0.0, *size_mm))
    if inside.area < 1e-6:
        low_x, low_y, high_x, high_y = area.bounds
        raise InputError(
            "outline-off-sheet",
            expected=f"outlines on the sheet, x 0 to {size_mm[0]:g} and y 0 to {size_mm[1]:g} mm",
            found=f"outlines from [{low_x:.2f}, {low_y:.2f}] to [{high_x:.2f}, {high_y:.2f}] mm",
            where=name,
            do="Move the drawing so that the sheet's lower left corner is its origin, and check its unit.",
        )
    if area.area - inside.area > 1e-3 * area.area:
        remarks.append(f"{area.area - inside.area:.1f} mm2 of the outlines lie off the sheet and are cut off.")
    shape = _choose_shape(inside, size_mm, pixel_mm, name)
    value = covered(_oriented(inside), shape, size_mm)
    pixel = size_mm[0] / shape[1]
    note = f"{drawing.note}, {len(rings)} outlines, filled on {shape[1]} x {shape[0]} cells of {pixel:.4g} mm"
    return Decoded(value, note, "bottom-up", "cells", True, drawing.size_mm, tuple(remarks))


def join_lines(lines: tuple[Floats, ...], name: str) -> list[Floats]:
    """Returns the rings that open lines make end to end.

    Raises:
        InputError: `outline-open` when an end meets no other, or more than one.
    """
    left = [np.asarray(line, dtype=np.float64) for line in lines]
    rings = []
    while left:
        ring = left.pop(0)
        while math.dist(ring[0], ring[-1]) > CLOSED_MM:
            ends = [
                (index, end)
                for index, line in enumerate(left)
                for end in (0, -1)
                if math.dist(line[end], ring[-1]) <= CLOSED_MM
            ]
            if len(ends) != 1:
                x, y = (float(value) for value in ring[-1])
                raise InputError(
                    "outline-open",
                    expected="lines that close to outlines",
                    found=f"{'an open end' if not ends else f'{len(ends) + 1} ends'} at [{x:.3f}, {y:.3f}] mm",
                    where=name,
                    do=f"Close the outline; ends up to {CLOSED_MM:g} mm apart are one point.",
                )
            index, end = ends[0]
            line = left.pop(index)
            ring = np.vstack([ring, (line if end == 0 else line[::-1])[1:]])
        rings.append(ring[:-1])
    return rings


def _united(rings: list[Floats], name: str) -> Any:
    """Returns the area within the rings: each depth of nesting in turn coolant and metal."""
    from shapely import Polygon, STRtree, unary_union
    from shapely.validation import explain_validity

    if not rings:
        raise InputError(
            "outline-none",
            expected="closed outlines of channels",
            found="none",
            where=name,
            do="Draw the walls of the channels as closed lines; centrelines alone are not read.",
        )
    if len(rings) > MOST_RINGS or sum(map(len, rings)) > MOST_CORNERS:
        raise too_large(f"{len(rings)} outlines of {sum(map(len, rings))} corners", name)
    polygons = []
    for ring in rings:
        if len(ring) < 3 or not np.isfinite(ring).all():
            raise damaged("outlines of three or more corners", f"one of {len(ring)}", name)
        polygon = Polygon(ring)
        if not polygon.is_valid:
            raise InputError(
                "outline-crosses",
                expected="outlines that do not cross themselves",
                found=explain_validity(polygon),
                where=name,
                do="Draw each outline once around, without crossing its own line.",
            )
        polygons.append(polygon)
    tree = STRtree(polygons)
    depth = np.zeros(len(polygons), dtype=np.int64)
    inner, outer = tree.query(polygons, predicate="within")
    different = inner != outer
    np.add.at(depth, inner[different], 1)
    area = Polygon()
    for level in range(int(depth.max()) + 1):
        layer = unary_union([polygon for polygon, at in zip(polygons, depth, strict=True) if at == level])
        area = area.union(layer) if level % 2 == 0 else area.difference(layer)
    return area


def _oriented(area: Any) -> list[Floats]:
    """Returns the rings of an area: outer ones counter-clockwise, holes clockwise, first corner repeated."""
    from shapely.geometry.polygon import orient

    polygons = [part for part in getattr(area, "geoms", [area]) if part.geom_type == "Polygon" and not part.is_empty]
    rings = []
    for polygon in polygons:
        whole = orient(polygon)
        rings += [np.asarray(ring.coords, dtype=np.float64) for ring in (whole.exterior, *whole.interiors)]
    return rings


def _choose_shape(area: Any, size_mm: tuple[float, float], pixel_mm: float | None, name: str) -> tuple[int, int]:
    """Returns rows and columns of cells that are square within 0.2 %."""
    width_mm = 2.0 * area.area / area.length
    wanted = pixel_mm or max(width_mm / CELLS_PER_WIDTH, max(size_mm) / LARGEST_DEFAULT_SIDE)
    first = max(SMALLEST_SIDE, round(size_mm[0] / wanted))
    for columns in range(first, first + 400):
        rows = max(SMALLEST_SIDE, round(size_mm[1] * columns / size_mm[0]))
        if abs(size_mm[0] / columns * rows / size_mm[1] - 1.0) <= SQUARE_SLACK:
            break
    if max(rows, columns) > LARGEST_SIDE:
        raise too_large(f"{columns} x {rows} cells of {wanted:g} mm", name)
    return rows, columns


def covered(rings: list[Floats], shape: tuple[int, int], size_mm: tuple[float, float]) -> Floats:
    """Returns (rows, columns) the covered share of each cell, row 0 at the bottom.

    Args:
        rings: (k, 2) closed rings in mm, outer ones counter-clockwise, holes clockwise.
        shape: rows and columns.
        size_mm: width and height of the sheet.

    >>> covered([np.array([[0, 0], [1.5, 0], [1.5, 1], [0, 1], [0, 0.0]])], (1, 2), (2.0, 1.0)).tolist()
    [[1.0, 0.5]]
    """
    rows, columns = shape
    scale = np.array([columns / size_mm[0], rows / size_mm[1]])
    share = np.zeros((rows, columns + 2))
    for ring in rings:
        corner = ring * scale
        near = np.round(corner)
        corner = np.where(np.abs(corner - near) < 1e-9, near, corner)
        for start, end in itertools.pairwise(corner):
            if start[1] != end[1]:
                _add_edge(share, start, end)
    whole = np.clip(-np.cumsum(share, axis=1)[:, :columns], 0.0, 1.0)
    return np.round(whole, ROUNDED_TO) + 0.0  # so that a drawing along cell borders is 0 and 1 to the last bit


def _add_edge(share: Floats, start: Floats, end: Floats) -> None:
    """Adds an edge, in cells, to the running differences `share` (rows, columns + 2) of the covered area."""
    rows, columns = share.shape[0], share.shape[1] - 2
    at = [np.array([0.0, 1.0])]
    for axis in (0, 1):
        low, high = sorted((start[axis], end[axis]))
        lines = np.arange(math.floor(low) + 1, math.ceil(high))
        if len(lines):
            at.append((lines - start[axis]) / (end[axis] - start[axis]))
    cut = np.unique(np.clip(np.concatenate(at), 0.0, 1.0))
    place = start + cut[:, None] * (end - start)
    middle, rise = 0.5 * (place[:-1] + place[1:]), np.diff(place[:, 1])
    row = np.floor(middle[:, 1]).astype(np.int64)
    inside = (row >= 0) & (row < rows)
    x = np.clip(middle[inside, 0], 0.0, float(columns))
    column = np.minimum(np.floor(x).astype(np.int64), columns)
    beyond = x - column
    np.add.at(share, (row[inside], column), rise[inside] * (1.0 - beyond))
    np.add.at(share, (row[inside], column + 1), rise[inside] * beyond)
