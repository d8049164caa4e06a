"""Steady heat: conduction in metal and coolant, convection with the flow, a heat load per cell.

Finite volumes: conduction by the mean conductivity of two cells, convection by the temperature of
the upstream cell (first-order upwind). Coolant enters at temperature 0; the edge is insulated.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as sla

from optimiser.grid import Floats, Grid


@dataclass(frozen=True)
class HeatSolution:
    """Temperatures `(n_cells,)` and the factorised equations they came from."""

    temperature: Floats
    factor: Any

    def adjoint(self, load: Floats) -> Floats:
        """Returns the adjoint temperature (n_cells,) for d objective / d temperature (n_cells,)."""
        return np.asarray(-self.factor.solve(load, trans="T"))


class HeatTransport:
    """The heat equation on one grid.

    Args:
        grid: the cells.
        load: (n_cells,) heat per cell.
        capacity: heat carried per velocity, face length and temperature.
    """

    def __init__(self, grid: Grid, load: Floats, capacity: float) -> None:
        cell, beside = grid.cell, grid.closed(grid.cell)
        self.grid, self.load = grid, load
        self.scale = capacity * grid.step
        self.low = np.concatenate([beside[:, :-1].ravel(), cell[:-1].ravel()])
        self.high = np.concatenate([beside[:, 1:].ravel(), cell[1:].ravel()])
        self.inner = np.concatenate([grid.between.ravel(), grid.upward[1:-1].ravel()])
        self.edge = np.concatenate([grid.edge_faces(side) for side in grid.sides])
        self.edge_cell = np.concatenate([grid.edge_cells(side).ravel() for side in grid.sides])
        outwards = [-1.0 if side in {"left", "bottom"} else 1.0 for side in grid.sides]
        self.edge_sign = np.repeat(outwards, [grid.edge_faces(side).size for side in grid.sides])

    def solve(self, conductivity: Floats, velocity: Floats) -> HeatSolution:
        """Returns the temperatures for a conductivity per cell (n_cells,) and face velocities (n_faces,)."""
        low, high, n = self.low, self.high, self.grid.n_cells
        exchange = 0.5 * (conductivity[low] + conductivity[high])
        carried = self.scale * velocity[self.inner]
        leaving = np.maximum(self.scale * velocity[self.edge] * self.edge_sign, 0.0)
        upstream = self._upstream(velocity)
        rows = np.concatenate([low, low, high, high, low, high, self.edge_cell])
        columns = np.concatenate([low, high, high, low, upstream, upstream, self.edge_cell])
        weights = np.concatenate([exchange, -exchange, exchange, -exchange, carried, -carried, leaving])
        factor = sla.splu(sp.csc_matrix((weights, (rows, columns)), shape=(n, n)), permc_spec="MMD_AT_PLUS_A")
        return HeatSolution(np.asarray(factor.solve(self.load)), factor)

    def gradients(self, temperature: Floats, adjoint: Floats, velocity: Floats) -> tuple[Floats, Floats]:
        """Returns d objective / d conductivity (n_cells,) and / d velocity (n_faces,)."""
        low, high, n = self.low, self.high, self.grid.n_cells
        jump = adjoint[low] - adjoint[high]
        by_exchange = 0.5 * jump * (temperature[low] - temperature[high])
        by_conductivity = np.bincount(low, by_exchange, n) + np.bincount(high, by_exchange, n)
        by_velocity = np.zeros(self.grid.n_faces)
        by_velocity[self.inner] = self.scale * temperature[self._upstream(velocity)] * jump
        out = velocity[self.edge] * self.edge_sign > 0.0
        heat = self.scale * self.edge_sign * temperature[self.edge_cell] * adjoint[self.edge_cell]
        by_velocity[self.edge[out]] = heat[out]
        return by_conductivity, by_velocity

    def _upstream(self, velocity: Floats) -> Any:
        return np.where(velocity[self.inner] > 0.0, self.low, self.high)
