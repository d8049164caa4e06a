"""Centring: every sample is moved midway between its two walls, junctions to where their channels aim.

A point is centred when probes half a half-width to its left and right are equally far from the
walls; for a channel of constant width this is exact on straight and bent stretches alike. Near a
junction one of the two walls belongs to another channel. A sample is **free** when both nearest
walls lie abreast of it; samples between a junction and the first free stretch are not centred on,
weigh nothing in the fit, and take the bore of that stretch, so the junction disc never widens a bore.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.layout.walls import Walls
from morph.layout.web import Joint, Run, Web, arc_mm, is_parallel, measure_length_mm, merge_along

ROUNDS = 3
PROBE_SHARE = 0.5
WIDTH_PROBE_SHARE = 0.7
ABREAST_SHARE = 0.5
"""A wall further ahead or behind than this many half-widths is not the sample's own."""
FREE_STRETCH = 0.4
"""Free samples must last this many half-widths before the junction is taken to be left behind."""
AIM_SPREAD = 0.2
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
        own &= ahead <= ABREAST_SHARE * half + 0.5 * step_mm
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

    Over a zone the half-width of that stretch is held.
    """
    assert run.free is not None
    arc = arc_mm(run.place_mm)
    free = run.free
    zone = np.zeros(len(arc), dtype=bool)
    for joint, away in ((run.start, arc), (run.end, arc[-1] - arc)):
        if web.degree(joint) < 3:
            continue
        radius = web.joints[joint].radius_mm
        limit = min(LONGEST_ZONE * radius, 0.45 * arc[-1])
        far = _zone_end(away, free & (away >= min(radius, limit)), FREE_STRETCH * radius, limit)
        zone |= away < far
    if zone.all():
        run.half_mm = np.full(len(arc), float(run.half_mm.min()))
    elif zone.any():
        inside = np.flatnonzero(~zone)
        half = run.half_mm.copy()
        stretch = FREE_STRETCH * float(np.median(run.half_mm[inside]))
        for end, at in enumerate((inside[0], inside[-1])):
            around = inside[np.abs(arc[inside] - arc[at]) <= stretch]
            side = zone & (np.arange(len(arc)) < inside[0]) if end == 0 else zone & (np.arange(len(arc)) > inside[-1])
            half[side] = float(np.median(run.half_mm[around]))
        run.half_mm = half
    run.free = ~zone


def _zone_end(away: Floats, free: Bools, stretch: float, limit: float) -> float:
    """Returns the distance from a junction at which `stretch` of free samples begins, at most `limit`."""
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
            return start
    return limit if start is None else min(start, limit)


def merge_aimed(web: Web, ratio: float = 2.6) -> int:
    """Makes one junction of two whose other channels all aim at one point between them.

    Where channels cross at a slant, thinning finds two junctions joined by a short run. They are one
    when the run is shorter than `ratio` half-widths and the lines of the other runs meet.

    Returns:
        How many runs were taken up.
    """
    n_merged = 0
    for key in sorted(web.runs, key=lambda k: (web.runs[k].length_mm, k)):
        run = web.runs.get(key)
        if run is None or run.start == run.end or min(web.degree(run.start), web.degree(run.end)) < 3:
            continue
        radius = max(web.joints[run.start].radius_mm, web.joints[run.end].radius_mm)
        if run.length_mm >= ratio * radius or is_parallel(web, run):
            continue
        lines = [
            line
            for joint in (run.start, run.end)
            for other, leaving in web.leaving(joint)
            if other != key and (line := _line_near(leaving, radius)) is not None
        ]
        n_others = web.degree(run.start) + web.degree(run.end) - 2
        aim = _aim(lines) if len(lines) == n_others else None
        middle = 0.5 * (web.joints[run.start].place_mm + web.joints[run.end].place_mm)
        if aim is not None and aim[1] < AIM_SPREAD * radius and np.hypot(*(aim[0] - middle)) < radius:
            merge_along(web, key)
            n_merged += 1
    return n_merged


def place_junctions(web: Web) -> None:
    """Moves each junction to the point nearest, in the least-squares sense, to the lines its free runs make near it.

    A line is fitted to the free samples within one and a half half-widths of the zone's end. The
    junction stays where it is when the lines are near parallel, miss each other by more than a fifth
    of its radius, or meet further off than its radius.
    """
    for key in sorted(web.joints):
        if web.degree(key) < 3:
            continue
        joint = web.joints[key]
        lines = [line for _, run in web.leaving(key) if (line := _line_near(run, joint.radius_mm)) is not None]
        aim = _aim(lines)
        if aim is None:
            continue
        place, spread = aim
        if np.hypot(*(place - joint.place_mm)) < joint.radius_mm and spread < AIM_SPREAD * joint.radius_mm:
            move_joint(web, key, place)


def _aim(lines: list[tuple[Floats, Floats]]) -> tuple[Floats, float] | None:
    """Returns the point nearest to all lines and its rms distance from them; None when they are near parallel."""
    matrix, vector, square = np.zeros((2, 2)), np.zeros(2), 0.0
    for middle, direction in lines:
        across = np.eye(2) - np.outer(direction, direction)
        matrix += across
        vector += across @ middle
        square += float(middle @ across @ middle)
    (a, b), (_, d) = matrix
    if 0.5 * (a + d) - float(np.hypot(0.5 * (a - d), b)) < 0.15:
        return None
    place = np.array([d * vector[0] - b * vector[1], a * vector[1] - b * vector[0]]) / (a * d - b * b)
    rest = square - 2.0 * float(vector @ place) + float(place @ matrix @ place)
    return place, float(np.sqrt(max(0.0, rest) / len(lines)))


def _line_near(run: Run, radius_mm: float) -> tuple[Floats, Floats] | None:
    """Returns a point on, and the direction of, the line through the first free samples of `run`."""
    assert run.free is not None
    arc = arc_mm(run.place_mm)
    free = np.flatnonzero(run.free)
    if not len(free):
        return None
    begin = arc[free[0]]
    chosen = run.place_mm[run.free & (arc >= begin) & (arc <= begin + 1.5 * radius_mm) & (arc < 0.6 * arc[-1])]
    if len(chosen) < 3:
        return None
    middle = chosen.mean(axis=0)
    (xx, xy), (_, yy) = (chosen - middle).T @ (chosen - middle)
    angle = 0.5 * float(np.arctan2(2.0 * xy, xx - yy))
    return middle, np.array([np.cos(angle), np.sin(angle)])


def move_joint(web: Web, key: int, place_mm: Floats) -> None:
    """Moves the joint `key` and the run ends on it to `place_mm`."""
    web.joints[key].place_mm = place_mm
    for run_key in web.at[key]:
        run = web.runs[run_key]
        if run.start == key:
            run.place_mm[0] = place_mm
        if run.end == key:
            run.place_mm[-1] = place_mm
        run.length_mm = measure_length_mm(run.place_mm)


def cut_at_frame(web: Web, size_mm: tuple[float, float]) -> None:
    """Cuts the runs that leave through a mouth exactly on the frame; what lies outside is dropped."""
    for key in sorted(web.joints):
        joint = web.joints.get(key)
        if joint is None or joint.mouth < 0 or web.degree(key) != 1:
            continue
        run_key = web.at[key][0]
        run = web.runs[run_key]
        if run.end == key:
            run = run.reversed()
        outside = _outside_mm(run.place_mm, size_mm)
        inner = np.flatnonzero(outside <= 0.0)
        if not len(inner) or inner[0] == 0:
            continue
        first = int(inner[0])
        place = _crossing(run.place_mm[first - 1], run.place_mm[first], size_mm)
        half = float(run.half_mm[first])
        web.remove_run(run_key)
        joint.place_mm = place
        free = None if run.free is None else np.concatenate([run.free[first : first + 1], run.free[first:]])
        web.add_run(
            Run(
                key,
                run.end,
                np.vstack([place, run.place_mm[first:]]),
                np.concatenate([[half], run.half_mm[first:]]),
                free,
            )
        )


def _outside_mm(place_mm: Floats, size_mm: tuple[float, float]) -> Floats:
    x, y = place_mm.T
    out = np.maximum(np.maximum(-x, x - size_mm[0]), np.maximum(-y, y - size_mm[1]))
    return np.asarray(out, dtype=np.float64)


def _crossing(outer: Floats, inner: Floats, size_mm: tuple[float, float]) -> Floats:
    """Returns where the segment from `outer` to `inner` enters the sheet, exactly on the frame line."""
    share, axis_hit, line_hit = 0.0, 0, 0.0
    for axis in (0, 1):
        for line in (0.0, size_mm[axis]):
            before, after = outer[axis] - line, inner[axis] - line
            crosses = (before < 0.0 <= after) if line == 0.0 else (before > 0.0 >= after)
            if crosses and before / (before - after) >= share:
                share, axis_hit, line_hit = before / (before - after), axis, line
    place = outer + share * (inner - outer)
    place[axis_hit] = line_hit
    return np.asarray(place, dtype=np.float64)


def trim_tips(web: Web, least_ratio: float = 0.8) -> None:
    """Shortens each dead end to where the channel still has `least_ratio` of its half-width.

    Thinning may run on into the rounded end of a channel, where the half-width falls to nothing.
    """
    for key in sorted(web.joints):
        joint = web.joints[key]
        if web.degree(key) != 1 or joint.mouth >= 0:
            continue
        run_key = web.at[key][0]
        run = web.runs[run_key]
        if run.end == key:
            run = run.reversed()
        arc = arc_mm(run.place_mm)
        near = arc <= min(4.0 * float(run.half_mm.max()), 0.6 * arc[-1])
        wanted = least_ratio * float(np.median(run.half_mm[near]))
        full = np.flatnonzero(run.half_mm >= wanted)
        first = min(int(full[0]) if len(full) else 0, len(arc) - 4)
        half = np.maximum(run.half_mm[first:], np.where(near[first:], wanted, 0.0))
        web.remove_run(run_key)
        web.joints[key] = replace_place(joint, run.place_mm[first])
        free = None if run.free is None else run.free[first:]
        web.add_run(Run(key, run.end, run.place_mm[first:], half, free))


def replace_place(joint: Joint, place_mm: Floats) -> Joint:
    """Returns `joint` at another place."""
    return replace(joint, place_mm=place_mm)
