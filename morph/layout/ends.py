"""Ends of runs: cut exactly on the frame where a channel leaves, trimmed to full width where one ends blind."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from morph.core.arrays import Floats
from morph.layout.web import Run, Web, arc_mm, line_through, measure_length_mm
from morph.settings.job import PortSettings


def find_stubs(
    web: Web, size_mm: tuple[float, float], ports: tuple[PortSettings, ...], pixel_mm: float
) -> frozenset[int]:
    """Returns the mouths without a port near them behind which there is hardly a channel.

    A channel that grazes the frame shows a run there that looks cut; what leads to it within the sheet
    is shorter than its junction is wide.
    """
    stubs = set()
    for key, joint in web.joints.items():
        if joint.mouth < 0 or web.degree(key) != 1:
            continue
        run = web.runs[web.at[key][0]]
        root = run.end if run.start == key else run.start
        inside = _outside_mm(run.place_mm, size_mm) <= 0.0
        length_mm = measure_length_mm(run.place_mm[inside]) if np.count_nonzero(inside) > 1 else 0.0
        radius_mm = web.joints[root].radius_mm
        claimed = any(math.dist(joint.place_mm, port.at_mm) < 4.0 * joint.radius_mm for port in ports)
        if not claimed and web.degree(root) >= 3 and length_mm < 2.0 * radius_mm + 2.0 * pixel_mm:
            stubs.add(joint.mouth)
    return frozenset(stubs)


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
        first = max(0, min(int(full[0]) if len(full) else 0, len(arc) - 4))
        half = np.maximum(run.half_mm[first:], np.where(near[first:], wanted, 0.0))
        free = None if run.free is None else run.free[first:]
        place = _straight_tip(run.place_mm[first:], float(np.median(half[near[first:]])) if near[first:].any() else 0.0)
        web.remove_run(run_key)
        web.joints[key] = replace(joint, place_mm=place[0])
        web.add_run(Run(key, run.end, place, half, free))


def _straight_tip(place_mm: Floats, half_mm: float) -> Floats:
    """Returns the samples with those within one half-width of the tip moved onto the line of the next one and a half.

    There a wall across the end draws samples aside.
    """
    arc = arc_mm(place_mm)
    stretch = (arc >= half_mm) & (arc <= 2.5 * half_mm) & (arc <= 0.8 * arc[-1])
    if np.count_nonzero(stretch) < 3:
        return place_mm
    middle, direction = line_through(place_mm[stretch])
    tip = arc < half_mm
    moved = place_mm.copy()
    moved[tip] = middle + ((place_mm[tip] - middle) @ direction)[:, None] * direction
    return moved
