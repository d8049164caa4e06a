"""Laying the sheet on a surface: a small core by straight walks, then grown outwards and relaxed level by level.

The first core is the exponential map of the surface at the anchor. Every further level walks on from the rim of
the relaxed one, along the rim's own frame, so that the sheet never has to be unfolded from far off.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints
from morph.core.progress import SILENT, Progress
from morph.geometry.surface import Places, Surface, walk
from morph.surface.relax import Heading, relax
from morph.surface.sheet_grid import SheetGrid

LEVELS = (0.25, 0.4, 0.55, 0.7, 0.85, 1.0)
"""Shares of the sheet laid one after another."""
RIM_CELLS = 3
"""The frame of the rim is taken over this many cells."""
ROUNDS, LAST_ROUNDS = 8, 40
SETTLED, LAST_SETTLED = 1e-2, 1e-7


class LeavesSurface(Exception):
    """The sheet reaches the border of the surface.

    Args:
        sheet_mm: (k, 2) from the sheet's centre, the nodes that found no surface.
        xyz_mm: (k, 3) where their walks ended.
        left_mm: (k,) what was left to go.
        lost: True when a walk ran in circles instead.
    """

    def __init__(self, sheet_mm: Floats, xyz_mm: Floats, left_mm: Floats, lost: bool) -> None:
        self.sheet_mm, self.xyz_mm, self.left_mm, self.lost = sheet_mm, xyz_mm, left_mm, lost
        super().__init__("the sheet leaves the surface")


@dataclass(frozen=True, slots=True, eq=False)
class _Laid:
    grid: SheetGrid
    places: Places


def lay_sheet(
    surface: Surface,
    grid: SheetGrid,
    anchor: Places,
    heading: Heading,
    levels: tuple[float, ...] = LEVELS,
    progress: Progress = SILENT,
) -> Places:
    """Returns the places of all nodes of `grid` on `surface`, at rest.

    Args:
        surface: what the sheet lies on.
        grid: the whole sheet.
        anchor: the one place of its centre.
        heading: the directions of sheet x and y there.
        levels: shares of the sheet, rising to 1.
        progress: told after every level.

    Raises:
        LeavesSurface: the surface ends before the sheet does.
    """
    laid: _Laid | None = None
    for k, share in enumerate(levels):
        part = grid.core(share) if share < 1.0 else grid
        places = exponential_map(surface, part, anchor, heading) if laid is None else _grown(surface, laid, part)
        last = share >= 1.0
        places = relax(
            surface,
            part,
            places,
            heading,
            rounds=LAST_ROUNDS if last else ROUNDS,
            settled=LAST_SETTLED if last else SETTLED,
        )
        laid = _Laid(part, places)
        progress.step("lay sheet", k + 1, len(levels))
    assert laid is not None  # levels are never empty
    return laid.places


def exponential_map(surface: Surface, part: SheetGrid, anchor: Places, heading: Heading) -> Places:
    """Returns where straight walks from the anchor end, one for each node of `part`: radii kept, circles not.

    Raises:
        LeavesSurface: the surface ends before a walk does.
    """
    flat = part.flat_mm()
    n = len(flat)
    start = Places(np.repeat(anchor.triangle, n), np.repeat(anchor.xyz_mm, n, axis=0))
    return _walk_all(surface, part, start, flat[:, :1] * heading.x + flat[:, 1:] * heading.y)


def _grown(surface: Surface, laid: _Laid, part: SheetGrid) -> Places:
    """Returns the places of the larger grid `part`: the laid nodes, and walks from the laid rim beyond it."""
    old = laid.grid
    columns, rows = np.arange(part.nx) - part.left, np.arange(part.ny) - part.below
    i = np.repeat(columns + old.left, part.ny)
    j = np.tile(rows + old.below, part.nx)
    ci = np.clip(i, 0, old.nx - 1)
    cj = np.clip(j, 0, old.ny - 1)
    point = laid.places.xyz_mm.reshape(old.nx, old.ny, 3)
    across, up = _rim_frame(point, ci, cj, old)
    step = ((i - ci) * old.dx_mm)[:, None] * across + ((j - cj) * old.dy_mm)[:, None] * up
    flat_step = np.hypot((i - ci) * old.dx_mm, (j - cj) * old.dy_mm)
    length = np.linalg.norm(step, axis=1)
    step *= (flat_step / np.where(length > 0.0, length, 1.0))[:, None]
    triangle = laid.places.triangle.reshape(old.nx, old.ny)
    return _walk_all(surface, part, Places(triangle[ci, cj], point[ci, cj]), step)


def _rim_frame(point: Floats, i: Ints, j: Ints, grid: SheetGrid) -> tuple[Floats, Floats]:
    """Returns d/dx and d/dy (k, 3) of the laid points (nx, ny, 3) at nodes (i, j), one-sided at the rim."""
    i0, i1 = np.clip(i - RIM_CELLS, 0, grid.nx - 1), np.clip(i + RIM_CELLS, 0, grid.nx - 1)
    j0, j1 = np.clip(j - RIM_CELLS, 0, grid.ny - 1), np.clip(j + RIM_CELLS, 0, grid.ny - 1)
    across = (point[i1, j] - point[i0, j]) / ((i1 - i0) * grid.dx_mm)[:, None]
    up = (point[i, j1] - point[i, j0]) / ((j1 - j0) * grid.dy_mm)[:, None]
    return across, up


def _walk_all(surface: Surface, part: SheetGrid, start: Places, step: Floats) -> Places:
    ends, left, outcome = walk(surface, start, step)
    if outcome.any():
        stopped = np.flatnonzero(outcome)
        raise LeavesSurface(part.flat_mm()[stopped], ends.xyz_mm[stopped], left[stopped], bool((outcome == 2).any()))
    return ends
