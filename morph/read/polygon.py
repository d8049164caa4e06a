"""Polygons of a mesh file as triangles: a fan from a corner that sees the whole polygon.

A triangle stays itself. A polygon with a reflex corner is fanned from that corner when that works;
one that no corner sees whole, or that crosses itself, is refused.
"""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats, Ints
from morph.core.errors import InputError

MOST_CORNERS = 1000
"""Corners of one polygon: more is no face of a body but a broken index list."""

FLAT = 1e-12


def fan_polygons(points: Floats, polygons: list[list[int]], name: str) -> Ints:
    """Returns triangles (m, 3) that cover the polygons, in their order.

    Args:
        points: (n, 3).
        polygons: rows of `points`, at least 3 each, counter-clockwise seen from outside.
        name: base name of the file, for the message.

    Raises:
        InputError: `mesh-polygon` for a polygon that no fan covers.
    """
    out: list[tuple[int, int, int]] = []
    for number, polygon in enumerate(polygons, 1):
        if len(polygon) == 3:
            out.append((polygon[0], polygon[1], polygon[2]))
            continue
        with np.errstate(over="ignore", invalid="ignore"):  # sizes beyond any body are refused later
            start = _fan_start(points[polygon])
        if start is None:
            raise InputError(
                "mesh-polygon",
                expected="faces that a fan of triangles from one corner covers",
                found=f"face {number} of {len(polygon)} corners that no corner sees whole",
                where=name,
                do="Export the body as triangles.",
            )
        turned = polygon[start:] + polygon[:start]
        out += [(turned[0], turned[k], turned[k + 1]) for k in range(1, len(turned) - 1)]
    return np.array(out, dtype=np.int64).reshape(-1, 3)


def _fan_start(corner: Floats) -> int | None:
    """Returns the first corner from which every triangle of the fan turns the way of the whole polygon, or None."""
    after = np.roll(corner, -1, axis=0)
    normal = np.cross(corner - corner[0], after - corner[0]).sum(axis=0)
    size = float(normal @ normal)
    if not np.isfinite(size) or size <= 0.0:
        return 0  # without area: the check of the whole mesh says what that means
    for start in range(len(corner)):
        ring = np.roll(corner, -start, axis=0)
        one, two = ring[1:-1] - ring[0], ring[2:] - ring[0]
        if (np.cross(one, two) @ normal >= -FLAT * size).all():
            return start
    return None
