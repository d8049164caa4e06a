"""Junctions: two that are one are merged, and each is moved to where its channels aim."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats
from morph.layout.web import Run, Web, arc_mm, is_parallel, line_through, measure_length_mm, merge_along, moved_along

AIM_SPREAD = 0.2
"""Lines that miss their common point by more than this many of their half-widths (rms) do not aim at one point."""
AIM_REACH = 1.6
"""A junction moves at most this many radii: where channels meet at a slant, thinning joins them late."""
AIM_SHARE = 0.4
"""... and at most this share of the shortest run that meets it."""
LINE_STRETCH, BENT_STRETCH = 1.8, 3.5
"""A line is fitted to this many half-widths of free samples, a parabola to that many."""
BENT_GAIN = 4.0
"""A parabola counts when it leaves this many times less than the line."""
MOST_TURN = 0.35
"""A parabola that turns more than this (slope) between its last sample and the joint tells nothing there."""
MERGE_SPREAD = 0.4
"""The same for the channels of two junctions that may be one."""


@dataclass(frozen=True, slots=True, eq=False)
class Line:
    """The line along which a run reaches its joint: a place on it, its direction, the run's half-width."""

    place_mm: Floats
    direction: Floats
    half_mm: float


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
            if other != key and (line := _line_near(leaving)) is not None
        ]
        n_others = web.degree(run.start) + web.degree(run.end) - 2
        aim = _aim(lines) if len(lines) == n_others else None
        middle = 0.5 * (web.joints[run.start].place_mm + web.joints[run.end].place_mm)
        if aim is not None and aim[1] < MERGE_SPREAD and np.hypot(*(aim[0] - middle)) < radius:
            merge_along(web, key)
            n_merged += 1
    return n_merged


def place_junctions(web: Web) -> None:
    """Moves each junction to the point nearest, in the least-squares sense, to the lines its free runs make near it.

    A line is fitted to the free samples within two half-widths of the zone's end. The
    junction stays where it is when the lines are near parallel, miss each other by more than a fifth
    of their half-widths, or meet further off than 1.6 radii.
    """
    for key in sorted(web.joints):
        if web.degree(key) < 3:
            continue
        joint = web.joints[key]
        lines = [line for _, run in web.leaving(key) if (line := _line_near(run)) is not None]
        aim = _aim(lines)
        if aim is None:
            continue
        place, spread = aim
        reach = min(AIM_REACH * joint.radius_mm, AIM_SHARE * min(run.length_mm for _, run in web.leaving(key)))
        if np.hypot(*(place - joint.place_mm)) < reach and spread < AIM_SPREAD:
            move_joint(web, key, place)
            _pass_over(web, key)


def _pass_over(web: Web, key: int) -> None:
    """Drops the samples of each run that the moved joint `key` has passed; those in its disc are free no more."""
    place, radius_mm = web.joints[key].place_mm, web.joints[key].radius_mm
    for run_key in web.at[key]:
        run = web.runs[run_key]
        if run.start == run.end or run.free is None:
            continue
        away = np.hypot(*(run.place_mm - place).T)
        run.free = run.free & (away >= radius_mm)
        n = len(away)
        ahead = away if run.start == key else away[::-1]
        passed = int(np.argmin(np.where(np.arange(n) < n // 2, ahead, np.inf)[1:])) + 1
        passed = min(passed, n - 5)
        if passed < 2 or ahead[passed] > radius_mm:
            continue
        keep = np.concatenate([[0], np.arange(passed + 1, n)])
        if run.end == key:
            keep = (n - 1 - keep)[::-1]
        run.place_mm, run.half_mm, run.free = run.place_mm[keep], run.half_mm[keep], run.free[keep]
        run.length_mm = measure_length_mm(run.place_mm)


def _aim(lines: list[Line]) -> tuple[Floats, float] | None:
    """Returns the point nearest to all lines and its rms distance from them in their half-widths.

    A line counts with the inverse square of its channel's half-width: a narrow channel tells its
    junction more exactly than a wide one. None when the lines are near parallel.
    """
    if not lines:
        return None
    finest = min(line.half_mm for line in lines)
    matrix, vector, square = np.zeros((2, 2)), np.zeros(2), 0.0
    for line in lines:
        weight = (finest / line.half_mm) ** 2
        across = weight * (np.eye(2) - np.outer(line.direction, line.direction))
        matrix += across
        vector += across @ line.place_mm
        square += float(line.place_mm @ across @ line.place_mm)
    (a, b), (_, d) = matrix
    smallest = 0.5 * (a + d) - float(np.hypot(0.5 * (a - d), b))
    if smallest < 0.15 * (finest / max(line.half_mm for line in lines)) ** 2:
        return None
    place = np.array([d * vector[0] - b * vector[1], a * vector[1] - b * vector[0]]) / (a * d - b * b)
    rest = square - 2.0 * float(vector @ place) + float(place @ matrix @ place)
    return place, float(np.sqrt(max(0.0, rest) / len(lines))) / finest


def _line_near(run: Run) -> Line | None:
    """Returns a point on, and the direction of, the line along which `run` reaches its first joint.

    A straight line is fitted to the first free samples. Where a parabola over a longer stretch fits much
    better, the channel is bent there, and its tangent abreast of the joint is the line.
    """
    assert run.free is not None
    arc = arc_mm(run.place_mm)
    free = np.flatnonzero(run.free)
    if not len(free):
        return None
    usable = run.free & (arc >= arc[free[0]]) & (arc < 0.6 * arc[-1])
    half_mm = float(np.median(run.half_mm[usable])) if usable.any() else 0.0
    chosen = run.place_mm[usable & (arc <= arc[free[0]] + LINE_STRETCH * half_mm)]
    if len(chosen) < 3:
        return None
    bent = run.place_mm[usable & (arc <= arc[free[0]] + BENT_STRETCH * half_mm)]
    found = _bent_line(bent, run.place_mm[0]) if len(bent) >= 6 else None
    place, direction = found or line_through(chosen)
    return Line(place, direction, half_mm)


def _bent_line(place_mm: Floats, joint_mm: Floats) -> tuple[Floats, Floats] | None:
    """Returns point and direction of the parabola through `place_mm` abreast of the joint; None where it bends not."""
    middle, direction = line_through(place_mm)
    across = np.array([-direction[1], direction[0]])
    u, v = (place_mm - middle) @ direction, (place_mm - middle) @ across
    moments = [float((u**k).mean()) for k in range(5)]
    normal = np.array([[moments[i + j] for j in range(3)] for i in range(3)])
    factor = np.linalg.solve(normal, np.array([float((v * u**k).mean()) for k in range(3)]))
    rest = v - factor[0] - factor[1] * u - factor[2] * u**2
    if float(np.sqrt((v**2).mean())) < BENT_GAIN * float(np.sqrt((rest**2).mean())) + 1e-9:
        return None
    at = float((joint_mm - middle) @ direction)
    point = middle + at * direction + (factor[0] + factor[1] * at + factor[2] * at**2) * across
    slope = factor[1] + 2.0 * factor[2] * at
    nearest = float(np.clip(at, u.min(), u.max()))
    if abs(2.0 * factor[2] * (at - nearest)) > MOST_TURN or abs(slope) > 1.0:
        return None
    return point, (direction + slope * across) / float(np.hypot(1.0, slope))


def move_joint(web: Web, key: int, place_mm: Floats) -> None:
    """Moves the joint `key` and the run ends on it to `place_mm`."""
    web.joints[key].place_mm = place_mm
    for run_key in web.at[key]:
        run = web.runs[run_key]
        if run.start == key:
            run.place_mm[0] = place_mm
        if run.end == key:
            run.place_mm[-1] = moved_along(place_mm, run.shift_mm)
        run.length_mm = measure_length_mm(run.place_mm)
