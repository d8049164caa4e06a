"""Centreline samples of all channels with the axes their rings are laid out on, closer where the wall bends."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from morph.body.plan import ChannelPlan
from morph.core.arrays import Floats, Ints
from morph.settings.job import SectionShape
from morph.solid.sweep import along_mm

AROUND_MM = 0.0085
"""How far points of a ring may stand outside a round wall; the chords between them lie half as far inside."""

FEWEST_SIDES = 16
MOST_BEND_MM, MOST_CHANGE_MM, BENT_PARTS = 0.06, 0.02, 4
"""Steps between samples are cut in parts where points of three rings are so far from even on a line, or where that
changes by so much from one ring to the next."""

LEAST_STEP_MM, LONGEST_STEP_MM = 1e-4, 1.0
"""Samples closer than the first are one; overshoots are sampled at the second."""


@dataclass(frozen=True, slots=True, eq=False)
class Samples:
    """The centreline samples of all branches, exits and their overshoot included; arrays by sample.

    `first (b + 1,)` first sample of each branch, `reach_mm (k,)` of the section, `slack_mm (k,)` how far along the
    branch the ball that makes a wall may lie from its ring, `overhang_mm (k,)` how far behind it where the channel
    climbs, `spacing_mm (k,)` to the farther neighbour.
    """

    branch: Ints
    first: Ints
    xyz_mm: Floats
    at_mm: Floats
    radius_mm: Floats
    tangent: Floats
    side: Floats
    turn: Floats
    roofed: NDArray[np.uint8]
    reach_mm: Floats
    slack_mm: Floats
    overhang_mm: Floats
    spacing_mm: Floats


def list_samples(plan: ChannelPlan) -> Floats:
    """Returns rows (k, 9) of branch, place, place along the branch, radius and tangent; overshoots included."""
    beyond = {exit_.node: exit_ for exit_ in plan.exits}
    parts = []
    for number, branch in enumerate(plan.branches):
        along = along_mm(branch.xyz_mm)
        kept = np.concatenate([[True], np.diff(along) > LEAST_STEP_MM])
        rows = np.column_stack([branch.xyz_mm, along, 0.5 * branch.bore_mm])[kept]
        for node, end in ((branch.start, 0), (branch.end, -1)):
            if node in beyond:
                out = beyond[node]
                n = max(1, math.ceil(out.overshoot_mm / LONGEST_STEP_MM))
                way = np.arange(1, n + 1) / n * out.overshoot_mm
                at = rows[end, 3] + (way if end else -way)
                more = np.column_stack([out.xyz_mm + way[:, None] * out.leave, at, np.full(n, rows[end, 4])])
                rows = np.concatenate([rows, more] if end else [more[::-1], rows])
        if len(rows) < 3:
            continue
        step = np.diff(rows[:, :3], axis=0)
        step /= np.linalg.norm(step, axis=1)[:, None]
        tangent = np.concatenate([step[:1], step[:-1] + step[1:], step[-1:]])
        parts.append(np.column_stack([np.full(len(rows), number), rows, tangent]))
    return np.concatenate(parts) if parts else np.zeros((0, 9))


def frame_samples(rows: Floats, plan: ChannelPlan) -> Samples:
    """Returns the samples on `rows` of `list_samples` with their frames."""
    from morph.kernels.ring import frame_branch

    roofs = plan.section.shape is not SectionShape.ROUND
    rise = 1.0 / plan.section.roof_cosine if roofs else 1.0
    branch, xyz, along, radius = rows[:, 0].astype(np.int64), rows[:, 1:4], rows[:, 4], rows[:, 5]
    tangent = rows[:, 6:] / np.maximum(np.linalg.norm(rows[:, 6:], axis=1), 1e-12)[:, None]
    first = np.searchsorted(branch, np.arange(len(plan.branches) + 1))
    inner = branch[1:] == branch[:-1]
    step = np.where(inner, np.diff(along), 0.0)
    taper = np.where(inner, np.abs(np.diff(radius)) / np.where(inner, step, 1.0), 0.0)
    spacing = np.maximum(np.append(step, 0.0), np.insert(step, 0, 0.0))
    steepest = np.maximum(np.append(taper, 0.0), np.insert(taper, 0, 0.0))
    climb = tangent @ plan.section.up if roofs else np.zeros(len(rows))
    side, turn = np.empty(xyz.shape), np.empty(len(xyz))
    roofed = np.full(len(xyz), roofs, np.uint8)
    tangent, xyz = np.ascontiguousarray(tangent), np.ascontiguousarray(xyz)
    for a, b in itertools.pairwise(first.tolist()):
        frame_branch(tangent[a:b], plan.section.up, roofed[a:b], side[a:b], turn[a:b])
    return Samples(
        branch=branch,
        first=first,
        xyz_mm=xyz,
        at_mm=np.ascontiguousarray(along),
        radius_mm=np.ascontiguousarray(radius),
        tangent=tangent,
        side=side,
        turn=turn,
        roofed=roofed,
        reach_mm=rise * radius,
        slack_mm=2.0 * rise * radius * steepest,
        overhang_mm=rise * radius * climb,
        spacing_mm=spacing,
    )


def refine_samples(rows: Floats, points: Floats) -> Floats:
    """Returns `rows` of `list_samples` with more between where the wall bends too much for rings `points (k, n, 3)`.

    So it does where the ridge of a roof starts or ends; bends and their changes are second and third differences.
    """
    inner = rows[1:, 0] == rows[:-1, 0]
    bent = np.zeros(len(inner), np.bool_)
    even = inner[:-2] & inner[1:-1] & inner[2:]
    bent[1:-1] = even & (_longest(np.diff(points, 3, axis=0)) > MOST_CHANGE_MM)
    sharp = _longest(np.diff(points, 2, axis=0)) > MOST_BEND_MM
    bent[1:] |= sharp
    bent[:-1] |= sharp
    parts = np.where(bent & inner, BENT_PARTS, 1)
    at = np.repeat(np.arange(len(parts)), parts)
    share = ((np.arange(len(at)) - (np.cumsum(parts) - parts)[at]) / parts[at])[:, None]
    return np.concatenate([rows[at] + share * (rows[at + 1] - rows[at]), rows[-1:]])


def _longest(steps: Floats) -> Floats:
    """Returns the length (k,) of the longest of the vectors (k, n, 3) of each row."""
    return np.asarray(np.sqrt((steps**2).sum(axis=2).max(axis=1)))


def count_sides(samples: Samples) -> Ints:
    """Returns the points of the ring of each sample (k,): one number for each branch, from its widest bore."""
    sides = np.zeros(len(samples.branch), np.int64)
    for low, high in itertools.pairwise(samples.first.tolist()):
        if high > low:
            angle = math.sqrt(12.0 * AROUND_MM / float(samples.radius_mm[low:high].max()))
            sides[low:high] = max(FEWEST_SIDES, 2 * math.ceil(math.pi / angle))
    return sides
