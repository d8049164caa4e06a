"""Rings and field surface made one closed mesh: strips between rings, and a band to the rim of what the field made."""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.solid.extract import any_corner, beyond_planes
from morph.solid.stretch import Stretches

MOST_CUTS, CUT_BACK = 4, 0.3
"""Where a band folds, the field's part is cut again, so much of the band's width farther back."""


def stitch(vertices: Floats, triangles: Ints, end: Ints, stretches: Stretches) -> tuple[Floats, Ints, Bools] | set[int]:
    """Returns the closed mesh and which of its vertices are points of rings; else the stretches whose rims do not fit.

    Args:
        vertices: (n, 3) of the field's part, in mm.
        triangles: (m, 3) of it; it reaches a little into each stretch, and is cut here.
        end: (k,) the end of a stretch each of the first k vertices is near to; later ones were put on edges.
        stretches: rings.
    """
    n = len(vertices)
    points = np.concatenate([vertices, stretches.points])
    all_ends, planes = _end_of_all(n, triangles, end), stretches.planes.copy()
    misfits: set[int] = set()
    for _ in range(MOST_CUTS):
        lost = any_corner(beyond_planes(vertices, all_ends, planes), triangles)
        rim = np.zeros(n, np.bool_)
        rim[triangles[lost]] = True
        kept = triangles[~lost]
        bands, misfits = _bands(points, n, _loops(kept, rim), stretches)
        if not misfits:
            closed = np.concatenate([kept, *(n + strip for strip in _strips(stretches)), *bands])
            used = np.zeros(len(points), np.bool_)
            used[closed] = True
            of_ring = np.arange(len(points)) >= n
            return points[used], (np.cumsum(used) - 1)[closed], of_ring[used]
        again = sorted(misfits)
        planes[again, :3] += CUT_BACK * (planes[again, :3] - stretches.centre[again])
    return {end // 2 for end in misfits}


def _end_of_all(n: int, triangles: Ints, end: Ints) -> Ints:
    """Returns the end (n,) of a stretch each vertex is near to; new vertices take that of a vertex beside them."""
    all_ends = np.concatenate([end, np.full(n - len(end), -1)])
    beside = triangles[any_corner(np.arange(n) >= len(end), triangles)]
    best = all_ends[beside].max(axis=1)
    for corner in range(3):
        new = beside[:, corner] >= len(end)
        np.maximum.at(all_ends, beside[new, corner], best[new])
    return all_ends


def _strips(stretches: Stretches) -> list[Ints]:
    """Returns the triangles between the rings of each stretch, on rows of its points."""
    strips = []
    for n, rings, first in zip(stretches.sides, stretches.rings, stretches.offset, strict=True):
        k = np.arange(n)
        one = first + n * np.arange(rings - 1)[:, None]
        a, b = one + k, one + (k + 1) % n
        near = np.stack([a, b, b + n], axis=-1).reshape(-1, 3)
        far = np.stack([a, b + n, a + n], axis=-1).reshape(-1, 3)
        strips += [near, far]
    return strips


def _loops(triangles: Ints, rim: Bools) -> list[Ints] | None:
    """Returns the closed rows of vertices along the open edges, as the triangles run; None where a vertex has two."""
    few = triangles[rim[triangles].sum(axis=1) >= 2]
    start, end = few.ravel(), np.roll(few, -1, axis=1).ravel()
    both = rim[start] & rim[end]
    start, end = start[both], end[both]
    n = len(rim)
    there, back = start * n + end, end * n + start
    is_open = ~np.isin(there, back)
    after = dict(zip(start[is_open].tolist(), end[is_open].tolist(), strict=True))
    if len(after) != int(is_open.sum()) or len(set(after.values())) != len(after):
        return None
    loops = []
    while after:
        first = min(after)
        row = [first]
        goal = after.pop(first)
        while goal != first:
            row.append(goal)
            goal = after.pop(goal)
        loops.append(np.array(row, np.int64))
    return loops


def _bands(points: Floats, n: int, loops: list[Ints] | None, stretches: Stretches) -> tuple[list[Ints], set[int]]:
    """Returns the triangles between each end's ring and its rim, and the ends where one is missing or folds."""
    from scipy.spatial import cKDTree

    n_ends = 2 * len(stretches.sides)
    bands: list[Ints] = []
    if loops is None or len(loops) != n_ends:
        return bands, set(range(n_ends))
    middle = np.array([points[loop].mean(axis=0) for loop in loops])
    loop_of: Ints = np.asarray(cKDTree(middle).query(stretches.planes[:, :3])[1], np.int64)
    if len(np.unique(loop_of)) != n_ends:
        return bands, set(range(n_ends))
    misfits: set[int] = set()
    for end in range(n_ends):
        ring, loop = n + stretches.ring(end), loops[loop_of[end]]
        # both rows run counter-clockwise about the axis; the rim's open edges run so only at the far end of a stretch
        band = _band(points, ring, loop if end % 2 else loop[::-1], end, stretches)
        if band is None:
            misfits.add(end)
        else:
            bands.append(band)
    return bands, misfits


def _band(points: Floats, ring: Ints, rim: Ints, end: int, stretches: Stretches) -> Ints | None:
    """Returns the triangles between a ring and its rim, joined first where the ridge passes; None where they fold.

    The rim's vertex on the ridge is kept first; if that does not work out it may be given up too.
    """
    from morph.kernels.zipper import fill_notches, zip_rows

    centre, axis = stretches.centre[end], stretches.axis[end]
    is_lower = end % 2 == 0
    for kept in (1, 0):
        row = np.roll(rim, -_nearest_along(points, rim, ring[0], axis))
        ears = np.empty((len(row), 3), np.int64)
        left, made = fill_notches(points, row, kept, is_lower, centre, axis, ears)
        row = row[:left]
        row = np.roll(row, -_nearest_along(points, row, ring[0], axis))
        band = np.empty((len(row) + len(ring), 3), np.int64)
        if zip_rows(points, row if is_lower else ring, ring if is_lower else row, centre, axis, band):
            return np.concatenate([ears[:made], band])
    return None


def _nearest_along(points: Floats, row: Ints, goal: int, axis: Floats) -> int:
    """Returns which vertex of a row is nearest to the line through `goal` along `axis`."""
    gap = points[row] - points[goal]
    gap -= (gap @ axis)[:, None] * axis
    return int((gap**2).sum(axis=1).argmin())
