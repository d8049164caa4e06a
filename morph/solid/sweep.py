"""From the channel plan to the pieces the field is swept from.

Each branch is cut in two halves at the middle of its length. A half is one *run* and belongs to the
node it starts from, so that runs of one node blend near that node only, also when two branches
join the same two nodes or one branch closes on itself. At an exit the run goes on straight along
`leave` past the face, so that the trimmed channel ends in a full flat opening.

Where the roof of an auto section fades, a piece is swept twice: as round balls, and as roofed balls of the
smaller radius its roof is tangent to (body/section.py); the least distance of the two is the fading section.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from morph.body.plan import ChannelPlan, PlanBranch
from morph.body.section import SectionRule, roof_radius_ratio, roof_share
from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints
from morph.core.tolerance import COINCIDE_MM
from morph.settings.job import SectionShape

STEEPEST_TAPER = 0.95
"""Change of radius per length above which a tapered piece is replaced by its two end balls: one nearly holds both."""

BLEND_REACH_BORES = 4.0
"""Blending has faded out at this many bores from the node; full up to half of it."""


@dataclass(frozen=True, slots=True, eq=False)
class Sweep:
    """The pieces of the field.

    Args:
        pieces: (n, 17) start x y z, unit tangent x y z, length, start radius, taper t, t / sqrt(1 - t^2), up x y z,
            cos and sin of the roof angle (1, 0 for round), arch ratio (0 unless arched), share of roof; mm.
        owner: (n, 2) run and node of each piece, sorted by run.
        nodes: (k, 4) place of each node and the distance at which blending has faded out, mm.
        blend_mm: width of the smooth minimum.
        along: (n, 3) number of the branch each piece is of, and where along it the piece starts and ends, mm.
    """

    pieces: Floats
    owner: Ints
    nodes: Floats
    blend_mm: float
    along: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "pieces", frozen_floats("pieces", self.pieces, (None, 17)))
        object.__setattr__(self, "nodes", frozen_floats("nodes", self.nodes, (None, 4)))
        object.__setattr__(self, "along", frozen_floats("along", self.along, (len(self.pieces), 3)))
        object.__setattr__(self, "owner", frozen_ints("owner", self.owner, (len(self.pieces), 2)))


def blend_width_mm(fillet_mm: float, smallest_bore_mm: float) -> float:
    """Returns the width k of the smooth minimum that gives fillets of radius `fillet_mm`.

    Where two flat walls meet at a right angle the quadratic smooth minimum is a parabola whose smallest radius of
    curvature is k / sqrt(2); so k = sqrt(2) fillet. It is held below the smallest radius, so that a
    fillet never reaches across a channel.

    Args:
        fillet_mm: wanted fillet radius, 0 for sharp junctions.
        smallest_bore_mm: smallest bore of the plan.

    >>> round(blend_width_mm(0.6, 5.0), 4)
    0.8485
    """
    return min(math.sqrt(2.0) * fillet_mm, 0.5 * smallest_bore_mm)


def make_sweep(plan: ChannelPlan) -> Sweep:
    """Returns the pieces of all branches and leads of `plan`, exits extended by their overshoot."""
    node_number = {node.id: number for number, node in enumerate(plan.nodes)}
    beyond = {exit_.node: exit_ for exit_ in plan.exits}
    widest = np.zeros(len(plan.nodes))
    pieces: list[Floats] = []
    owner: list[tuple[int, int, int]] = []
    for count, branch in enumerate(plan.branches):
        whole = roof_share(branch.bore_mm, plan.section)
        for half, (node_id, *columns) in enumerate(_halves(branch, whole)):
            xyz, bore, share, along = columns
            number = node_number[node_id]
            widest[number] = max(widest[number], bore.max())
            if node_id in beyond:
                exit_ = beyond[node_id]
                xyz = np.vstack([exit_.xyz_mm + exit_.overshoot_mm * exit_.leave, xyz])
                bore, share = np.concatenate([bore[:1], bore]), np.concatenate([share[:1], share])
                outwards = exit_.overshoot_mm if half else -exit_.overshoot_mm
                along = np.concatenate([along[:1] + outwards, along])
            own = _pieces(xyz, 0.5 * bore, share, along, plan.section)
            owner.append((2 * len(owner) + half, number, len(own)))
            pieces.append(np.column_stack([own, np.full(len(own), float(count))]))
    rows = np.concatenate(pieces)
    runs = np.concatenate([np.tile([index, number], (n, 1)) for index, (_, number, n) in enumerate(owner)])
    place = np.array([node.xyz_mm for node in plan.nodes])
    reach = BLEND_REACH_BORES * np.maximum(widest, COINCIDE_MM)
    smallest = min(float(branch.bore_mm.min()) for branch in plan.branches)
    return Sweep(
        pieces=rows[:, :17],
        owner=runs,
        nodes=np.column_stack([place, reach]),
        blend_mm=blend_width_mm(plan.blend_mm, smallest),
        along=rows[:, [19, 17, 18]],
    )


def along_mm(xyz_mm: Floats) -> Floats:
    """Returns the length (k,) of a polyline (k, 3) up to each of its points, mm."""
    return np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(xyz_mm, axis=0), axis=1))])


def _halves(branch: PlanBranch, share: Floats) -> list[tuple[str, Floats, Floats, Floats, Floats]]:
    """Returns (node id, points, bores, shares, places along) of both halves, each from its node to the middle."""
    along = along_mm(branch.xyz_mm)
    middle = 0.5 * along[-1]
    point = np.array([np.interp(middle, along, branch.xyz_mm[:, axis]) for axis in range(3)])
    low, high = np.flatnonzero(along < middle - COINCIDE_MM), np.flatnonzero(along > middle + COINCIDE_MM)[::-1]
    return [
        (
            node,
            np.vstack([branch.xyz_mm[rows], point]),
            np.append(branch.bore_mm[rows], np.interp(middle, along, branch.bore_mm)),
            np.append(share[rows], np.interp(middle, along, share)),
            np.append(along[rows], middle),
        )
        for node, rows in ((branch.start, low), (branch.end, high))
    ]


def _pieces(xyz_mm: Floats, radius_mm: Floats, share: Floats, along: Floats, rule: SectionRule) -> Floats:
    """Returns the pieces (n, 17) of a polyline (k, 3) with radii (k,), shares of roof (k,) and places along (k,).

    Two more columns hold where each piece starts and ends along its branch.
    """
    rows = _swept(xyz_mm, radius_mm, share, along)
    if rule.shape is SectionShape.ARCHED:
        return _with_roof(rows, rule, rule.roof_cosine, rule.arch_ratio)
    parts = [_with_roof(rows[rows[:, 10] < 1.0], rule, 1.0, 0.0)]
    if share.max() > 0.0:
        roofs = _swept(xyz_mm, radius_mm * roof_radius_ratio(share, rule), share, along)
        parts.append(_with_roof(roofs[roofs[:, 10] > 0.0], rule, rule.roof_cosine, 0.0))
    return np.concatenate(parts)


def _with_roof(rows: Floats, rule: SectionRule, cosine: float, arch_ratio: float) -> Floats:
    """Returns pieces (n, 19) from rows (n, 13) of `_swept`: ten columns, share of roof, start and end along."""
    n = len(rows)
    roof = np.tile([*rule.up, cosine, math.sqrt(1.0 - cosine * cosine), arch_ratio], (n, 1))
    return np.column_stack([rows[:, :10], roof, rows[:, 10:]])


def _swept(xyz_mm: Floats, radius_mm: Floats, share: Floats, along: Floats) -> Floats:
    """Returns rows (n, 13): the first ten columns of the pieces, the mean share, start and end along the branch.

    Steps of no length are skipped.
    """
    step = np.diff(xyz_mm, axis=0)
    length = np.linalg.norm(step, axis=1)
    moves = length > COINCIDE_MM
    if not moves.any():
        return _balls(xyz_mm[:1], radius_mm[:1], share[:1], along[:1])
    start, tangent = xyz_mm[:-1][moves], step[moves] / length[moves, None]
    taper = np.diff(radius_mm)[moves] / length[moves]
    steep = np.abs(taper) > STEEPEST_TAPER
    safe = np.where(steep, 0.0, taper)
    mean = 0.5 * (share[:-1] + share[1:])[moves]
    slope = safe / np.sqrt(1.0 - safe * safe)
    low, high = np.minimum(along[:-1], along[1:])[moves], np.maximum(along[:-1], along[1:])[moves]
    columns = [start, tangent, length[moves], radius_mm[:-1][moves], safe, slope, mean, low, high]
    swept = np.column_stack(columns)[~steep]
    ends = np.concatenate([np.flatnonzero(moves)[steep], np.flatnonzero(moves)[steep] + 1])
    return np.concatenate([swept, _balls(xyz_mm[ends], radius_mm[ends], share[ends], along[ends])])


def _balls(centre_mm: Floats, radius_mm: Floats, share: Floats, along: Floats) -> Floats:
    """Returns rows (n, 13) of no length: balls."""
    n = len(centre_mm)
    up = np.tile([0.0, 0.0, 1.0], (n, 1))
    return np.column_stack([centre_mm, up, np.zeros(n), radius_mm, np.zeros((n, 2)), share, along, along])
