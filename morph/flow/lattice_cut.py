"""Cuts across the channels on which the lattice's flow is counted.

A cut is the set of links from cells before a plane to cells behind it, the plane square to a branch at the middle of
its length and limited to the cells that stand on that branch near by. The lattice keeps mass link by link,
so that the sum over a cut is the flow itself, without interpolation.
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
    of_branch = guide.branch[guide.cell_stretch]
    order = np.argsort(of_branch, kind="stable")
    bounds = np.searchsorted(of_branch[order], np.arange(len(plan.branches) + 1))
    return tuple(_cut(branch, domain, order[bounds[row] : bounds[row + 1]]) for row, branch in enumerate(plan.branches))


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
