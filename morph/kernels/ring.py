"""Rings around a channel that runs alone: frames along it, wall points on rays, what is near, which rings are needed.

Samples of a branch lie on its centreline; the ring of a sample has its points where rays from the sample, square to the
branch, leave the branch's own wall. Point k of n stands at the angle 2 pi k / n from the ring's `side` axis towards
tangent x side. On roofs `side` looks up and the ring is turned so that point 0 is on the ridge.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from morph.core.arrays import Floats, Ints
from morph.kernels.swept_ball import piece_distance, piece_wall

LEAST_LEVEL = 0.3
"""Steeper than this (sine to the build direction) a channel has no ridge worth a point of its own."""

NEWTON_STEPS, INNER_STEPS = 12, 4
CLOSE_MM = 1e-6
LONGEST_STEP = 0.3
"""A step changes the distance by at most this share."""

RIDGE_STEPS = 14
"""Halvings of the angle in which the ridge is looked for."""

LEAST_ADVANCE = 0.2
"""Points of neighbouring rings must advance by at least this share of what their centres do."""

CHORD_SHARE = 1.0 / 12.0
"""Points on a wall of radius r stand edge^2 / (12 r) outside: the polygon then has the area of the section."""


@njit(cache=True, nogil=True)
def frame_branch(tangent: Floats, up: Floats, roofed: NDArray[np.uint8], side: Floats, turn: Floats) -> None:
    """Writes to `side (n, 3)` an axis square to each tangent of one branch, and to `turn (n,)` how it twists.

    The axis follows `up` where a roof may have a ridge, and is carried on without a twist elsewhere; `turn` is the sine
    of the angle against the sample before.
    """
    n = len(tangent)
    first = -1
    want = np.empty(3)
    for i in range(n):
        turn[i] = 0.0
        climb = tangent[i, 0] * up[0] + tangent[i, 1] * up[1] + tangent[i, 2] * up[2]
        level = np.sqrt(max(1.0 - climb * climb, 0.0))
        ridge = roofed[i] and level > LEAST_LEVEL
        if ridge:
            for a in range(3):
                want[a] = (up[a] - climb * tangent[i, a]) / level
            if first < 0:
                first = i
        if i > 0:
            carry_axis(side, i - 1, tangent, i)
            if ridge and first < i:
                cx = side[i, 1] * want[2] - side[i, 2] * want[1]
                cy = side[i, 2] * want[0] - side[i, 0] * want[2]
                cz = side[i, 0] * want[1] - side[i, 1] * want[0]
                turn[i] = np.sqrt(cx * cx + cy * cy + cz * cz)
                if side[i, 0] * want[0] + side[i, 1] * want[1] + side[i, 2] * want[2] < 0.0:
                    turn[i] = 1.0
        elif not ridge:
            axis = 0
            for a in range(1, 3):
                if abs(tangent[0, a]) < abs(tangent[0, axis]):
                    axis = a
            size = np.sqrt(1.0 - tangent[0, axis] ** 2)
            for a in range(3):
                side[0, a] = ((1.0 if a == axis else 0.0) - tangent[0, axis] * tangent[0, a]) / size
        if ridge:
            for a in range(3):
                side[i, a] = want[a]
    for i in range(first - 1, -1, -1):
        carry_axis(side, i + 1, tangent, i)


@njit(cache=True, nogil=True)
def carry_axis(side: Floats, i: int, tangent: Floats, j: int) -> None:
    """Writes to `side[j]` the axis of sample i laid square to the tangent of sample j."""
    along = 0.0
    for a in range(3):
        along += side[i, a] * tangent[j, a]
    size = 0.0
    for a in range(3):
        side[j, a] = side[i, a] - along * tangent[j, a]
        size += side[j, a] ** 2
    size = np.sqrt(size) + 1e-300
    for a in range(3):
        side[j, a] /= size


@njit(cache=True, nogil=True, error_model="numpy")
def ray_to_wall(
    centre: Floats, way: Floats, start: float, likely: int, angle: float, steps: int,
    pieces: Floats, own: Ints, low: int, high: int, out: Floats,
) -> tuple[float, int]:  # fmt: skip
    """Returns how far from `centre (3,)` along unit `way (3,)` the wall of the pieces `own[low:high]` is, and which it is.

    In mm; on a round wall a little further, by CHORD_SHARE of the squared edge that `angle` makes there. `out (4,)`
    receives the wall's direction and its curvature. Newton steps from `start` to the wall of the `likely` piece, then of
    the one that is nearest there, at most `steps` pieces one after the other.
    """
    t = start
    best = likely
    for _ in range(steps):
        px, py, pz, step = 0.0, 0.0, 0.0, 0.0
        for _ in range(INNER_STEPS):
            px, py, pz = centre[0] + t * way[0], centre[1] + t * way[1], centre[2] + t * way[2]
            f, out[0], out[1], out[2], out[3] = piece_wall(px, py, pz, pieces, best)
            slope = max(out[0] * way[0] + out[1] * way[1] + out[2] * way[2], 0.05)
            edge = t * angle / slope
            step = (f - CHORD_SHARE * edge * edge * out[3]) / slope
            t -= min(max(step, -LONGEST_STEP * t), LONGEST_STEP * t)
            if abs(step) < CLOSE_MM:
                break
        least = piece_distance(px, py, pz, pieces, best) - CLOSE_MM
        before = best
        for q in range(low, high):
            if own[q] != before:
                d = piece_distance(px, py, pz, pieces, own[q])
                if d < least:
                    least = d
                    best = own[q]
        if best == before and abs(step) < CLOSE_MM:
            break
    return t, best


@njit(cache=True, nogil=True, error_model="numpy")
def nearest_own(centre: Floats, way: Floats, t: float, pieces: Floats, own: Ints, low: int, high: int) -> int:
    """Returns which of the pieces `own[low:high]` is nearest to the point t mm from `centre (3,)` along `way (3,)`."""
    least = 1e30
    best = 0
    for q in range(low, high):
        d = piece_distance(centre[0] + t * way[0], centre[1] + t * way[1], centre[2] + t * way[2], pieces, own[q])
        if d < least:
            least = d
            best = own[q]
    return best


@njit(cache=True, nogil=True, error_model="numpy")
def find_ridge(
    centre: Floats, side: Floats, across: Floats, start: float, angle: float,
    pieces: Floats, own: Ints, low: int, high: int, way: Floats, out: Floats,
) -> float:  # fmt: skip
    """Returns at which angle from `side` towards `across` the wall has its ridge, within +-`angle`; 0 where it is round.

    Before a ridge the wall leans to one side, behind it to the other.
    """
    t = start
    best = nearest_own(centre, side, t, pieces, own, low, high)
    curved = 0
    for k in range(-1, 2):
        c, s = np.cos(0.5 * k * angle), np.sin(0.5 * k * angle)
        for a in range(3):
            way[a] = c * side[a] + s * across[a]
        t, best = ray_to_wall(centre, way, t, best, 0.0, NEWTON_STEPS, pieces, own, low, high, out)
        curved += out[3] > 0.0
    if curved == 3:
        return 0.0
    left, right = -angle, angle
    for _ in range(RIDGE_STEPS):
        at = 0.5 * (left + right)
        c, s = np.cos(at), np.sin(at)
        for a in range(3):
            way[a] = c * side[a] + s * across[a]
        t, best = ray_to_wall(centre, way, t, best, 0.0, NEWTON_STEPS, pieces, own, low, high, out)
        if out[0] * across[0] + out[1] * across[1] + out[2] * across[2] < 0.0:
            left = at
        else:
            right = at
    return 0.5 * (left + right)


@njit(cache=True, nogil=True, error_model="numpy")
def place_rings(
    first: int, last: int, centre: Floats, tangent: Floats, side: Floats, radius: Floats, ridge: NDArray[np.uint8],
    sides: Ints, offset: Ints, pieces: Floats, own: Ints, window: Ints, points: Floats, lean: Floats,
) -> None:  # fmt: skip
    """Places the points of the rings first..last - 1, each ring turned by `lean (k,)` so that point 0 is on the ridge.

    `centre`, `tangent`, `side` (k, 3), `radius (k,)` to start from, `ridge (k,)` 1 where a ridge may be, `sides (k,)`
    points per ring, `offset (k,)` the ring's first row of `points (n, 3)`; the pieces that matter for ring r are
    `own[window[r, 0]:window[r, 1]]`.
    """
    way = np.empty(3)
    out = np.empty(4)
    across = np.empty(3)
    for r in range(first, last):
        low, high = window[r, 0], window[r, 1]
        angle = 2.0 * np.pi / sides[r]
        across[0] = tangent[r, 1] * side[r, 2] - tangent[r, 2] * side[r, 1]
        across[1] = tangent[r, 2] * side[r, 0] - tangent[r, 0] * side[r, 2]
        across[2] = tangent[r, 0] * side[r, 1] - tangent[r, 1] * side[r, 0]
        t = radius[r]
        best = nearest_own(centre[r], side[r], t, pieces, own, low, high)
        lean[r] = 0.0
        if ridge[r]:
            lean[r] = find_ridge(centre[r], side[r], across, t, angle, pieces, own, low, high, way, out)
        for k in range(sides[r]):
            turn = lean[r] + angle * k
            c, s = np.cos(turn), np.sin(turn)
            for a in range(3):
                way[a] = c * side[r, a] + s * across[a]
            t, best = ray_to_wall(centre[r], way, t, best, angle, NEWTON_STEPS, pieces, own, low, high, out)
            for a in range(3):
                points[offset[r] + k, a] = centre[r, a] + t * way[a]


@njit(cache=True, nogil=True, error_model="numpy")
def mark_clear(
    first: int, last: int, branch: Ints, at_mm: Floats, own_mm: Floats, sides: Ints, offset: Ints, points: Floats,
    pieces: Floats, along: Floats, origin: Floats, block_mm: float, shape: Ints, keys: Ints, start: Ints, near: Ints,
    margin_mm: Floats, clear: NDArray[np.uint8],
) -> None:  # fmt: skip
    """Sets `clear (k,)` to 1 for the rings first..last - 1 that nothing but their own stretch comes near.

    Own are the pieces of the ring's `branch (k,)` that lie within `own_mm (k,)` of its place `at_mm (k,)` along it
    (`along (n, 3)`: branch, start, end); all others must be `margin_mm (k,)` away from each of its points. They are
    looked for in the list of the block a point lies in.
    """
    for r in range(first, last):
        clear[r] = 1
        block = -1
        list_ = 0
        for k in range(sides[r]):
            p = points[offset[r] + k]
            x = int(np.floor((p[0] - origin[0]) / block_mm))
            y = int(np.floor((p[1] - origin[1]) / block_mm))
            z = int(np.floor((p[2] - origin[2]) / block_mm))
            key = (x * shape[1] + y) * shape[2] + z
            if key != block:
                block = key
                list_ = np.searchsorted(keys, key)
            if list_ == len(keys) or keys[list_] != key:
                continue
            for q in range(start[list_], start[list_ + 1]):
                i = near[q]
                if (
                    along[i, 0] == branch[r]
                    and along[i, 2] >= at_mm[r] - own_mm[r]
                    and along[i, 1] <= at_mm[r] + own_mm[r]
                ):
                    continue
                if piece_distance(p[0], p[1], p[2], pieces, i) < margin_mm[r]:
                    clear[r] = 0
                    break
            if clear[r] == 0:
                break


@njit(cache=True, nogil=True, error_model="numpy")
def ring_follows(
    a: int, b: int, n: int, offset: Ints, points: Floats, centre: Floats, inside_mm: float, outside_mm: float
) -> bool:
    """Returns whether the strip from ring a to ring b goes on, and stays within two tolerances of the rings between.

    `inside_mm` counts where the strip is nearer to the centreline than the points of those rings, `outside_mm` where
    it is farther.
    """
    gap = np.empty(3)
    reach = 0.0
    for x in range(3):
        gap[x] = centre[b, x] - centre[a, x]
        reach += gap[x] ** 2
    for k in range(n):
        p, q = offset[a] + k, offset[b] + k
        advance = 0.0
        length = 0.0
        for x in range(3):
            step = points[q, x] - points[p, x]
            advance += step * gap[x]
            length += step * step
        if advance < LEAST_ADVANCE * reach:
            return False
        for r in range(a + 1, b):
            m = offset[r] + k
            share = 0.0
            for x in range(3):
                share += (points[m, x] - points[p, x]) * (points[q, x] - points[p, x])
            share /= length
            away = 0.0
            outwards = 0.0
            for x in range(3):
                lack = points[m, x] - points[p, x] - share * (points[q, x] - points[p, x])
                away += lack * lack
                outwards += lack * (points[m, x] - centre[r, x])
            limit = inside_mm if outwards > 0.0 else outside_mm
            if away > limit * limit:
                return False
    return True


@njit(cache=True, nogil=True)
def choose_rings(
    first: int, last: int, low: Ints, high: Ints, sides: Ints, offset: Ints, points: Floats, centre: Floats,
    at_mm: Floats, longest_mm: Floats, inside_mm: float, outside_mm: float, chosen: NDArray[np.uint8],
) -> None:  # fmt: skip
    """Sets `chosen (k,)` to 1 for the rings that stretches first..last - 1 need, from ring `low` to ring `high`.

    As few as the tolerances of `ring_follows` and `longest_mm (s,)` between two rings allow; to 2 for the first ring of a stretch whose
    strips would fold.
    """
    for s in range(first, last):
        a = low[s]
        chosen[a] = 1
        while a < high[s]:
            b = a + 1
            n = sides[a]
            if not ring_follows(a, b, n, offset, points, centre, inside_mm, outside_mm):
                chosen[low[s]] = 2
                break
            while (
                b < high[s]
                and at_mm[b + 1] - at_mm[a] <= longest_mm[s]
                and ring_follows(a, b + 1, n, offset, points, centre, inside_mm, outside_mm)
            ):
                b += 1
            chosen[b] = 1
            a = b
