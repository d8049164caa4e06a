"""Shapes along the branches that the pictures share: which branches lie on the sheet, bands, middles."""

from __future__ import annotations

import numpy as np

from morph.body.plan import BranchKind, ChannelPlan, PlanBranch
from morph.core.arrays import Floats


def sheet_branches(plan: ChannelPlan) -> list[PlanBranch]:
    """Returns the channels, which lie on the sheet; leads do not."""
    return [b for b in plan.branches if b.kind is BranchKind.CHANNEL and b.sheet_mm is not None]


def sheet_of(branch: PlanBranch) -> Floats:
    """Returns the sheet points (k, 2) of a channel.

    Raises:
        ValueError: it is a lead.
    """
    if branch.sheet_mm is None:
        raise ValueError(f"branch {branch.id} does not lie on the sheet")
    return branch.sheet_mm


def band_edges_mm(points_mm: Floats, width_mm: Floats) -> tuple[Floats, Floats]:
    """Returns the left and right edge (k, 2) of a band of `width_mm (k,)` around the line `points_mm (k, 2)`."""
    step = np.gradient(points_mm, axis=0) if len(points_mm) > 1 else np.array([[1.0, 0.0]])
    length = np.linalg.norm(step, axis=1, keepdims=True)
    step = step / np.where(length > 0.0, length, 1.0)
    side = np.column_stack([-step[:, 1], step[:, 0]]) * (0.5 * width_mm[:, None])
    return points_mm + side, points_mm - side


def middle_index(points_mm: Floats) -> int:
    """Returns the index of the sample nearest to half the length of the line `points_mm (k, d)`."""
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points_mm, axis=0), axis=1))])
    return int(np.argmin(np.abs(along - 0.5 * along[-1])))
