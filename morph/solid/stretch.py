"""Stretches where a channel runs alone: its wall there is swept directly, ring by ring, not taken from the field.

A ring belongs to a stretch when every other piece of the plan stays away from all its points by more than the
reach of the blend. The rings of a stretch are as few as the chord tolerances allow, so that a straight channel costs as
much as a tube; the field is sampled only around what lies between the stretches: junctions, ends, near neighbours.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.arrays import Bools, Floats, Ints
from morph.core.progress import Progress
from morph.geometry.slabs import run_slabs
from morph.settings.job import SectionShape
from morph.solid.centreline import Samples, count_sides, frame_samples, list_samples, refine_samples
from morph.solid.field import BlockLists
from morph.solid.sweep import Sweep

INSIDE_MM, OUTSIDE_MM = 0.0100, 0.0060
"""How far a strip between two rings may lie inside and outside the points of rings between, lengthwise.

Outside it adds to AROUND_MM, inside only to half of it."""

LONGEST_EDGES = 3.0
"""Rings stand at most this many times the edge of a ring apart: longer triangles get sharp corners."""

MOST_TURN = 0.5
"""A strip may twist by at most this share of the angle between two points of a ring."""

MOST_LEAN = 0.98
"""The ridge is looked for this many points of the ring aside from straight up."""

FEW_SIDES = 6
"""Points of the rings that only show where the wall bends; one of them is on the ridge."""

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
        end: (pieces,) and planes: (2 s, 6) as kernels/stretch.py has them. of: (pieces,) stretch of each, -1 for none.
    """

    points: Floats
    sides: Ints
    rings: Ints
    offset: Ints
    centre: Floats
    axis: Floats
    end: Ints
    planes: Floats
    of: Ints

    def ring(self, end: int) -> Ints:
        """Returns the rows of `points` of the ring at an end."""
        s = end // 2
        first = self.offset[s] + (self.rings[s] - 1) * self.sides[s] * (end % 2)
        return np.arange(first, first + self.sides[s])

    def field_planes(self, h_mm: float) -> Floats:
        """Returns the planes (2 s, 6) up to which the field is needed: beyond those where its surface is cut."""
        return np.column_stack([self.planes[:, :3] + SPARE_CELLS * h_mm * self.planes[:, 3:], self.planes[:, 3:]])

    def without(self, stretches: set[int]) -> Stretches:
        """Returns the record without some of its stretches, which are left to the field."""
        kept = np.array([s for s in range(len(self.sides)) if s not in stretches], np.int64)
        number = np.full(len(self.sides) + 1, -1)  # the last one is for pieces in none
        number[kept] = np.arange(len(kept))
        ends = np.column_stack([2 * kept, 2 * kept + 1]).ravel()
        of = number[self.of]
        end = np.where(self.end >= 0, 2 * of + self.end % 2, self.end)
        return replace(
            self,
            sides=self.sides[kept],
            rings=self.rings[kept],
            offset=self.offset[kept],
            centre=self.centre[ends],
            axis=self.axis[ends],
            end=np.where(of >= 0, end, -1),
            planes=self.planes[ends],
            of=of,
        )


def no_stretches(n_pieces: int) -> Stretches:
    """Returns a record without any stretch: the field makes the whole wall."""
    none = np.zeros(0, np.int64)
    rows = np.zeros((0, 3))
    return Stretches(rows, none, none, none, rows, rows, np.full(n_pieces, -1), np.zeros((0, 6)), np.full(n_pieces, -1))


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
    rows = list_samples(plan)
    if not len(rows):
        return no_stretches(len(sweep.pieces))
    samples = frame_samples(rows, plan)
    few = np.full(len(rows), FEW_SIDES)
    points, _ = _place(samples, sweep, few, np.arange(len(rows)) * FEW_SIDES, progress)
    samples = frame_samples(refine_samples(rows, points.reshape(-1, FEW_SIDES, 3)), plan)
    sides = count_sides(samples)
    offset = np.cumsum(sides) - sides
    points, lean = _place(samples, sweep, sides, offset, progress)
    clear = (np.abs(lean) * sides < MOST_LEAN * 2.0 * np.pi) & _clear(
        samples, sweep, lists, sides, offset, points, h_mm, progress
    )
    low, high = _runs(samples, sides, clear, h_mm)
    chosen, sound = _choose(samples, sides, offset, points, low, high, progress)
    return _assemble(samples, sweep, sides, offset, points, low[sound], high[sound], chosen, h_mm)


def _place(samples: Samples, sweep: Sweep, sides: Ints, offset: Ints, progress: Progress) -> tuple[Floats, Floats]:
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
    samples: Samples, sweep: Sweep, lists: BlockLists, sides: Ints, offset: Ints, points: Floats, h_mm: float,
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


def _runs(samples: Samples, sides: Ints, clear: Bools, h_mm: float) -> tuple[Ints, Ints]:
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
    samples: Samples, sides: Ints, offset: Ints, points: Floats, low: Ints, high: Ints, progress: Progress
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
    samples: Samples, sweep: Sweep, sides: Ints, offset: Ints, points: Floats, low: Ints, high: Ints, chosen: Bools,
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
    end, of = _ends_of_pieces(samples, sweep, low, high)
    return Stretches(
        points=round_to_file(points[np.concatenate(taken)]) if taken else np.zeros((0, 3)),
        sides=sides[low],
        rings=rings,
        offset=np.cumsum(count) - count,
        centre=samples.xyz_mm[ends],
        axis=samples.tangent[ends],
        end=end,
        planes=planes,
        of=of,
    )


def _ends_of_pieces(samples: Samples, sweep: Sweep, low: Ints, high: Ints) -> tuple[Ints, Ints]:
    """Returns which stretch end each piece (n,) is near to, or that it is inside or in none; and its stretch."""
    from morph.kernels.stretch import INSIDE, NO_STRETCH

    end, of = np.full(len(sweep.pieces), NO_STRETCH), np.full(len(sweep.pieces), -1)
    middle = 0.5 * (sweep.along[:, 1] + sweep.along[:, 2])
    nearest = np.full(len(end), np.inf)
    for s, (a, b) in enumerate(zip(low, high, strict=True)):
        reach = LEAST_REACHES * float(samples.reach_mm[a : b + 1].max())
        own = sweep.along[:, 0] == samples.branch[a]
        start, stop = samples.at_mm[a], samples.at_mm[b]
        inside = own & (middle > start + reach) & (middle < stop - reach)
        end[inside], of[inside] = INSIDE, s
        for side, place in ((0, start), (1, stop)):
            away = np.abs(middle - place)
            near = own & (away <= reach) & (away < nearest)
            end[near], of[near] = 2 * s + side, s
            nearest[near] = away[near]
    return end, of
