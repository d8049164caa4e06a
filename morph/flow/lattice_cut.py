"""Cuts across the channels on which the lattice's flow is counted.

Every cell goes to the node at its end of the branch it stands on. The links between the cells of two nodes are the cut
of the branch that joins them: also where that branch is shorter than it is wide, so that its middle lies within
junctions and cells of its neighbours stand there. The lattice keeps mass link by link, so that the sum over a cut is
the flow itself, without interpolation. A branch that closes on its own node is cut by the plane square to its middle.
"""

from __future__ import annotations

import numpy as np

from morph.body.plan import ChannelPlan, PlanBranch
from morph.core.arrays import Floats, Ints
from morph.flow.lattice_domain import LatticeDomain
from morph.flow.lattice_guide import Guide

CUT_BORES = 1.5
"""Cells farther from the middle of the cut than this belong to another stretch."""


def middle_of(branch: PlanBranch) -> tuple[Floats, Floats, float]:
    """Returns place (3,), unit tangent (3,) and bore at the middle of the branch's length."""
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1))])
    middle = 0.5 * along[-1]
    place = np.array([np.interp(middle, along, branch.xyz_mm[:, axis]) for axis in range(3)])
    step = min(int(np.searchsorted(along, middle, side="right")), len(along) - 1)
    tangent = branch.xyz_mm[step] - branch.xyz_mm[step - 1]
    bore = float(np.interp(middle, along, branch.bore_mm))
    return place, tangent / max(float(np.linalg.norm(tangent)), 1e-12), bore


def make_cuts(plan: ChannelPlan, domain: LatticeDomain, guide: Guide) -> tuple[Ints, ...]:
    """Returns the links (k, 3) of the cut of each branch: cell before, cell behind, direction between them."""
    number = {node.id: i for i, node in enumerate(plan.nodes)}
    ends = np.array([[number[branch.start], number[branch.end]] for branch in plan.branches])
    rows, owner = _between_nodes(domain, guide, ends)
    order = np.argsort(owner, kind="stable")
    bounds = np.searchsorted(owner[order], np.arange(len(plan.branches) + 1))
    of_branch = guide.branch[guide.cell_stretch]
    cuts = []
    for row, branch in enumerate(plan.branches):
        if branch.start == branch.end:
            cuts.append(_cut(branch, domain, np.flatnonzero(of_branch == row)))
        else:
            cuts.append(np.ascontiguousarray(rows[order[bounds[row] : bounds[row + 1]]]))
    return tuple(cuts)


def _between_nodes(domain: LatticeDomain, guide: Guide, ends: Ints) -> tuple[Ints, Ints]:
    """Returns the links (k, 3) between cells of different nodes, along their branch, and that branch (k,).

    Of several branches between two nodes a link takes the one a cell of it stands on; links between nodes that no
    branch joins are left out.
    """
    first = np.searchsorted(guide.branch, np.arange(len(ends)))
    count = np.bincount(guide.branch, minlength=len(ends))
    branch = guide.branch[guide.cell_stretch]
    along = (guide.cell_stretch - first[branch] + guide.cell_share) / count[branch]
    node = ends[branch, (along >= 0.5).astype(np.int64)]
    low, high = ends.min(axis=1), ends.max(axis=1)
    pair = low * (ends.max() + 1) + high
    by_pair = np.argsort(pair, kind="stable")
    rows, owners = [], []
    for q in range(1, 19, 2):
        at = domain.source[:, q - 1]
        behind = np.flatnonzero(at < 19 * domain.n_cells)
        before = at[behind].astype(np.int64) // 19
        apart = node[before] != node[behind]
        before, behind = before[apart], behind[apart]
        key = np.minimum(node[before], node[behind]) * (ends.max() + 1) + np.maximum(node[before], node[behind])
        place = np.minimum(np.searchsorted(pair[by_pair], key), len(pair) - 1)
        owner = by_pair[place]
        known = pair[owner] == key
        owner = np.where(pair[branch[before]] == key, branch[before], owner)
        owner = np.where(pair[branch[behind]] == key, branch[behind], owner)
        forward = node[before] == ends[owner, 0]
        one, two = np.where(forward, before, behind), np.where(forward, behind, before)
        rows.append(np.stack([one, two, np.where(forward, q, q + 1)], axis=1)[known])
        owners.append(owner[known])
    return np.concatenate(rows), np.concatenate(owners)


def _cut(branch: PlanBranch, domain: LatticeDomain, own: Ints) -> Ints:
    place, tangent, bore = middle_of(branch)
    away = domain.origin_mm + domain.h_mm * domain.cells[own] - place
    near = np.linalg.norm(away, axis=1) < CUT_BORES * bore
    own, side = own[near], away[near] @ tangent
    value = np.full(domain.n_cells, np.nan)
    value[own] = side
    behind = own[side >= 0.0]
    rows = []
    for q in range(1, 19):
        at = domain.source[behind, q - 1]
        before = at // 19
        inside = at < 19 * domain.n_cells
        cell = np.where(inside, before, 0)
        crosses = inside & (value[cell] < 0.0)
        rows.append(np.stack([cell[crosses], behind[crosses], np.full(int(crosses.sum()), q)], axis=1))
    return np.ascontiguousarray(np.concatenate(rows).astype(np.int64))


def opening_links(domain: LatticeDomain, n_openings: int) -> tuple[Ints, ...]:
    """Returns the links (k,) that leave through each opening."""
    return tuple(np.flatnonzero(domain.link_opening == row) for row in range(n_openings))
