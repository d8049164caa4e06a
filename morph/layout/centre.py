"""Centring: every sample is moved midway between its two walls, and its half-width is measured.

A point is centred when probes half a half-width to its left and right are equally far from the
walls; for a channel of constant width this is exact on straight and bent stretches alike. Near a
junction one of the two walls belongs to another channel. A sample is **free** when both nearest
walls lie abreast of it; samples between a junction and the first free stretch are not centred on,
weigh nothing in the fit, and take the bore of that stretch, so the junction disc never widens a bore.
"""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.layout.walls import Walls
from morph.layout.web import Run, Web, arc_mm

ROUNDS = 2
PROBE_SHARE = 0.5
WIDTH_PROBE_SHARE = 0.7
ABREAST_SHARE = 0.25
"""A wall further ahead or behind than this many half-widths is not the sample's own."""
FREE_STRETCH = 0.4
"""Once samples have been free for this many half-widths the junction is left behind."""
LONGEST_ZONE = 3.0
"""A junction's zone ends at the latest this many half-widths from it, or at 45 % of the run."""


def resample(web: Web, step_mm: float) -> None:
    """Puts the samples of every run `step_mm` apart (at least five), by linear interpolation."""
    for key in sorted(web.runs):
        run = web.runs[key]
        arc = arc_mm(run.place_mm)
        n = max(5, round(float(arc[-1]) / step_mm) + 1)
        at = np.linspace(0.0, arc[-1], n)
        run.place_mm = np.column_stack([np.interp(at, arc, run.place_mm[:, axis]) for axis in (0, 1)])
        run.half_mm = np.interp(at, arc, run.half_mm)


def smoothed_along(values: Floats, sigma: float) -> Floats:
    """Returns `values (k, ...)` after a Gaussian of `sigma` samples along axis 0, point-mirrored at its ends.

    The point mirror keeps both end values and does not shorten a straight line.
    """
    from scipy.ndimage import gaussian_filter1d

    n = len(values)
    reach = min(n - 1, int(4.0 * sigma) + 1)
    if reach < 1 or sigma <= 0.0:
        return values
    head = 2.0 * values[0] - values[reach:0:-1]
    tail = 2.0 * values[-1] - values[-2 : -reach - 2 : -1]
    long = gaussian_filter1d(np.concatenate([head, values, tail]), sigma, axis=0, mode="nearest")
    return np.asarray(long[reach : reach + n], dtype=np.float64)


def _normals(run: Run, step_mm: float) -> Floats:
    sigma = min(max(2.0, 0.6 * float(np.median(run.half_mm)) / step_mm), len(run.place_mm) / 8.0)
    tangent = np.gradient(smoothed_along(run.place_mm, sigma), axis=0)
    tangent /= np.maximum(np.hypot(*tangent.T), 1e-12)[:, None]
    return np.column_stack([-tangent[:, 1], tangent[:, 0]])


def centre(web: Web, walls: Walls, step_mm: float) -> None:
    """Moves all samples but the joints midway between their walls; sets half-widths and free flags.

    Args:
        web: runs sampled about `step_mm` apart.
        walls: sub-pixel contours.
        step_mm: sample distance.
    """
    keys = sorted(web.runs)
    if not keys:
        return
    bounds = np.cumsum([0] + [len(web.runs[key].place_mm) for key in keys])
    for _ in range(ROUNDS):
        place = np.concatenate([web.runs[key].place_mm for key in keys])
        half = np.concatenate([web.runs[key].half_mm for key in keys])
        normal = np.concatenate([_normals(web.runs[key], step_mm) for key in keys])
        reach = np.maximum(PROBE_SHARE * half, 0.4 * step_mm)
        left = walls.distance_mm(place + reach[:, None] * normal)
        right = walls.distance_mm(place - reach[:, None] * normal)
        limit = 0.5 * half + 0.5 * step_mm
        place = place + np.clip(0.5 * (left - right), -limit, limit)[:, None] * normal
        half = walls.distance_mm(place)
        for key, first, last in zip(keys, bounds[:-1], bounds[1:], strict=True):
            run = web.runs[key]
            ends = run.place_mm[0], run.place_mm[-1]
            run.place_mm, run.half_mm = place[first:last].copy(), half[first:last].copy()
            for end, joint, old in ((0, run.start, ends[0]), (-1, run.end, ends[1])):
                if web.joints[joint].mouth < 0:
                    run.place_mm[end] = old
                else:
                    web.joints[joint].place_mm = run.place_mm[end]
    _measure_widths(web, walls, keys, bounds, step_mm)


def _measure_widths(web: Web, walls: Walls, keys: list[int], bounds: Ints, step_mm: float) -> None:
    """Sets half-widths from the walls abreast of each sample, and which samples are free."""
    place = np.concatenate([web.runs[key].place_mm for key in keys])
    half = np.concatenate([web.runs[key].half_mm for key in keys])
    normal = np.concatenate([_normals(web.runs[key], step_mm) for key in keys])
    tangent = np.column_stack([normal[:, 1], -normal[:, 0]])
    own = np.ones(len(place), dtype=bool)
    for sign in (1.0, -1.0):
        _, wall = walls.nearest(place + sign * WIDTH_PROBE_SHARE * half[:, None] * normal)
        ahead = np.abs(((wall - place) * tangent).sum(axis=1))
        own &= ahead <= ABREAST_SHARE * half + 0.25 * step_mm
    wall_length, wall_away = _walls_abreast(walls, place, half, normal, step_mm)
    for key, first, last in zip(keys, bounds[:-1], bounds[1:], strict=True):
        run = web.runs[key]
        here = slice(first, last)
        run.free = own[here].copy()
        run.half_mm = _mean_half(half[here], own[here], wall_length[here], wall_away[here], step_mm)
        _close_zones(web, run)


def _walls_abreast(walls: Walls, place: Floats, half: Floats, normal: Floats, step_mm: float) -> tuple[Floats, Floats]:
    """Returns per sample the length of wall abreast of it, and that length times its mean distance.

    Each contour segment belongs to the sample nearest to its middle and counts with its length along
    the channel, so that the mean is the channel's area over its length, whatever the walls' roughness:
    the distance to the nearest wall point alone would read rough walls too narrow.
    """
    from scipy.spatial import cKDTree

    start, stop = walls.point_mm, walls.point_mm[walls.following]
    middle = 0.5 * (start + stop)
    _, index = cKDTree(place).query(middle)
    away = middle - place[index]
    across = np.abs((away * normal[index]).sum(axis=1))
    tangent = np.column_stack([normal[index, 1], -normal[index, 0]])
    along = np.abs((away * tangent).sum(axis=1))
    left = np.sign((away * normal[index]).sum(axis=1))
    length = np.abs(((stop - start) * tangent).sum(axis=1)) * np.abs(left)
    length[(along > 1.5 * step_mm) | (across > 1.6 * half[index] + step_mm)] = 0.0
    n = len(place)
    total, moment = np.bincount(index, length, n), np.bincount(index, length * across, n)
    return total.astype(np.float64), moment.astype(np.float64)


def _mean_half(half: Floats, own: Bools, wall_length: Floats, wall_away: Floats, step_mm: float) -> Floats:
    """Returns the half-width (k,) of a run, averaged along half a half-width; where no wall lies abreast, `half`."""
    from scipy.ndimage import gaussian_filter1d

    sigma = max(1.0, 0.5 * float(np.median(half)) / step_mm)
    weight = np.where(own, wall_length, 0.0)
    total = gaussian_filter1d(weight, sigma, mode="constant")
    mean = gaussian_filter1d(np.where(own, wall_away, 0.0), sigma, mode="constant") / np.maximum(total, 1e-12)
    return np.where(own & (total > 0.2 * step_mm), mean, half)


def _close_zones(web: Web, run: Run) -> None:
    """Marks samples from each junction up to the first free stretch as not free, all others as free.

    Over a zone, and half a half-width more, the half-width of the stretch that follows is held.
    """
    assert run.free is not None
    arc = arc_mm(run.place_mm)
    free = run.free
    zone = np.zeros(len(arc), dtype=bool)
    half = run.half_mm.copy()
    for joint, away in ((run.start, arc), (run.end, arc[-1] - arc)):
        if web.degree(joint) < 3:
            continue
        radius = web.joints[joint].radius_mm
        limit = min(LONGEST_ZONE * radius, 0.45 * arc[-1])
        far = _zone_end(away, free & (away >= min(radius, limit)), FREE_STRETCH * radius, limit)
        zone |= away < far
        held = min(far + 0.5 * radius, 0.45 * arc[-1])
        beyond = (away >= held) & (away <= held + FREE_STRETCH * radius)
        half[away < held] = float(np.median(run.half_mm[beyond])) if beyond.any() else float(run.half_mm.min())
    run.half_mm = half
    run.free = ~zone


def _zone_end(away: Floats, free: Bools, stretch: float, limit: float) -> float:
    """Returns the distance from a junction at which `stretch` of free samples has passed, at most `limit`."""
    order = np.argsort(away, kind="stable")
    start: float | None = None
    for index in order:
        distance = float(away[index])
        if distance > limit:
            break
        if not free[index]:
            start = None
        elif start is None:
            start = distance
        elif distance - start >= stretch:
            return distance
    return limit
