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
    """

    pieces: Floats
    owner: Ints
    nodes: Floats
    blend_mm: float

    def __post_init__(self) -> None:
        object.__setattr__(self, "pieces", frozen_floats("pieces", self.pieces, (None, 17)))
        object.__setattr__(self, "nodes", frozen_floats("nodes", self.nodes, (None, 4)))
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
    for branch in plan.branches:
        share = roof_share(branch.bore_mm, plan.section)
        for half, (node_id, points, bores, shares) in enumerate(_halves(branch, share)):
            xyz, bore, share = points, bores, shares
            number = node_number[node_id]
            widest[number] = max(widest[number], bore.max())
            if node_id in beyond:
                exit_ = beyond[node_id]
                xyz = np.vstack([exit_.xyz_mm + exit_.overshoot_mm * exit_.leave, xyz])
                bore, share = np.concatenate([bore[:1], bore]), np.concatenate([share[:1], share])
            own = _pieces(xyz, 0.5 * bore, share, plan.section)
            owner.append((2 * len(owner) + half, number, len(own)))
            pieces.append(own)
    runs = np.concatenate([np.tile([index, number], (n, 1)) for index, (_, number, n) in enumerate(owner)])
    place = np.array([node.xyz_mm for node in plan.nodes])
    reach = BLEND_REACH_BORES * np.maximum(widest, COINCIDE_MM)
    smallest = min(float(branch.bore_mm.min()) for branch in plan.branches)
    return Sweep(
        pieces=np.concatenate(pieces),
        owner=runs,
        nodes=np.column_stack([place, reach]),
        blend_mm=blend_width_mm(plan.blend_mm, smallest),
    )


def _along_mm(xyz_mm: Floats) -> Floats:
    return np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(xyz_mm, axis=0), axis=1))])


def _halves(branch: PlanBranch, share: Floats) -> list[tuple[str, Floats, Floats, Floats]]:
    """Returns (node id, points, bores, shares) of both halves, each from its node to the middle of the branch."""
    along = _along_mm(branch.xyz_mm)
    middle = 0.5 * along[-1]
    point = np.array([np.interp(middle, along, branch.xyz_mm[:, axis]) for axis in range(3)])
    low, high = np.flatnonzero(along < middle - COINCIDE_MM), np.flatnonzero(along > middle + COINCIDE_MM)[::-1]
    return [
        (
            node,
            np.vstack([branch.xyz_mm[rows], point]),
            np.append(branch.bore_mm[rows], np.interp(middle, along, branch.bore_mm)),
            np.append(share[rows], np.interp(middle, along, share)),
        )
        for node, rows in ((branch.start, low), (branch.end, high))
    ]


def _pieces(xyz_mm: Floats, radius_mm: Floats, share: Floats, rule: SectionRule) -> Floats:
    """Returns the pieces (n, 17) of a polyline (k, 3) with radii (k,) and shares of roof (k,)."""
    if rule.shape is SectionShape.ARCHED:
        return _with_roof(_swept(xyz_mm, radius_mm, share), rule, rule.roof_cosine, rule.arch_ratio)
    rows = _swept(xyz_mm, radius_mm, share)
    parts = [_with_roof(rows[rows[:, -1] < 1.0], rule, 1.0, 0.0)]
    if share.max() > 0.0:
        roofs = _swept(xyz_mm, radius_mm * roof_radius_ratio(share, rule), share)
        parts.append(_with_roof(roofs[roofs[:, -1] > 0.0], rule, rule.roof_cosine, 0.0))
    return np.concatenate(parts)


def _with_roof(rows: Floats, rule: SectionRule, cosine: float, arch_ratio: float) -> Floats:
    """Returns pieces (n, 17) from rows (n, 11) of `_swept`, whose last column is the share of roof."""
    n = len(rows)
    roof = np.tile([*rule.up, cosine, math.sqrt(1.0 - cosine * cosine), arch_ratio], (n, 1))
    return np.column_stack([rows[:, :10], roof, rows[:, 10]])


def _swept(xyz_mm: Floats, radius_mm: Floats, share: Floats) -> Floats:
    """Returns rows (n, 11): the first ten columns of the pieces, and the mean share; steps of no length are skipped."""
    step = np.diff(xyz_mm, axis=0)
    length = np.linalg.norm(step, axis=1)
    moves = length > COINCIDE_MM
    if not moves.any():
        return _balls(xyz_mm[:1], radius_mm[:1], share[:1])
    start, tangent = xyz_mm[:-1][moves], step[moves] / length[moves, None]
    taper = np.diff(radius_mm)[moves] / length[moves]
    steep = np.abs(taper) > STEEPEST_TAPER
    safe = np.where(steep, 0.0, taper)
    mean = 0.5 * (share[:-1] + share[1:])[moves]
    swept = np.column_stack(
        [start, tangent, length[moves], radius_mm[:-1][moves], safe, safe / np.sqrt(1.0 - safe * safe), mean]
    )[~steep]
    ends = np.concatenate([np.flatnonzero(moves)[steep], np.flatnonzero(moves)[steep] + 1])
    return np.concatenate([swept, _balls(xyz_mm[ends], radius_mm[ends], share[ends])])


def _balls(centre_mm: Floats, radius_mm: Floats, share: Floats) -> Floats:
    """Returns rows (n, 11) of no length: balls."""
    n = len(centre_mm)
    up = np.tile([0.0, 0.0, 1.0], (n, 1))
    return np.column_stack([centre_mm, up, np.zeros(n), radius_mm, np.zeros((n, 2)), share])
