"""Suggested ways on from dead ends through grey density; offered, never built by themselves.

From each dead end the cheapest way through the density (cost 1 / (density above background)) is
sought to another part of the web within four channel widths, ahead of the tip. It is **likely** a
blocked channel when the way is direct, its density stands clear of both flanks and of the background.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.layout.density import Density
from morph.layout.level import Grid, Picture
from morph.layout.web import Run, Web, arc_mm, measure_length_mm, moved_along

REACH_WIDTHS = 4.0
AHEAD_COSINE = 0.5
NEAR_WIDTHS = 2.0
"""A way on lies within 60 degrees of the tip's heading, within this many widths of it also sideways."""
LOWEST_DENSITY = 0.22
ABOVE_BACKGROUND = 0.10
ABOVE_FLANKS = 0.12
FLANK_WIDTHS = (1.0, 1.3, 1.6)
GREY_REACH = 1.5
"""The width of a grey way is looked for within this many channel widths to both sides."""
DETOUR = 1.35
NEAR_END = 1.2
BLIND_END = 2.5
"""A way that lands within this many half-widths of a junction, or of another dead end, lands on it."""


@dataclass(frozen=True, slots=True, eq=False)
class Suggestion:
    """A way on from joint `tip` onto a joint or a run of the web, in sheet mm; `id` when it has one already."""

    tip: int
    onto_joint: int | None
    onto_run: int
    path_mm: Floats
    gap_mm: float
    lowest_density: float
    likely: bool
    width_mm: float = math.inf
    grey: bool = False
    grey_mm: float = 0.0
    middle_mm: tuple[float, float] = (0.0, 0.0)
    id: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class _Field:
    """Smoothed density on the image's own grid, its background, the mean channel width, and the level."""

    value: Floats
    grid: Grid
    background: float
    width_mm: float
    level: float

    def at(self, sheet_mm: Floats) -> Floats:
        """Returns the density (k,) at places (k, 2), linear between samples."""
        from scipy.ndimage import map_coordinates

        return np.asarray(
            map_coordinates(self.value, self.grid.row_column(sheet_mm).T, order=1, mode="nearest"), dtype=np.float64
        )


def suggest_bridges(
    web: Web, field: Floats, density: Density, picture: Picture, turn_mm: float | None = None
) -> list[Suggestion]:
    """Returns at most one way on from each dead end of `web` without a port; a pair that meets is told once.

    Args:
        web: cleaned and centred, ports attached.
        field: smoothed density on the image's own grid.
        density: for the grid's places.
        picture: for the mean channel width.
        turn_mm: width after which the sheet repeats, None on an open sheet; then `field` is of one turn.
    """
    from scipy.spatial import cKDTree

    tips = [
        key
        for key, joint in sorted(web.joints.items())
        if web.degree(key) == 1 and joint.port is None and joint.mouth < 0
    ]
    if not tips:
        return []
    grid, background = Grid(density.first_mm, density.pitch_mm), float(np.quantile(field, 0.2))
    reach_mm = REACH_WIDTHS * picture.width_mm
    if turn_mm is not None:
        field, grid = _laid_around(field, grid, reach_mm)
    ground = _Field(field, grid, background, picture.width_mm, picture.level)
    place, owner, sample = _list_samples(web, turn_mm, reach_mm)
    tree = cKDTree(place)
    found: dict[int, Suggestion] = {}
    for tip in tips:
        near = np.sort(np.array(tree.query_ball_point(web.joints[tip].place_mm, REACH_WIDTHS * ground.width_mm)))
        near = near.astype(np.int64)
        suggestion = _way_on(web, tip, ground, place[near], owner[near], sample[near])
        if suggestion is None:
            continue
        back = found.get(suggestion.onto_joint) if suggestion.onto_joint is not None else None
        if back is None or back.onto_joint != tip:
            found[tip] = suggestion
        elif suggestion.likely and not back.likely:
            del found[back.tip]
            found[tip] = suggestion
    return list(found.values())


def _laid_around(field: Floats, grid: Grid, reach_mm: float) -> tuple[Floats, Grid]:
    """Returns a field of one turn repeated beyond both edges, and its grid."""
    n = math.ceil(reach_mm / grid.pitch_mm[0]) + 3
    first_mm = (grid.first_mm[0] - n * grid.pitch_mm[0], grid.first_mm[1])
    return np.pad(field, ((0, 0), (n, n)), mode="wrap"), Grid(first_mm, grid.pitch_mm)


def _list_samples(web: Web, turn_mm: float | None, reach_mm: float) -> tuple[Floats, Ints, Ints]:
    """Returns place (k, 2), run and number within it of every sample; on a repeating sheet every copy within reach."""
    places, owners, samples = [], [], []
    for key in sorted(web.runs):
        own = web.runs[key].place_mm
        for turn in (0,) if turn_mm is None else range(-3, 4):
            place, index = own, np.arange(len(own))
            if turn_mm is not None:
                place = moved_along(own, turn * turn_mm)
                index = np.flatnonzero((place[:, 0] >= -reach_mm) & (place[:, 0] <= turn_mm + reach_mm))
            places.append(place[index])
            owners.append(np.full(len(index), key))
            samples.append(index)
    return np.concatenate(places), np.concatenate(owners), np.concatenate(samples)


def _way_on(web: Web, tip: int, ground: _Field, place: Floats, owner: Ints, sample: Ints) -> Suggestion | None:
    run_key = web.at[tip][0]
    run = web.runs[run_key] if web.runs[run_key].start == tip else web.runs[run_key].reversed()
    start, heading = _heading(run, ground.width_mm)
    away = place - start
    distance = np.hypot(*away.T)
    with np.errstate(invalid="ignore", divide="ignore"):
        cosine = (away @ heading) / distance
    ahead = (cosine >= AHEAD_COSINE) | ((cosine >= 0.0) & (distance <= NEAR_WIDTHS * ground.width_mm))
    allowed = ahead & (distance > 1e-6) & ~_too_near_on_own_run(run, run_key, web, owner, sample, distance, ground)
    if not allowed.any():
        return None
    cost_of, path_to = _cheapest_ways(ground, start)
    candidate = np.flatnonzero(allowed)
    cost = cost_of(place[candidate])
    best = int(candidate[int(np.argmin(cost))])
    if not np.isfinite(cost.min()):
        return None
    path = path_to(place[best])
    meets = _first_meeting(ground, path)
    if meets is None:
        return None
    best = int(candidate[int(np.argmin(np.hypot(*(place[candidate] - path[meets]).T)))])
    if distance[best] < 1e-6 or np.hypot(*(place[best] - path[meets])) > 1.5 * ground.width_mm:
        return None
    path = np.vstack([start, path[1:meets], place[best]])
    if len(path) == 2:
        path = np.vstack([path[0], path.mean(axis=0), path[-1]])
    density_along = ground.at(path)
    lowest = float(density_along.min())
    direct = measure_length_mm(path) <= DETOUR * float(distance[best]) + 2.0 * ground.grid.pixel_mm
    likely = (
        direct
        and lowest > LOWEST_DENSITY
        and lowest - ground.background > ABOVE_BACKGROUND
        and _flank_contrast(ground, path) > ABOVE_FLANKS
    )
    onto_run = int(owner[best])
    onto_joint = _end_near(web, onto_run, int(sample[best]), tip)
    width_mm, grey = _grey_width_mm(ground, path), lowest - ground.background > ABOVE_BACKGROUND
    figures = (measure_length_mm(path), lowest, likely, width_mm, grey, *_grey_stretch(ground, path))
    return Suggestion(tip, onto_joint, onto_run, path, *figures)


def _heading(run: Run, width_mm: float) -> tuple[Floats, Floats]:
    arc = arc_mm(run.place_mm)
    inner = run.place_mm[min(len(arc) - 1, max(3, int(np.searchsorted(arc, 1.5 * width_mm))))]
    outward = run.place_mm[0] - inner
    return run.place_mm[0], outward / max(float(np.hypot(*outward)), 1e-12)


def _too_near_on_own_run(
    run: Run, run_key: int, web: Web, owner: Ints, sample: Ints, distance: Floats, ground: _Field
) -> Bools:
    """Returns which samples lie on the tip's own run without a real way round between them and the tip."""
    arc = arc_mm(run.place_mm)
    index = sample
    if web.runs[run_key].start != run.start:
        index = len(arc) - 1 - sample
    own = owner == run_key
    along = arc[np.where(own, index, 0)]
    return np.asarray(own & (along < 3.0 * distance + 2.0 * ground.width_mm), dtype=np.bool_)


def _cheapest_ways(ground: _Field, start: Floats) -> tuple[Callable[[Floats], Floats], Callable[[Floats], Floats]]:
    """Returns two functions: the cost of the cheapest way to places (k, 2), and the way itself to one place."""
    from skimage.graph import MCP_Geometric

    row, column = ground.grid.row_column(start[None])[0]
    reach = math.ceil(REACH_WIDTHS * ground.width_mm / ground.grid.pixel_mm) + 1
    top, left = max(0, round(row) - reach), max(0, round(column) - reach)
    window = ground.value[top : round(row) + reach + 1, left : round(column) + reach + 1]
    search = MCP_Geometric(1.0 / (np.clip(window - ground.background, 0.0, 1.0) + 0.03))

    def pixel(sheet_mm: Floats) -> Ints:
        index = np.rint(ground.grid.row_column(sheet_mm)).astype(np.int64) - np.array([top, left])
        return np.asarray(np.clip(index, 0, np.array(window.shape) - 1), dtype=np.int64)

    total, _ = search.find_costs([tuple(pixel(start[None])[0])])

    def cost_of(sheet_mm: Floats) -> Floats:
        index = pixel(sheet_mm)
        return np.asarray(total[index[:, 0], index[:, 1]])

    def path_to(sheet_mm: Floats) -> Floats:
        steps = np.array(search.traceback(tuple(pixel(sheet_mm[None])[0])), dtype=np.float64).reshape(-1, 2)
        if len(steps) < 2:
            steps = np.vstack([steps, steps])
        return ground.grid.sheet_mm(steps + np.array([top, left]))

    return cost_of, path_to


def _first_meeting(ground: _Field, path_mm: Floats) -> int | None:
    """Returns the first point of the way that is in coolant again after the way has left it, or None."""
    inside = ground.at(path_mm) > ground.level
    left = np.flatnonzero(~inside)
    if not len(left):
        return None
    again = np.flatnonzero(inside[left[0] :])
    return int(left[0] + again[0]) if len(again) else len(path_mm) - 1


def _flank_contrast(ground: _Field, path_mm: Floats) -> float:
    """Returns how far the mean density of the way's middle half stands above its denser flank.

    A flank's density is the median over lines beside the way, so that a speck beside it does not count as a cloud.
    """
    n = len(path_mm)
    middle = slice(n // 4, max(n // 4 + 1, 3 * n // 4))
    normal = _normal(path_mm) * ground.width_mm
    here = float(ground.at(path_mm[middle]).mean())
    flanks = [
        float(np.median(np.concatenate([ground.at(path_mm + sign * widths * normal) for widths in FLANK_WIDTHS])))
        for sign in (1.0, -1.0)
    ]
    return here - max(flanks)


def _grey_stretch(ground: _Field, path_mm: Floats) -> tuple[float, tuple[float, float]]:
    """Returns the length of the way at or below the level, and the middle of that stretch."""
    arc = arc_mm(path_mm)
    at = np.linspace(0.0, arc[-1], max(2, math.ceil(8.0 * float(arc[-1]) / ground.grid.pixel_mm)))
    place = np.column_stack([np.interp(at, arc, path_mm[:, axis]) for axis in (0, 1)])
    below = np.flatnonzero(ground.at(place) <= ground.level)
    first, last = (int(below[0]), int(below[-1])) if len(below) else (0, len(at) - 1)
    middle = place[(first + last) // 2]
    return float(at[last] - at[first]), (float(middle[0]), float(middle[1]))


def _normal(path_mm: Floats) -> Floats:
    """Returns (k, 2) unit normals of the way."""
    tangent = np.gradient(path_mm, axis=0)
    tangent /= np.maximum(np.hypot(*tangent.T), 1e-12)[:, None]
    return np.column_stack([-tangent[:, 1], tangent[:, 0]])


def _grey_width_mm(ground: _Field, path_mm: Floats) -> float:
    """Returns the width of the way's middle half at half its height above the background (median), at most 3 widths.

    A neck keeps its width there however pale it is; a way without a ridge of its own reads 3 widths.
    """
    arc = arc_mm(path_mm)
    at = np.linspace(0.25, 0.75, 9) * arc[-1]
    middle = np.column_stack([np.interp(at, arc, path_mm[:, axis]) for axis in (0, 1)])
    way = np.column_stack([np.interp(at, arc, _normal(path_mm)[:, axis]) for axis in (0, 1)])
    n = math.ceil(8.0 * GREY_REACH * ground.width_mm / ground.grid.pixel_mm)
    across = np.arange(-n, n + 1) * 0.125 * ground.grid.pixel_mm
    near = np.abs(across) <= 0.5 * ground.width_mm
    widths = []
    for place, normal in zip(middle, way, strict=True):
        profile = ground.at(place + across[:, None] * normal)
        ridge = int(np.argmax(np.where(near, profile, -1.0)))
        below = np.flatnonzero(profile <= 0.5 * (profile[ridge] + ground.background))
        left = below[below < ridge].max(initial=0)
        right = below[below > ridge].min(initial=len(profile) - 1)
        widths.append(float(across[right] - across[left]))
    return float(np.median(widths))


def _end_near(web: Web, run_key: int, sample: int, tip: int) -> int | None:
    """Returns the end joint of the run that lies near the sample, if any but the tip."""
    run = web.runs[run_key]
    arc = arc_mm(run.place_mm)
    for joint, away in ((run.start, float(arc[sample])), (run.end, float(arc[-1] - arc[sample]))):
        near = BLIND_END if web.degree(joint) == 1 else NEAR_END
        if joint != tip and away < near * web.joints[joint].radius_mm:
            return joint
    return None
