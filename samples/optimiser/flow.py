"""Stokes flow through metal and coolant alike, the metal resisting it (Brinkman penalty).

Per face of the staggered grid: viscous exchange with the four neighbouring faces, drag in
proportion to the velocity, and the pressure difference of the two cells. Unknowns are the face
velocities and the cell pressures; viscosity is 1. The drag falls with the density g as

    drag(g) = greatest q (1 - g) / (q + g)

(Borrvall and Petersson 2003, eq. 19 in form): convex, and steeper in the coolant the smaller q is.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as sla

from optimiser.grid import Floats, Grid, Ints, Opening

# The factorised cells may swell by this share of their pressure (in units of step^2), which lets the
# factorisation run without row exchanges; refinement with the exact equations takes the swelling out again.
COMPRESSIBILITY = 1e-7
REFINEMENTS = 3


def measure_drag(density: Floats, greatest: float, convexity: float) -> tuple[Floats, Floats]:
    """Returns drag and its derivative for `density` 0..1; see the head of the file for the law.

    >>> measure_drag(np.array([0.0, 1.0]), 1e6, 0.1)[0].tolist()
    [1000000.0, 0.0]
    """
    below = convexity + density
    drag = greatest * convexity * (1.0 - density) / below
    slope = -greatest * convexity * (1.0 + convexity) / below**2
    return drag, slope


@dataclass(frozen=True)
class FlowSolution:
    """A flow field and the equations it came from.

    Args:
        velocity: (n_faces,).
        free: (k,) numbers of the faces that are not walls.
        matrix: exact equations for the velocities at free faces and the pressures.
        factor: their factorisation with slightly swelling cells.
    """

    velocity: Floats
    free: Ints
    matrix: Any
    factor: Any

    def adjoint(self, load: Floats) -> Floats:
        """Returns the adjoint velocity (n_faces,) for the load d objective / d velocity (n_faces,)."""
        return _solve_refined(self.matrix, self.factor, self.free, -load)


class StokesFlow:
    """The flow equations on one grid with given openings; everywhere else the edge is a wall."""

    def __init__(self, grid: Grid, openings: tuple[Opening, ...]) -> None:
        self.grid = grid
        fixed = np.zeros(grid.n_faces, dtype=bool)
        for side in grid.sides:
            fixed[grid.edge_faces(side)] = True
        self.load = np.zeros(grid.n_faces)
        for opening in openings:
            faces = opening.faces(grid)
            fixed[faces] = False
            self.load[faces] = opening.inwards * opening.pressure * grid.step
        self.free: Ints = np.flatnonzero(~fixed)
        self.viscous = _viscous_exchange(grid)[self.free][:, self.free]
        self.squeeze = grid.step * grid.outflow[:, self.free]

    def solve(self, drag: Floats) -> FlowSolution:
        """Returns the flow for a drag per cell (n_cells,)."""
        area = self.grid.step**2
        face_drag = (self.grid.cell_share @ drag)[self.free] * area
        momentum = self.viscous + sp.diags(face_drag)
        swell = sp.eye(self.grid.n_cells) * (-COMPRESSIBILITY * area)
        exact = sp.bmat([[momentum, -self.squeeze.T], [-self.squeeze, 0.0 * swell]], format="csc")
        relaxed = sp.bmat([[momentum, -self.squeeze.T], [-self.squeeze, swell]], format="csc")
        factor = sla.splu(relaxed, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
        velocity = _solve_refined(exact, factor, self.free, self.load)
        return FlowSolution(velocity, self.free, exact, factor)

    def drag_gradient(self, velocity: Floats, adjoint: Floats) -> Floats:
        """Returns d objective / d drag (n_cells,) from the flow and its adjoint, both (n_faces,)."""
        return np.asarray(self.grid.cell_share.T @ (velocity * adjoint)) * self.grid.step**2


def _solve_refined(matrix: Any, factor: Any, free: Ints, load: Floats) -> Floats:
    """Returns the velocities (n_faces,) under a load (n_faces,) by iterative refinement."""
    right = np.zeros(matrix.shape[0])
    right[: free.size] = load[free]
    found = factor.solve(right)
    for _ in range(REFINEMENTS):
        found += factor.solve(right - matrix @ found)
    velocity = np.zeros(load.size)
    velocity[free] = found[: free.size]
    return velocity


def _viscous_exchange(grid: Grid) -> Any:
    """Returns the sparse (n_faces, n_faces) matrix of viscous forces; walls lie half a cell off (weight 2)."""
    across, upward = grid.across, grid.upward
    own, beside = across[:, : grid.across_columns], grid.closed(upward)
    half_columns = np.ones(grid.across_columns)
    half_rows = np.ones((grid.rows + 1, 1))
    half_rows[[0, -1]] = 0.5
    walls = [own[0], own[-1]]
    if not grid.joined:
        half_columns[[0, -1]] = 0.5
        walls += [upward[:, 0], upward[:, -1]]
    links = [
        (across[:, :-1], across[:, 1:], 1.0),
        (own[:-1], own[1:], half_columns),
        (upward[:-1], upward[1:], 1.0),
        (beside[:, :-1], beside[:, 1:], half_rows),
    ]
    rows, columns, weights = [], [], []
    for one, other, weight in links:
        a, b, w = one.ravel(), other.ravel(), np.broadcast_to(weight, one.shape).ravel()
        rows += [a, b, a, b]
        columns += [a, b, b, a]
        weights += [w, w, -w, -w]
    for wall in walls:
        rows.append(wall)
        columns.append(wall)
        weights.append(np.full(wall.size, 2.0))
    entries = (np.concatenate(weights), (np.concatenate(rows), np.concatenate(columns)))
    return sp.csr_matrix(entries, shape=(grid.n_faces, grid.n_faces))
