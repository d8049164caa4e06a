"""From the channel plan to the pieces the field is swept from.

Each branch is cut in two halves at the middle of its length. A half is one *run* and belongs to the
node it starts from, so that runs of one node blend near that node only, also when two branches
join the same two nodes or one branch closes on itself. At an exit the run goes on straight along
`leave` past the face, so that the trimmed channel ends in a full flat opening.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from morph.body.plan import ChannelPlan, PlanBranch
from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints
from morph.core.tolerance import COINCIDE_MM

STEEPEST_TAPER = 0.95
"""Change of radius per length above which a tapered piece is replaced by its two end balls: one nearly holds both."""

BLEND_REACH_BORES = 4.0
"""Blending has faded out at this many bores from the node; full up to half of it."""


@dataclass(frozen=True, slots=True, eq=False)
class Sweep:
    """The pieces of the field.

    Args:
        pieces: (n, 10) start x y z, unit tangent x y z, length, start radius, taper t, t / sqrt(1 - t^2); mm.
        owner: (n, 2) run and node of each piece, sorted by run.
        nodes: (k, 4) place of each node and the distance at which blending has faded out, mm.
        blend_mm: width of the smooth minimum.
    """

    pieces: Floats
    owner: Ints
    nodes: Floats
    blend_mm: float

    def __post_init__(self) -> None:
        object.__setattr__(self, "pieces", frozen_floats("pieces", self.pieces, (None, 10)))
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
        for half, (node_id, points, bores) in enumerate(_halves(branch)):
            xyz, bore = points, bores
            number = node_number[node_id]
            widest[number] = max(widest[number], bore.max())
            if node_id in beyond:
                exit_ = beyond[node_id]
                xyz = np.vstack([exit_.xyz_mm + exit_.overshoot_mm * exit_.leave, xyz])
                bore = np.concatenate([bore[:1], bore])
            own = _pieces(xyz, 0.5 * bore)
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


def _halves(branch: PlanBranch) -> tuple[tuple[str, Floats, Floats], tuple[str, Floats, Floats]]:
    """Returns (node id, points, bores) of both halves, each running from its node to the middle of the branch."""
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1))])
    middle = 0.5 * along[-1]
    point = np.array([np.interp(middle, along, branch.xyz_mm[:, axis]) for axis in range(3)])
    bore = float(np.interp(middle, along, branch.bore_mm))
    low, high = along < middle - COINCIDE_MM, along > middle + COINCIDE_MM
    first = (branch.start, np.vstack([branch.xyz_mm[low], point]), np.append(branch.bore_mm[low], bore))
    second = (branch.end, np.vstack([branch.xyz_mm[high][::-1], point]), np.append(branch.bore_mm[high][::-1], bore))
    return first, second


def _pieces(xyz_mm: Floats, radius_mm: Floats) -> Floats:
    """Returns the pieces (n, 10) of a polyline (k, 3) with radii (k,); steps of no length are skipped."""
    step = np.diff(xyz_mm, axis=0)
    length = np.linalg.norm(step, axis=1)
    moves = length > COINCIDE_MM
    if not moves.any():
        return _balls(xyz_mm[:1], radius_mm[:1])
    start, tangent = xyz_mm[:-1][moves], step[moves] / length[moves, None]
    taper = np.diff(radius_mm)[moves] / length[moves]
    steep = np.abs(taper) > STEEPEST_TAPER
    safe = np.where(steep, 0.0, taper)
    swept = np.column_stack(
        [start, tangent, length[moves], radius_mm[:-1][moves], safe, safe / np.sqrt(1.0 - safe * safe)]
    )[~steep]
    ends = np.concatenate([np.flatnonzero(moves)[steep], np.flatnonzero(moves)[steep] + 1])
    return np.concatenate([swept, _balls(xyz_mm[ends], radius_mm[ends])])


def _balls(centre_mm: Floats, radius_mm: Floats) -> Floats:
    """Returns pieces of no length: balls (n, 10)."""
    n = len(centre_mm)
    up = np.tile([0.0, 0.0, 1.0], (n, 1))
    return np.column_stack([centre_mm, up, np.zeros(n), radius_mm, np.zeros((n, 2))])
