"""The regular grid that stands for the sheet while it is laid on a free-form surface.

Node (i, j) has the number i * ny + j; its flat place is measured from the sheet's centre, which is a node.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints

CELL_MM, FINE_CELL_MM = 2.0, 0.8
"""Edge of a cell: a cubic spline over 2 mm follows a radius of 20 mm at depth to about 2e-4 mm; 0.8 mm follows 4 mm."""
FEWEST_CELLS, MOST_CELLS, MOST_FINE_CELLS = 16, 96, 144
"""Cells along one side: fewer do not carry a cubic spline well, more do not pay."""


@dataclass(frozen=True, slots=True)
class SheetGrid:
    """A grid of `nx` x `ny` nodes (both odd) over a part of the sheet about its centre, cells `dx_mm` x `dy_mm`.

    `left` and `below` count the nodes before the centre.
    """

    nx: int
    ny: int
    dx_mm: float
    dy_mm: float
    left: int
    below: int

    @property
    def centre(self) -> int:
        """Returns the number of the node on the sheet's centre."""
        return self.left * self.ny + self.below

    def x_mm(self) -> Floats:
        """Returns the x (nx,) of the columns from the sheet's centre."""
        return np.asarray((np.arange(self.nx) - self.left) * self.dx_mm, dtype=np.float64)

    def y_mm(self) -> Floats:
        """Returns the y (ny,) of the rows from the sheet's centre."""
        return np.asarray((np.arange(self.ny) - self.below) * self.dy_mm, dtype=np.float64)

    def flat_mm(self) -> Floats:
        """Returns the flat places (nx * ny, 2) of the nodes from the sheet's centre."""
        x, y = np.meshgrid(self.x_mm(), self.y_mm(), indexing="ij")
        return np.column_stack([x.ravel(), y.ravel()])

    def numbers(self) -> Ints:
        """Returns the node numbers (nx, ny)."""
        return np.arange(self.nx * self.ny, dtype=np.int64).reshape(self.nx, self.ny)

    def core(self, share: float) -> SheetGrid:
        """Returns the grid over the middle `share` of the sheet, at least two cells to each side."""
        i = min(self.left, max(2, int(np.ceil(share * self.left))))
        j = min(self.below, max(2, int(np.ceil(share * self.below))))
        return SheetGrid(2 * i + 1, 2 * j + 1, self.dx_mm, self.dy_mm, i, j)


def make_grid(size_mm: tuple[float, float], *, fine: bool = False) -> SheetGrid:
    """Returns the grid over a sheet of this size, an even number of cells each way; `fine` for tight radii."""
    cell = max(FINE_CELL_MM, max(size_mm) / MOST_FINE_CELLS) if fine else max(CELL_MM, max(size_mm) / MOST_CELLS)
    n_x, n_y = (2 * max(round(side / cell / 2.0), FEWEST_CELLS // 2) for side in size_mm)
    return SheetGrid(n_x + 1, n_y + 1, size_mm[0] / n_x, size_mm[1] / n_y, n_x // 2, n_y // 2)
