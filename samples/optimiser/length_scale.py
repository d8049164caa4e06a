"""What keeps channels neither too thin nor too wide: cone filter, projection, local coolant share.

* Cone filter: each cell takes the mean of its surroundings with weights falling linearly to zero.
* Projection: a smooth step about 0.5 that pushes grey towards metal or coolant (F. Wang, B. Lazarov
  and O. Sigmund, Struct. Multidisc. Optim. 43, 2011).
* Local coolant share: no disc may hold more than a given share of coolant, which breaks wide
  channels into many narrow ones (after J. Wu, N. Aage, R. Westermann and O. Sigmund, "Infill
  optimization for additive manufacturing", IEEE Trans. Vis. Comput. Graph. 24, 2018).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp

from optimiser.grid import Floats, Grid


def make_filter(grid: Grid, radius: float, *, flat: bool = False) -> Any:
    """Returns the sparse (n_cells, n_cells) averaging matrix whose rows add up to 1; a joined grid has no seam.

    Args:
        grid: the cells.
        radius: reach in cells.
        flat: equal weights in the disc instead of a cone.

    Raises:
        ValueError: the disc would overlap itself round a joined grid.
    """
    reach = int(np.ceil(radius))
    if grid.joined and 2 * reach + 1 > grid.columns:
        raise ValueError(f"radius: expected less than half a turn of {grid.columns} cells, found {radius}")
    number = grid.cell
    rows, columns, weights = [], [], []
    for down in range(-reach, reach + 1):
        for right in range(-reach, reach + 1):
            weight = radius - np.hypot(down, right)
            if weight <= 0.0:
                continue
            here, there = number[_shift(down, grid.rows)], number[_shift(-down, grid.rows)]
            if grid.joined:
                there = np.roll(there, right, axis=1)
            else:
                here, there = here[:, _shift(right, grid.columns)], there[:, _shift(-right, grid.columns)]
            rows.append(here.ravel())
            columns.append(there.ravel())
            weights.append(np.full(here.size, 1.0 if flat else weight))
    entries = (np.concatenate(weights), (np.concatenate(rows), np.concatenate(columns)))
    matrix = sp.csr_matrix(entries, shape=(grid.n_cells, grid.n_cells))
    return sp.diags(1.0 / np.asarray(matrix.sum(axis=1)).ravel()) @ matrix


def _shift(by: int, n: int) -> slice:
    return slice(max(0, -by), n - max(0, by))


def project(density: Floats, sharpness: float) -> tuple[Floats, Floats]:
    """Returns the projected density and its derivative; `sharpness` 0 changes nothing.

    >>> project(np.array([0.0, 0.5, 1.0]), 4.0)[0].round(12).tolist()
    [0.0, 0.5, 1.0]
    """
    if sharpness == 0.0:
        return density.copy(), np.ones_like(density)
    half = np.tanh(0.5 * sharpness)
    step = np.tanh(sharpness * (density - 0.5))
    return (half + step) / (2.0 * half), sharpness * (1.0 - step**2) / (2.0 * half)


def measure_local_share(density: Floats, disc: Any, power: float) -> tuple[float, Floats]:
    """Returns the power mean of the coolant share in the disc about every cell, and its gradient.

    Args:
        density: (n_cells,) 0..1.
        disc: averaging matrix from `make_filter(..., flat=True)`.
        power: the higher, the closer the mean comes to the largest share.
    """
    share = disc @ density
    mean = float(np.mean(share**power) ** (1.0 / power))
    by_share = mean ** (1.0 - power) * share ** (power - 1.0) / share.size
    return mean, np.asarray(disc.T @ by_share)
