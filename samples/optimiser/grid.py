"""The staggered grid: density, pressure and temperature in the cells, velocities on the faces between them.

Row 0 lies at the bottom, column 0 at the left. Faces are numbered in one list: first the faces
crossed by the horizontal velocity, (rows, columns + 1), then those crossed by the vertical one,
(rows + 1, columns). One cell measures `step` = 1 / rows. On a joined grid the last column's right
faces are the first column's left ones: the sheet goes all the way round and has neither left nor right edge.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Grid:
    """A grid of `rows` x `columns` square cells on a sheet one unit high; `joined` closes it into a ring."""

    rows: int
    columns: int
    joined: bool = False

    @property
    def step(self) -> float:
        """Side of a cell in sheet heights."""
        return 1.0 / self.rows

    @property
    def n_cells(self) -> int:
        """Number of cells."""
        return self.rows * self.columns

    @property
    def n_faces(self) -> int:
        """Number of faces of both directions."""
        return self.rows * self.across_columns + (self.rows + 1) * self.columns

    @property
    def across_columns(self) -> int:
        """Number of columns of faces crossed by the horizontal velocity, each counted once."""
        return self.columns if self.joined else self.columns + 1

    @property
    def sides(self) -> tuple[str, ...]:
        """The edges the sheet has."""
        return ("bottom", "top") if self.joined else ("left", "right", "bottom", "top")

    @cached_property
    def cell(self) -> Ints:
        """(rows, columns) number of each cell."""
        return np.arange(self.n_cells).reshape(self.rows, self.columns)

    @cached_property
    def across(self) -> Ints:
        """(rows, columns + 1) number of each face crossed by the horizontal velocity; joined: last = first."""
        return self.closed(np.arange(self.rows * self.across_columns).reshape(self.rows, self.across_columns))

    @cached_property
    def upward(self) -> Ints:
        """(rows + 1, columns) number of each face crossed by the vertical velocity."""
        first = self.rows * self.across_columns
        return first + np.arange((self.rows + 1) * self.columns).reshape(self.rows + 1, self.columns)

    @cached_property
    def between(self) -> Ints:
        """(rows, columns - 1) number of each face between a cell and its right neighbour; joined: (rows, columns)."""
        return self.across[:, 1:] if self.joined else self.across[:, 1:-1]

    def closed(self, numbers: Ints) -> Ints:
        """Returns numbers (n, columns), on a joined grid with the first column once more at the right."""
        return np.hstack([numbers, numbers[:, :1]]) if self.joined else numbers

    @cached_property
    def outflow(self) -> Any:
        """Sparse (n_cells, n_faces): net velocity out of each cell; +1 at its right and upper face."""
        cells = np.tile(self.cell.ravel(), 4)
        faces = np.concatenate(
            [part.ravel() for part in (self.across[:, 1:], self.upward[1:], self.across[:, :-1], self.upward[:-1])]
        )
        signs = np.repeat([1.0, 1.0, -1.0, -1.0], self.n_cells)
        return sp.csr_matrix((signs, (cells, faces)), shape=(self.n_cells, self.n_faces))

    @cached_property
    def cell_share(self) -> Any:
        """Sparse (n_faces, n_cells): half of each neighbouring cell belongs to a face."""
        return 0.5 * abs(self.outflow).T.tocsr()

    def centres(self) -> tuple[Floats, Floats]:
        """Returns x and y (rows, columns) of the cell centres in sheet heights."""
        y, x = np.meshgrid(np.arange(self.rows) + 0.5, np.arange(self.columns) + 0.5, indexing="ij")
        return x * self.step, y * self.step

    def edge_faces(self, side: str) -> Ints:
        """Returns the numbers of the faces along one edge, from the bottom or from the left.

        Raises:
            ValueError: a joined grid has no left and no right edge.
        """
        self._require_side(side)
        return np.asarray(
            {
                "left": self.across[:, 0],
                "right": self.across[:, -1],
                "bottom": self.upward[0],
                "top": self.upward[-1],
            }[side]
        )

    def edge_cells(self, side: str, depth: int = 1) -> Ints:
        """Returns the numbers (n, depth) of the cells along one edge, `depth` rows or columns inwards.

        Raises:
            ValueError: a joined grid has no left and no right edge.
        """
        self._require_side(side)
        return np.asarray(
            {
                "left": self.cell[:, :depth],
                "right": self.cell[:, -depth:],
                "bottom": self.cell[:depth].T,
                "top": self.cell[-depth:].T,
            }[side]
        )

    def _require_side(self, side: str) -> None:
        if side not in self.sides:
            raise ValueError(f"side: expected one of {', '.join(self.sides)}, found {side}")


@dataclass(frozen=True)
class Opening:
    """A stretch of the sheet's edge through which coolant may pass, held at a pressure.

    Args:
        side: "left", "right", "bottom" or "top".
        low, high: the stretch as fractions of the side, from the bottom or from the left.
        pressure: dimensionless, 1 for a feed and 0 for a return.
    """

    side: str
    low: float
    high: float
    pressure: float

    def faces(self, grid: Grid) -> Ints:
        """Returns the numbers of the boundary faces in this stretch."""
        edge = grid.edge_faces(self.side)
        return np.asarray(edge[self._span(edge.size)])

    def cells(self, grid: Grid, depth: int) -> Ints:
        """Returns the numbers of the cells in this stretch, `depth` rows or columns inwards."""
        strip = grid.edge_cells(self.side, depth)
        return np.asarray(strip[self._span(len(strip))].ravel())

    @property
    def inwards(self) -> float:
        """+1 where a positive velocity enters the sheet, -1 where it leaves."""
        return 1.0 if self.side in {"left", "bottom"} else -1.0

    def _span(self, n: int) -> slice:
        return slice(round(self.low * n), round(self.high * n))
