"""One piece of channel: balls with their roofs swept along a straight line.

A piece of centreline between two samples is the union of all balls whose centre runs along the piece while
the radius runs linearly. A ball may carry a roof about the direction up: a cone tangent to it (roofed), or an
arc of radius k r turned about up (arched). With v the way from the centre, z its part along up, rho the rest,
the ball is the set f(v) <= 0 of a convex function whose gradient has length 1:

    round    |v| - r
    roofed   |v| - r outside the cone of half-angle b about up, inside it sin(b) rho + cos(b) z - r
    arched   |v| - r for z <= 0, above it hypot(rho + (k - 1) r, z) - k r

The distance of a piece is the least f over its balls. f is convex along the piece too and its slope has no jump
where its parts meet, so the nearest roofed ball sees the point in its cone exactly if the nearest round one does: closed
forms for round and roofed, safeguarded root finding for arched. Outside a ridge it is less than the true
distance, never more.

`pieces (n, 17)` = start x y z, unit tangent x y z, length, start radius, taper t = dr/dl, t / sqrt(1 - t^2),
up x y z, cos b (1 for round), sin b, k (0 unless arched), share of roof 0..1.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from morph.core.arrays import Floats


@njit(cache=True, nogil=True, error_model="numpy")
def piece_nearest(px: float, py: float, pz: float, pieces: Floats, i: int) -> tuple[float, float]:
    """Returns the signed distance in mm of a point from piece i, negative inside, and where its nearest ball sits.

    On a round piece the nearest ball sits at u = x + y t / sqrt(1 - t^2), x the axial and y the radial coordinate
    of the point, t the taper, clamped to the piece. In the roof's cone, with H the level part of the tangent and xh, yh
    the level coordinates along and across it: u = (xh + yh q / sqrt(1 - q^2)) / H, q = (cos(b) tz + t) / (sin(b) H).
    """
    vx = px - pieces[i, 0]
    vy = py - pieces[i, 1]
    vz = pz - pieces[i, 2]
    x = vx * pieces[i, 3] + vy * pieces[i, 4] + vz * pieces[i, 5]
    v2 = vx * vx + vy * vy + vz * vz
    y2 = max(v2 - x * x, 0.0)
    u = min(max(x + np.sqrt(y2) * pieces[i, 9], 0.0), pieces[i, 6])
    along = x - u
    size = np.sqrt(along * along + y2)
    cosine = pieces[i, 13]
    if cosine == 1.0:
        return size - pieces[i, 7] - pieces[i, 8] * u, u
    height = vx * pieces[i, 10] + vy * pieces[i, 11] + vz * pieces[i, 12]
    climb = pieces[i, 3] * pieces[i, 10] + pieces[i, 4] * pieces[i, 11] + pieces[i, 5] * pieces[i, 12]
    above = height - u * climb
    arched = pieces[i, 15] > 0.0
    if above <= (0.0 if arched else size * cosine):
        return size - pieces[i, 7] - pieces[i, 8] * u, u
    level = np.sqrt(max(1.0 - climb * climb, 0.0))
    xh = (x - height * climb) / max(level, 1e-12)
    yh2 = max(v2 - height * height - xh * xh, 0.0)
    if arched:
        return arched_nearest(x, y2, height, climb, level, xh, yh2, pieces, i)
    pull = cosine * climb + pieces[i, 8]
    if abs(pull) < 0.9999 * pieces[i, 14] * level:
        q = pull / (pieces[i, 14] * level)
        u = min(max((xh + np.sqrt(yh2) * q / np.sqrt(1.0 - q * q)) / level, 0.0), pieces[i, 6])
    else:
        u = pieces[i, 6] if pull > 0.0 else 0.0
    above = height - u * climb
    along = x - u
    rho = np.sqrt(max(along * along + y2 - above * above, 0.0))
    return pieces[i, 14] * rho + cosine * above - pieces[i, 7] - pieces[i, 8] * u, u


@njit(cache=True, nogil=True, error_model="numpy")
def arched_slope(
    u: float, x: float, y2: float, height: float, climb: float, level: float, xh: float, yh2: float,
    pieces: Floats, i: int,
) -> tuple[float, float]:  # fmt: skip
    """Returns f of the arched ball at u along piece i, and its slope there; the point as in `piece_nearest`."""
    above = height - u * climb
    along = x - u
    radius = pieces[i, 7] + pieces[i, 8] * u
    if above <= 0.0:
        size = np.sqrt(along * along + y2)
        return size - radius, -along / max(size, 1e-12) - pieces[i, 8]
    k = pieces[i, 15]
    side = xh - u * level
    rho = np.sqrt(side * side + yh2)
    wide = rho + (k - 1.0) * radius
    size = np.sqrt(wide * wide + above * above)
    change = wide * ((k - 1.0) * pieces[i, 8] - level * side / max(rho, 1e-12)) - above * climb
    return size - k * radius, change / size - k * pieces[i, 8]


@njit(cache=True, nogil=True, error_model="numpy")
def arched_nearest(
    x: float, y2: float, height: float, climb: float, level: float, xh: float, yh2: float, pieces: Floats, i: int
) -> tuple[float, float]:
    """Returns distance and place of the nearest arched ball: the root of a rising slope, bracketed.

    False position with halving (Illinois), stopped at 1e-6 mm: the distance, flat there, is then good to 1e-9 mm.
    """
    low = 0.0
    high = pieces[i, 6]
    f_low, s_low = arched_slope(low, x, y2, height, climb, level, xh, yh2, pieces, i)
    if s_low >= 0.0 or high == 0.0:
        return f_low, low
    f_high, s_high = arched_slope(high, x, y2, height, climb, level, xh, yh2, pieces, i)
    if s_high <= 0.0:
        return f_high, high
    f = f_low
    u = low
    for _ in range(60):
        u = (low * s_high - high * s_low) / (s_high - s_low)
        f, slope = arched_slope(u, x, y2, height, climb, level, xh, yh2, pieces, i)
        if abs(slope) < 1e-9 or high - low < 1e-6:
            break
        if slope < 0.0:
            low = u
            s_low = slope
            s_high *= 0.5
        else:
            high = u
            s_high = slope
            s_low *= 0.5
    return f, u


@njit(cache=True, nogil=True, error_model="numpy")
def piece_distance(px: float, py: float, pz: float, pieces: Floats, i: int) -> float:
    """Returns the signed distance in mm of a point from piece i, negative inside."""
    distance, _ = piece_nearest(px, py, pz, pieces, i)
    return distance


@njit(cache=True, nogil=True, error_model="numpy")
def piece_direction(px: float, py: float, pz: float, pieces: Floats, i: int) -> tuple[float, float, float]:
    """Returns the unit vector from the centre of piece i's nearest ball to the point; steady across a ridge."""
    _, u = piece_nearest(px, py, pz, pieces, i)
    vx = px - pieces[i, 0] - u * pieces[i, 3]
    vy = py - pieces[i, 1] - u * pieces[i, 4]
    vz = pz - pieces[i, 2] - u * pieces[i, 5]
    scale = 1.0 / (np.sqrt(vx * vx + vy * vy + vz * vz) + 1e-12)
    return vx * scale, vy * scale, vz * scale


@njit(cache=True, nogil=True, error_model="numpy")
def piece_gradient(px: float, py: float, pz: float, pieces: Floats, i: int) -> tuple[float, float, float, float]:
    """Returns the gradient of piece i's distance, and the curvature (1/mm) its wall has across: 0 on a roof."""
    _, x, y, z, curvature = piece_wall(px, py, pz, pieces, i)
    return x, y, z, curvature


@njit(cache=True, nogil=True, error_model="numpy")
def piece_wall(px: float, py: float, pz: float, pieces: Floats, i: int) -> tuple[float, float, float, float, float]:
    """Returns what `piece_distance` and `piece_gradient` return, for the price of one."""
    distance, u = piece_nearest(px, py, pz, pieces, i)
    vx = px - pieces[i, 0] - u * pieces[i, 3]
    vy = py - pieces[i, 1] - u * pieces[i, 4]
    vz = pz - pieces[i, 2] - u * pieces[i, 5]
    size = np.sqrt(vx * vx + vy * vy + vz * vz) + 1e-12
    radius = pieces[i, 7] + pieces[i, 8] * u
    cosine = pieces[i, 13]
    if cosine == 1.0:
        return distance, vx / size, vy / size, vz / size, 1.0 / radius
    k = pieces[i, 15]
    above = vx * pieces[i, 10] + vy * pieces[i, 11] + vz * pieces[i, 12]
    if above <= (0.0 if k > 0.0 else size * cosine):
        return distance, vx / size, vy / size, vz / size, 1.0 / radius
    vx -= above * pieces[i, 10]
    vy -= above * pieces[i, 11]
    vz -= above * pieces[i, 12]
    rho = np.sqrt(vx * vx + vy * vy + vz * vz) + 1e-12
    outward = pieces[i, 14]
    upward = cosine
    curvature = 0.0
    if k > 0.0:
        outward = rho + (k - 1.0) * radius
        upward = above
        size = np.sqrt(outward * outward + upward * upward)
        outward /= size
        upward /= size
        curvature = 1.0 / (k * radius)
    outward /= rho
    return (
        distance,
        vx * outward + pieces[i, 10] * upward,
        vy * outward + pieces[i, 11] * upward,
        vz * outward + pieces[i, 12] * upward,
        curvature,
    )
