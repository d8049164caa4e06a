"""Stretches where a channel runs alone: its wall there is swept directly, ring by ring, not taken from the field.

A ring belongs to a stretch when every other piece of the plan stays away from all its points by more than the
reach of the blend. The rings of a stretch are as few as the chord tolerances allow, so that a straight channel costs as
much as a tube; the field is sampled only around what lies between the stretches: junctions, ends, near neighbours.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from morph.body.plan import ChannelPlan
from morph.core.arrays import Bools, Floats, Ints
from morph.core.progress import Progress
from morph.geometry.slabs import run_slabs
from morph.settings.job import SectionShape
from morph.solid.field import BlockLists
from morph.solid.sweep import Sweep, along_mm

AROUND_MM = 0.0085
"""How far points of a ring may stand outside a round wall; the chords between them lie half as far inside."""

INSIDE_MM, OUTSIDE_MM = 0.0100, 0.0060
"""How far a strip between two rings may lie inside and outside the points of rings between, lengthwise.

Outside it adds to AROUND_MM, inside only to half of it."""

FEWEST_SIDES = 16
LONGEST_EDGES = 3.0
"""Rings stand at most this many times the edge of a ring apart: longer triangles get sharp corners."""

MOST_TURN = 0.5
"""A strip may twist by at most this share of the angle between two points of a ring."""

MOST_LEAN = 0.98
"""The ridge is looked for this many points of the ring aside from straight up."""

FEW_SIDES = 6
"""Points of the rings that only show where the wall bends; one of them is on the ridge."""

MOST_BEND_MM, MOST_CHANGE_MM, BENT_PARTS = 0.06, 0.02, 4
"""Steps between samples are cut in parts where points of three rings are so far from even on a line, or where that
changes by so much from one ring to the next."""

LEAST_STEP_MM, LONGEST_STEP_MM = 1e-4, 1.0
"""Samples closer than the first are one; overshoots are sampled at the second."""

BAND_CELLS = 1.0
"""The field's surface is cut this many cells before the first ring of a stretch."""

SPARE_CELLS = 2.0
"""The field reaches this many cells beyond the cut, so that its creases are whole there."""

LEAST_CELLS, LEAST_REACHES = 10.0, 2.0
"""Shorter stretches, in cells and in reaches of the section, are left to the field."""

GAP_CELLS = 8.0
"""Two stretches of a branch leave at least this many cells to the field between them."""

RINGS_PER_SLAB = 1024


@dataclass(frozen=True, slots=True, eq=False)
class Stretches:
    """The stretches of one plan; work arrays, not copied.

    Args:
        points: (n, 3) points of all rings, mm, rounded to float32. sides: (s,) points of each ring of a stretch.
        rings: (s,) rings of each stretch. offset: (s,) first point of each stretch.
        centre, axis: (2 s, 3) centre and direction along the branch of the first and the last ring of each stretch.
        end: (pieces,) and planes: (2 s, 6) as kernels/stretch.py has them.
    """

    points: Floats
    sides: Ints
    rings: Ints
    offset: Ints
    centre: Floats
    axis: Floats
    end: Ints
    planes: Floats

    def ring(self, end: int) -> Ints:
        """Returns the rows of `points` of the ring at an end."""
        s = end // 2
        first = self.offset[s] + (self.rings[s] - 1) * self.sides[s] * (end % 2)
        return np.arange(first, first + self.sides[s])

    def field_planes(self, h_mm: float) -> Floats:
        """Returns the planes (2 s, 6) up to which the field is needed: beyond those where its surface is cut."""
        return np.column_stack([self.planes[:, :3] + SPARE_CELLS * h_mm * self.planes[:, 3:], self.planes[:, 3:]])


def no_stretches(n_pieces: int) -> Stretches:
    """Returns a record without any stretch: the field makes the whole wall."""
    none = np.zeros(0, np.int64)
    rows = np.zeros((0, 3))
    return Stretches(rows, none, none, none, rows, rows, np.full(n_pieces, -1), np.zeros((0, 6)))


@dataclass(frozen=True, slots=True, eq=False)
class _Samples:
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


def find_stretches(plan: ChannelPlan, sweep: Sweep, lists: BlockLists, h_mm: float, progress: Progress) -> Stretches:
    """Returns where the channels of `plan` run alone, with their rings.

    Args:
        plan: all channels.
        sweep: its pieces.
        lists: the pieces near each block.
        h_mm: cell size of the field that makes the rest.
        progress: told after each slab of rings; may raise Cancelled.
    """
    if plan.section.shape is SectionShape.ARCHED:
        return no_stretches(len(sweep.pieces))
    rows = _centrelines(plan)
    if not len(rows):
        return no_stretches(len(sweep.pieces))
    samples = _framed(rows, plan)
    few = np.full(len(rows), FEW_SIDES)
    points, _ = _place(samples, sweep, few, np.arange(len(rows)) * FEW_SIDES, progress)
    samples = _framed(_finer(rows, points.reshape(-1, FEW_SIDES, 3)), plan)
    sides = _count_sides(samples)
    offset = np.cumsum(sides) - sides
    points, lean = _place(samples, sweep, sides, offset, progress)
    clear = (np.abs(lean) * sides < MOST_LEAN * 2.0 * np.pi) & _clear(
        samples, sweep, lists, sides, offset, points, h_mm, progress
    )
    low, high = _runs(samples, sides, clear, h_mm)
    chosen, sound = _choose(samples, sides, offset, points, low, high, progress)
    return _assemble(samples, sweep, sides, offset, points, low[sound], high[sound], chosen, h_mm)


def _centrelines(plan: ChannelPlan) -> Floats:
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


def _framed(rows: Floats, plan: ChannelPlan) -> _Samples:
    """Returns the samples on `rows` of `_centrelines` with their frames."""
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
    return _Samples(
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


def _finer(rows: Floats, points: Floats) -> Floats:
    """Returns `rows` of `_centrelines` with more between where the wall bends too much for rings `points (k, n, 3)`.

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


def _count_sides(samples: _Samples) -> Ints:
    """Returns the points of the ring of each sample (k,): one number for each branch, from its widest bore."""
    sides = np.zeros(len(samples.branch), np.int64)
    for low, high in itertools.pairwise(samples.first.tolist()):
        if high > low:
            angle = math.sqrt(12.0 * AROUND_MM / float(samples.radius_mm[low:high].max()))
            sides[low:high] = max(FEWEST_SIDES, 2 * math.ceil(math.pi / angle))
    return sides


def _place(samples: _Samples, sweep: Sweep, sides: Ints, offset: Ints, progress: Progress) -> tuple[Floats, Floats]:
    """Returns the points of the rings of all samples, and how far (k,) their ridge stands aside, in rad."""
    from morph.kernels.ring import place_rings

    # own pieces in order along their branch: a ring's are those whose middle lies within its slack
    longest = 1.0 + 2.0 * float(sweep.along[:, 2].max(initial=0.0) - sweep.along[:, 1].min(initial=0.0))
    middle = sweep.along[:, 0] * longest + 0.5 * (sweep.along[:, 1] + sweep.along[:, 2])
    own = np.argsort(middle, kind="stable")
    ring = samples.branch * longest + samples.at_mm
    slack = samples.slack_mm + 1.05 * float((sweep.along[:, 2] - sweep.along[:, 1]).max())
    behind, ahead = slack + np.maximum(samples.overhang_mm, 0.0), slack + np.maximum(-samples.overhang_mm, 0.0)
    window = np.column_stack(
        [np.searchsorted(middle[own], ring - behind), np.searchsorted(middle[own], ring + ahead, side="right")]
    )
    points, lean = np.empty((int(sides.sum()), 3)), np.zeros(len(sides))
    fixed = (samples.xyz_mm, samples.tangent, samples.side, samples.radius_mm, samples.roofed, sides, offset)
    run_slabs(
        "solid: rings",
        len(sides),
        RINGS_PER_SLAB,
        lambda a, b: place_rings(a, b, *fixed, sweep.pieces, own, window, points, lean),
        progress,
    )
    return points, lean


def _clear(
    samples: _Samples, sweep: Sweep, lists: BlockLists, sides: Ints, offset: Ints, points: Floats, h_mm: float,
    progress: Progress,
) -> Bools:  # fmt: skip
    """Returns which rings (k,) nothing but their own stretch comes near."""
    from morph.kernels.ring import mark_clear

    margin = np.minimum(sweep.blend_mm + 0.5 * samples.spacing_mm + 0.2 * h_mm, lists.pad_mm)
    own = 2.0 * (samples.reach_mm + margin)
    clear = np.zeros(len(sides), np.uint8)
    where = (
        sweep.pieces,
        sweep.along,
        lists.origin_mm,
        lists.block_mm,
        lists.shape,
        lists.keys,
        lists.start,
        lists.near,
    )
    rings = (samples.branch, samples.at_mm, own, sides, offset, points)
    run_slabs(
        "solid: rings",
        len(sides),
        RINGS_PER_SLAB,
        lambda a, b: mark_clear(a, b, *rings, *where, margin, clear),
        progress,
    )
    return clear > 0


def _runs(samples: _Samples, sides: Ints, clear: Bools, h_mm: float) -> tuple[Ints, Ints]:
    """Returns the first and last sample (s,) of each stretch that is long enough."""
    joined = np.zeros(len(sides) + 1, np.bool_)  # whether sample k - 1 and k lie in one stretch
    joined[1:-1] = (
        clear[1:]
        & clear[:-1]
        & (samples.branch[1:] == samples.branch[:-1])
        & (samples.turn[1:] < MOST_TURN * 2.0 * np.pi / np.maximum(sides[1:], 1))
    )
    low = np.flatnonzero(~joined[:-1] & joined[1:])
    high = np.flatnonzero(joined[:-1] & ~joined[1:])
    for k in range(1, len(low)):  # room between two stretches of one branch
        if samples.branch[low[k]] == samples.branch[high[k - 1]]:
            least = samples.at_mm[high[k - 1]] + GAP_CELLS * h_mm
            last = samples.first[samples.branch[low[k]] + 1]
            at = int(samples.first[samples.branch[low[k]]])
            at += int(np.searchsorted(samples.at_mm[at:last], least))
            low[k] = min(max(low[k], at), high[k])
    length = samples.at_mm[high] - samples.at_mm[low]
    long = length >= np.maximum(LEAST_CELLS * h_mm, LEAST_REACHES * samples.reach_mm[low])
    return low[long], high[long]


def _choose(
    samples: _Samples, sides: Ints, offset: Ints, points: Floats, low: Ints, high: Ints, progress: Progress
) -> tuple[Bools, Bools]:
    """Returns which rings (k,) are needed, and which stretches (s,) do not fold."""
    from morph.kernels.ring import choose_rings

    edge = 2.0 * np.pi * samples.radius_mm / np.maximum(sides, 1)
    longest = np.array([LONGEST_EDGES * edge[a : b + 1].min() for a, b in zip(low, high, strict=True)])
    chosen = np.zeros(len(sides), np.uint8)
    fixed = (low, high, sides, offset, points, samples.xyz_mm, samples.at_mm, longest, INSIDE_MM, OUTSIDE_MM)
    run_slabs("solid: rings", len(low), 64, lambda a, b: choose_rings(a, b, *fixed, chosen), progress)
    return chosen > 0, chosen[low] == 1


def _assemble(
    samples: _Samples, sweep: Sweep, sides: Ints, offset: Ints, points: Floats, low: Ints, high: Ints, chosen: Bools,
    h_mm: float,
) -> Stretches:  # fmt: skip
    """Returns the record of the stretches from sample `low` to `high` (s,)."""
    from morph.solid.tidy import round_to_file

    ends = np.column_stack([low, high]).ravel()
    inwards = samples.tangent[ends] * np.tile([1.0, -1.0], len(low))[:, None]
    planes = np.column_stack([samples.xyz_mm[ends] - BAND_CELLS * h_mm * inwards, inwards])
    rows = [np.flatnonzero(chosen[a : b + 1]) + a for a, b in zip(low, high, strict=True)]
    rings = np.array([len(row) for row in rows], np.int64)
    taken = [(offset[row][:, None] + np.arange(sides[row[0]])).ravel() for row in rows]
    count = rings * sides[low]
    return Stretches(
        points=round_to_file(points[np.concatenate(taken)]) if taken else np.zeros((0, 3)),
        sides=sides[low],
        rings=rings,
        offset=np.cumsum(count) - count,
        centre=samples.xyz_mm[ends],
        axis=samples.tangent[ends],
        end=_ends_of_pieces(samples, sweep, low, high),
        planes=planes,
    )


def _ends_of_pieces(samples: _Samples, sweep: Sweep, low: Ints, high: Ints) -> Ints:
    """Returns for each piece (n,) the end of a stretch it is near to, or that it is inside one or in none."""
    from morph.kernels.stretch import INSIDE, NO_STRETCH

    end = np.full(len(sweep.pieces), NO_STRETCH)
    middle = 0.5 * (sweep.along[:, 1] + sweep.along[:, 2])
    nearest = np.full(len(end), np.inf)
    for s, (a, b) in enumerate(zip(low, high, strict=True)):
        reach = LEAST_REACHES * float(samples.reach_mm[a : b + 1].max())
        own = sweep.along[:, 0] == samples.branch[a]
        start, stop = samples.at_mm[a], samples.at_mm[b]
        end[own & (middle > start + reach) & (middle < stop - reach) & (nearest > reach)] = INSIDE
        for side, place in ((0, start), (1, stop)):
            away = np.abs(middle - place)
            near = own & (away <= reach) & (away < nearest)
            end[near] = 2 * s + side
            nearest[near] = away[near]
    return end
