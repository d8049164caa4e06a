"""What holds the laid sheet together: stretch of every grid edge, shear of every cell.

The strain of an edge is arc length over flat length minus 1. The shear of a cell is the difference of the
strains of its two diagonals, scaled so that the energy of a cell is the sum of squares of its principal
length errors to first order: exactly what the rms length error counts. (Plain springs on edges and diagonals
also resist a change of area; they gave up to 1.3 times the rms error on the same bodies.)
An arc is its chord times 1 + (turn of the normal along it)^2 / 24.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints
from morph.surface.sheet_grid import SheetGrid


@dataclass(frozen=True, slots=True, eq=False)
class Springs:
    """The springs of a grid.

    Args:
        ends: (s, 2) node numbers: all edges, then the rising and then the falling diagonals, one of each per cell.
        flat_mm: (s,) their lengths on the flat sheet.
        n_edges: how many are edges.
        edge_cells: (n_edges, 2) the cells beside each edge, n_cells where there is none.
        shear_scale: turns the difference of the two diagonal strains of a cell into its shear.
    """

    ends: Ints
    flat_mm: Floats
    n_edges: int
    edge_cells: Ints
    shear_scale: float

    @property
    def n_cells(self) -> int:
        """Returns the number of cells."""
        return (len(self.ends) - self.n_edges) // 2


@dataclass(frozen=True, slots=True, eq=False)
class Stretched:
    """Springs in place: chords (s, 3), arc lengths (s,) and the strains of edges and shears of cells in one row."""

    chord_mm: Floats
    arc_mm: Floats
    residual: Floats


def make_springs(grid: SheetGrid) -> Springs:
    """Returns the springs of `grid`."""
    number = grid.numbers()
    cell = np.arange((grid.nx - 1) * (grid.ny - 1), dtype=np.int64).reshape(grid.nx - 1, grid.ny - 1)
    none = len(cell.ravel())
    wide = np.pad(cell, 1, constant_values=none)
    along = np.column_stack([number[:-1].ravel(), number[1:].ravel()])
    up = np.column_stack([number[:, :-1].ravel(), number[:, 1:].ravel()])
    rising = np.column_stack([number[:-1, :-1].ravel(), number[1:, 1:].ravel()])
    falling = np.column_stack([number[1:, :-1].ravel(), number[:-1, 1:].ravel()])
    beside = np.concatenate(
        [
            np.column_stack([wide[1:-1, :-1].ravel(), wide[1:-1, 1:].ravel()]),
            np.column_stack([wide[:-1, 1:-1].ravel(), wide[1:, 1:-1].ravel()]),
        ]
    )
    diagonal = float(np.hypot(grid.dx_mm, grid.dy_mm))
    flat = np.concatenate(
        [np.full(len(along), grid.dx_mm), np.full(len(up), grid.dy_mm), np.full(2 * len(rising), diagonal)]
    )
    return Springs(
        ends=np.concatenate([along, up, rising, falling]),
        flat_mm=flat,
        n_edges=len(along) + len(up),
        edge_cells=beside,
        shear_scale=float(np.sqrt(2.0)) * diagonal**2 / (4.0 * grid.dx_mm * grid.dy_mm),
    )


def stretch(springs: Springs, points_mm: Floats, normals: Floats) -> Stretched:
    """Returns the springs between nodes at points (n, 3) with surface normals (n, 3)."""
    one, two = springs.ends.T
    chord = points_mm[two] - points_mm[one]
    length = np.linalg.norm(chord, axis=1)
    turn = ((normals[two] - normals[one]) * chord).sum(axis=1) / np.where(length > 0.0, length, 1.0)
    arc = length * (1.0 + turn**2 / 24.0)
    strain = arc / springs.flat_mm - 1.0
    rising, falling = strain[springs.n_edges :].reshape(2, -1)
    shear = springs.shear_scale * (rising - falling)
    return Stretched(chord, arc, np.concatenate([strain[: springs.n_edges], shear]))


def cell_energy(springs: Springs, residual: Floats) -> Floats:
    """Returns the sum of squares of the principal length errors of each cell (c,), to first order."""
    square = residual**2
    total = square[springs.n_edges :].copy()
    for side in range(2):
        cells = springs.edge_cells[:, side]
        total += 0.5 * np.bincount(cells, square[: springs.n_edges], springs.n_cells + 1)[:-1]
    return np.asarray(total, dtype=np.float64)


def spring_weights(springs: Springs, cell_weight: Floats) -> Floats:
    """Returns the weights of edges and shears in one row, for a weight of each cell (c,)."""
    padded = np.append(cell_weight, 0.0)
    return np.concatenate([0.5 * padded[springs.edge_cells].sum(axis=1), cell_weight])
