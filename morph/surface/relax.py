"""Relaxing a laid grid: nodes slide over the surface until the springs hold least energy.

Gauss-Newton in the tangent planes, each step walked over the mesh. The node on the sheet's centre is held; the
heading is held by one definition: the mean tangent frame over a small disc at the centre does not turn. With a
power above 2 the sum of cell energies to power / 2 is minimised (iteratively reweighted), which presses on the
worst cells: the min-max step.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints, unit_rows
from morph.geometry.surface import Places, Surface, smooth_normals, walk
from morph.surface.sheet_grid import SheetGrid
from morph.surface.springs import Springs, Stretched, cell_energy, make_springs, spring_weights, stretch

HEADING_DISC_MM = 6.0
"""Radius of the disc whose mean frame is the heading."""
HELD = 1e6
"""Weight of the held node over the stiffest other one."""
WEIGHT_FLOOR = 1e-4
"""Least weight of a cell in the min-max step, so that calm cells keep their shape."""


@dataclass(frozen=True, slots=True, eq=False)
class Heading:
    """The directions (3,) of sheet x and y that the mean frame at the centre keeps."""

    x: Floats
    y: Floats


@dataclass(frozen=True, slots=True, eq=False)
class _State:
    places: Places
    normals: Floats
    stretched: Stretched
    energy: float


@dataclass(frozen=True, slots=True, eq=False)
class _Frame:
    """Tangents one, two (n, 3) of the nodes, and the band numbers (n,) that keep the matrix narrow."""

    one: Floats
    two: Floats
    number: Ints


def relax(
    surface: Surface,
    grid: SheetGrid,
    places: Places,
    heading: Heading,
    *,
    power: float = 2.0,
    rounds: int = 30,
    settled: float = 1e-7,
) -> Places:
    """Returns the places of the nodes after relaxing.

    Args:
        surface: what the sheet lies on.
        grid: the sheet.
        places: where its nodes are now.
        heading: what the mean frame at the centre keeps.
        power: 2 for least rms; above, for least worst error.
        rounds: most Gauss-Newton rounds.
        settled: stop when a round lowers the energy by less than this share.
    """
    springs = make_springs(grid)
    disc = _disc_rows(grid)
    number = _band_numbers(grid)
    scale = 1.0
    state = _state(surface, springs, places, power, scale)
    if power > 2.0:
        scale = max(float(cell_energy(springs, state.stretched.residual).max()), 1e-30)
        state = _state(surface, springs, places, power, scale)
    damping = 1e-7
    for _ in range(rounds):
        frame = _tangent_frame(state.normals, number)
        step = _step(springs, grid, state, frame, disc, heading, power, scale, damping)
        moved, share = None, 1.0 if power <= 2.0 else 2.0 / power
        for _ in range(7):
            ends, _, outcome = walk(surface, state.places, share * step)
            if not outcome.any():
                moved = _state(surface, springs, ends, power, scale)
                if moved.energy < state.energy:
                    break
            moved, share = None, 0.5 * share
        if moved is None:
            break
        gained = (state.energy - moved.energy) / state.energy
        state = moved
        if gained < settled:
            break
    return state.places


def _state(surface: Surface, springs: Springs, places: Places, power: float, scale: float) -> _State:
    normals = smooth_normals(surface, places)
    stretched = stretch(springs, places.xyz_mm, normals)
    energy = cell_energy(springs, stretched.residual) / scale
    return _State(places, normals, stretched, float((energy ** (0.5 * power)).sum()) + 1e-300)


def _tangent_frame(normals: Floats, number: Ints) -> _Frame:
    away = np.where(np.abs(normals[:, :1]) < 0.7, [[1.0, 0.0, 0.0]], [[0.0, 1.0, 0.0]])
    one = unit_rows(np.cross(normals, away))
    return _Frame(one, np.cross(normals, one), number)


def _band_numbers(grid: SheetGrid) -> Ints:
    """Returns the order (n,) of the nodes in the matrix: along the shorter side first."""
    number = np.empty((grid.nx, grid.ny), dtype=np.int64)
    if grid.ny <= grid.nx:
        number[:] = np.arange(grid.nx * grid.ny).reshape(grid.nx, grid.ny)
    else:
        number[:] = np.arange(grid.nx * grid.ny).reshape(grid.ny, grid.nx).T
    return number.ravel()


def _disc_rows(grid: SheetGrid) -> tuple[Floats, Floats]:
    """Returns weights (n,), (n,): times the node positions they sum to the mean d/dx, d/dy over the heading disc."""
    number, flat = grid.numbers(), grid.flat_mm()
    across, up = np.zeros(len(flat)), np.zeros(len(flat))
    reach = max(HEADING_DISC_MM, 1.01 * max(grid.dx_mm, grid.dy_mm))
    for weights, one, two, cell in (
        (across, number[:-1].ravel(), number[1:].ravel(), grid.dx_mm),
        (up, number[:, :-1].ravel(), number[:, 1:].ravel(), grid.dy_mm),
    ):
        middle = 0.5 * (flat[one] + flat[two])
        inside = np.linalg.norm(middle, axis=1) <= reach
        share = 1.0 / (np.count_nonzero(inside) * cell)
        np.add.at(weights, two[inside], share)
        np.add.at(weights, one[inside], -share)
    return across, up


def _step(
    springs: Springs,
    grid: SheetGrid,
    state: _State,
    frame: _Frame,
    disc: tuple[Floats, Floats],
    heading: Heading,
    power: float,
    scale: float,
    damping: float,
) -> Floats:
    """Returns the Gauss-Newton step (n, 3) in the tangent planes that keeps centre and heading."""
    from scipy.linalg import solveh_banded

    energy = cell_energy(springs, state.stretched.residual) / scale
    cell_weight = energy ** (0.5 * power - 1.0) + (WEIGHT_FLOOR if power > 2.0 else 0.0)
    jacobian = _spring_jacobian(springs, state, frame)
    weight = spring_weights(springs, cell_weight if power > 2.0 else np.ones_like(energy))
    slope = jacobian.T @ (weight * state.stretched.residual)
    stiff = _lower_band((jacobian.T @ jacobian.multiply(weight[:, None])).tocoo())
    largest = float(stiff[0].max())
    stiff[0] += damping * largest
    held = 2 * frame.number[grid.centre]
    stiff[0, held : held + 2] += HELD * largest
    # rotation of the mean frame: d/dy seen along x less d/dx seen along y, both zero when the heading is kept
    across, up = disc
    lever = np.outer(up, heading.x) - np.outer(across, heading.y)
    turned = float((lever * state.places.xyz_mm).sum())
    row = np.empty(len(slope))
    row[2 * frame.number] = (lever * frame.one).sum(axis=1)
    row[2 * frame.number + 1] = (lever * frame.two).sum(axis=1)
    free, by_turn = solveh_banded(stiff, np.column_stack([-slope, row]), lower=True, check_finite=False).T
    free = free - by_turn * ((row @ free + turned) / (row @ by_turn))
    one, two = free[2 * frame.number], free[2 * frame.number + 1]
    return np.asarray(one[:, None] * frame.one + two[:, None] * frame.two, dtype=np.float64)


def _spring_jacobian(springs: Springs, state: _State, frame: _Frame):  # type: ignore[no-untyped-def]
    """Returns d residual / d (steps along the tangents) as a sparse matrix."""
    from scipy.sparse import csr_array

    chord, arc = state.stretched.chord_mm, state.stretched.arc_mm
    way = chord / np.maximum(np.linalg.norm(chord, axis=1), 1e-12)[:, None]
    way *= (arc / np.maximum(np.linalg.norm(chord, axis=1), 1e-12) / springs.flat_mm)[:, None]
    n_cells, n_edges = springs.n_cells, springs.n_edges
    row = np.concatenate([np.arange(n_edges), np.tile(n_edges + np.arange(n_cells), 2)])
    sign = np.concatenate(
        [np.ones(n_edges), np.full(n_cells, springs.shear_scale), np.full(n_cells, -springs.shear_scale)]
    )
    values, columns, rows = [], [], []
    for end, way_sign in ((0, -1.0), (1, 1.0)):
        node = springs.ends[:, end]
        for c, tangent in enumerate((frame.one, frame.two)):
            values.append(way_sign * sign * (way * tangent[node]).sum(axis=1))
            columns.append(2 * frame.number[node] + c)
            rows.append(row)
    shape = (n_edges + n_cells, 2 * len(frame.number))
    return csr_array((np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))), shape=shape)


def _lower_band(matrix) -> Floats:  # type: ignore[no-untyped-def]
    """Returns the lower band (b, n) of a symmetric sparse matrix, as LAPACK stores it."""
    below = matrix.row >= matrix.col
    row, column, value = matrix.row[below], matrix.col[below], matrix.data[below]
    band = np.zeros((int((row - column).max()) + 1, matrix.shape[0]))
    band[row - column, column] = value
    return band
