"""Which parts of the field need no samples, because rings make the wall there.

`end (n,)` tells for each piece: -1 no stretch, -2 inside a stretch and far from its ends, else the number of the end of
a stretch that is near. `planes (k, 6)` holds a point and a direction into the stretch for each end.
"""

from __future__ import annotations

from numba import njit

from morph.core.arrays import Floats, Ints

NO_STRETCH, INSIDE = -1, -2


@njit(cache=True, nogil=True)
def is_beyond(x: float, y: float, z: float, reach_mm: float, piece: int, end: Ints, planes: Floats) -> bool:
    """Returns whether a ball about a point near `piece` lies in a stretch, wholly beyond its end's plane."""
    e = end[piece]
    if e < 0:
        return bool(e == INSIDE)
    p = planes[e]
    return bool((x - p[0]) * p[3] + (y - p[1]) * p[4] + (z - p[2]) * p[5] > reach_mm)


@njit(cache=True, nogil=True)
def is_swept(x: float, y: float, z: float, reach_mm: float, near: Ints, n_near: int, end: Ints, planes: Floats) -> bool:
    """Returns whether all of the pieces that matter within `reach_mm` of a point leave that place to rings."""
    if len(planes) == 0:
        return False
    for q in range(n_near):
        if not is_beyond(x, y, z, reach_mm, near[q], end, planes):
            return False
    return True
