"""Fewer triangles for a surface, moved by at most a tolerance and with no corner sharper than it must be."""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.core.progress import Progress

MOST_PASSES = 8
LEAST_GAIN = 0.01
"""A pass that gives up less than this share of the vertices is the last."""

VERTICES_PER_SLAB = 50_000


def simplify(vertices: Floats, triangles: Ints, keep: Bools, tolerance_mm: float, progress: Progress) -> Ints:
    """Returns the triangles (m, 3), each in its row, rows of those that are gone -1; vertices keep their numbers.

    Args:
        vertices: (n, 3) in mm.
        triangles: (m, 3) closed and 2-manifold; returned as they are where an edge occurs more than once.
        keep: (n,) vertices that must stay.
        tolerance_mm: how far the surface may move.
        progress: told after each slab of vertices; may raise Cancelled.
    """
    from morph.kernels.collapse import collapse_edges

    twin = _twins(triangles, len(vertices))
    if twin is None or tolerance_mm <= 0.0:
        return triangles
    start = np.ascontiguousarray(triangles).ravel().copy()
    out = np.full(len(vertices), -1, np.int64)
    out[start] = np.arange(len(start))
    moved = np.zeros(len(vertices))
    locked = keep.astype(np.uint8)
    n = len(vertices)
    for _ in range(MOST_PASSES):
        given_up = 0
        for first in range(0, n, VERTICES_PER_SLAB):
            last = min(first + VERTICES_PER_SLAB, n)
            given_up += collapse_edges(first, last, vertices, start, twin, out, locked, moved, tolerance_mm)
            progress.step("solid: simplify", last, n)
        if given_up < LEAST_GAIN * n:
            break
    return start.reshape(-1, 3)


def _twins(triangles: Ints, n_vertices: int) -> Ints | None:
    """Returns the opposite (3 m,) of each half-edge, None when the mesh is not a closed 2-manifold."""
    from morph.kernels.collapse import pair_edges

    twin = np.empty(triangles.size, np.int64)
    return twin if pair_edges(triangles, n_vertices, twin) else None
