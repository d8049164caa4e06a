"""The heat each branch collects: every place of the sheet gives its flux to the nearest channel with through-flow."""

from __future__ import annotations

import numpy as np

from morph.body.plan import BranchKind, ChannelPlan
from morph.core.arrays import Floats
from morph.layout.density import Density

CELLS_ALONG = 400
"""Places along the longer side of the sheet where no image of the flux is given."""


def branch_heat(
    plan: ChannelPlan, size_mm: tuple[float, float], turn_mm: float | None = None, flux: Density | None = None
) -> Floats:
    """Returns the heat (m,) each branch of the plan collects, as shares of the whole; 0 for leads and blind branches.

    Args:
        plan: the channels.
        size_mm: of the sheet.
        turn_mm: width after which the sheet repeats, None on an open sheet.
        flux: heat flux on the sheet in any unit, None: the same everywhere.

    Raises:
        ValueError: no channel has through-flow.
    """
    from scipy.spatial import KDTree

    points, owner = [], []
    for k, branch in enumerate(plan.branches):
        if branch.kind is BranchKind.CHANNEL and branch.through_flow and branch.sheet_mm is not None:
            points.append(branch.sheet_mm)
            owner.append(np.full(len(branch.sheet_mm), k))
    if not points:
        raise ValueError("plan: expected a channel with through-flow")
    place, branch_of = np.concatenate(points), np.concatenate(owner)
    if turn_mm is not None:
        shift = np.array([turn_mm, 0.0])
        place, branch_of = np.concatenate([place - shift, place, place + shift]), np.tile(branch_of, 3)
    at, weight = _places(size_mm, flux)
    nearest = branch_of[KDTree(place).query(at)[1]]
    heat = np.bincount(nearest, weight, len(plan.branches))
    return np.asarray(heat / heat.sum(), dtype=np.float64)


def _places(size_mm: tuple[float, float], flux: Density | None) -> tuple[Floats, Floats]:
    """Returns places (k, 2) on the sheet and the heat (k,) each stands for."""
    if flux is None:
        pitch = max(size_mm) / CELLS_ALONG
        n_x, n_y = (max(round(side / pitch), 1) for side in size_mm)
        x, y = (np.arange(n_x) + 0.5) * size_mm[0] / n_x, (np.arange(n_y) + 0.5) * size_mm[1] / n_y
        weight = np.ones(n_x * n_y)
    else:
        rows, columns = flux.value.shape
        x = flux.first_mm[0] + np.arange(columns, dtype=np.float64) * flux.pitch_mm[0]
        y = flux.first_mm[1] + np.arange(rows, dtype=np.float64) * flux.pitch_mm[1]
        weight = np.asarray(flux.value, dtype=np.float64).ravel()
    grid_x, grid_y = np.meshgrid(x, y)
    return np.column_stack([grid_x.ravel(), grid_y.ravel()]), weight
