"""The lattice kernels against plain numpy: a step, what walls keep, the fill of columns, neighbours."""

import numpy as np
import pytest

from morph.kernels.lattice import DIRECTIONS, flow_across, lattice_moments, lattice_shift, lattice_step, return_links
from morph.kernels.lattice_fill import column_crossings, fill_columns, join_cells

WEIGHT = np.where(
    (DIRECTIONS != 0).sum(axis=1) == 0, 1 / 3, np.where(np.abs(DIRECTIONS).sum(axis=1) == 1, 1 / 18, 1 / 36)
)
BACK = np.array([0] + [q + 1 if q % 2 == 1 else q - 1 for q in range(1, 19)])


def test_directions_and_weights_are_isotropic_to_fourth_order():
    """Sums of w c c and w c c c c of D3Q19 (Qian, d'Humieres, Lallemand 1992): 1/3 and (dd + dd + dd) / 9."""
    assert (DIRECTIONS[BACK] == -DIRECTIONS).all()
    assert WEIGHT.sum() == pytest.approx(1.0)
    assert np.einsum("q,qa,qb->ab", WEIGHT, DIRECTIONS, DIRECTIONS) == pytest.approx(np.eye(3) / 3.0)
    four = np.einsum("q,qa,qb,qc,qd->abcd", WEIGHT, DIRECTIONS, DIRECTIONS, DIRECTIONS, DIRECTIONS)
    eye = np.eye(3)
    want = sum(np.einsum(f"{a},{b}->abcd", eye, eye) for a, b in (("ab", "cd"), ("ac", "bd"), ("ad", "bc"))) / 9.0
    assert four == pytest.approx(want)


def periodic_box(n=4):
    number = np.arange(n**3).reshape(n, n, n)
    source = np.empty((n**3, 18), np.int32)
    for q in range(1, 19):
        source[:, q - 1] = 19 * np.roll(number, DIRECTIONS[q], axis=(0, 1, 2)).ravel() + q
    return source


def twin_step(state, source, even, odd):
    """Two-relaxation-time collision without the quadratic term, written from its definition."""
    n = len(source)
    arriving = np.concatenate([state[: 19 * n].reshape(n, 19)[:, :1], state[source]], axis=1)
    density, flux = arriving.sum(axis=1), arriving @ DIRECTIONS
    plus, minus = 0.5 * (arriving + arriving[:, BACK]), 0.5 * (arriving - arriving[:, BACK])
    rest, drift = WEIGHT * density[:, None], 3.0 * WEIGHT * (flux @ DIRECTIONS.T)
    return arriving - even * (plus - rest) - odd * (minus - drift)


def test_a_step_is_its_plain_twin():
    source = periodic_box()
    n = len(source)
    state = np.random.default_rng(5).normal(size=19 * n).astype(np.float32)
    following = np.zeros_like(state)
    for first, last in ((0, 20), (20, n)):
        lattice_step(first, last, state, following, source, np.float32(0.7), np.float32(1.3))
    want = twin_step(state.astype(float), source, 0.7, 1.3)
    assert np.abs(following.reshape(n, 19) - want).max() < 2e-6


def test_moments_and_shifts():
    n = 6
    state = np.random.default_rng(6).normal(size=19 * n).astype(np.float32)
    density, flux = np.empty(n), np.empty((n, 3))
    lattice_moments(0, n, state, density, flux)
    assert density == pytest.approx(state.reshape(n, 19).astype(float).sum(axis=1))
    assert flux == pytest.approx(state.reshape(n, 19).astype(float) @ DIRECTIONS)
    change = np.linspace(-1.0, 1.0, n)
    after, after_flux = np.empty(n), np.empty((n, 3))
    lattice_shift(0, n, state, change)
    lattice_moments(0, n, state, after, after_flux)
    assert after - density == pytest.approx(change, abs=1e-6) and after_flux == pytest.approx(flux, abs=1e-6)


def test_links_return_as_written_and_walls_keep_mass():
    """One cell: population 2 went out against a wall at 0.2 of the link, population 3 through an opening."""
    state = np.arange(1.0, 41.0, dtype=np.float32) / 40.0
    place = np.array([[2, 21, 1], [3, 4, 4]], np.int32)
    slope = (1.0 - 0.4) / (1.0 + 0.4)
    factor = np.array([[1.0, slope, 0.0], [-1.0, 0.0, 0.5]], np.float32)
    before = state.copy()
    return_links(0, 2, state, 2, place, factor)
    wall = before[2] + slope * (before[21] - before[1])
    assert state[38] == pytest.approx(wall) and state[39] == pytest.approx(0.5 - before[3])
    assert state[0] + state[38] == pytest.approx(before[0] + before[2])
    assert (state[1:38] == before[1:38]).all()


def test_flow_across_links_is_what_goes_less_what_comes():
    state = np.arange(38, dtype=np.float32)
    links = np.array([[0, 1, 1], [0, 1, 8]])
    assert flow_across(state, links) == (1.0 - (19 + 2)) + (8.0 - (19 + 7))


def box(low, high):
    corner = np.array([[x, y, z] for x in (0, 1) for y in (0, 1) for z in (0, 1)], float)
    vertices = np.array(low) + corner * (np.array(high) - np.array(low))
    triangles = np.array(
        [[0, 1, 3], [0, 3, 2], [4, 6, 7], [4, 7, 5], [0, 4, 5], [0, 5, 1], [2, 3, 7], [2, 7, 6], [0, 2, 6], [0, 6, 4], [1, 5, 7], [1, 7, 3]]
    )  # fmt: skip
    return vertices, triangles


def filled(vertices, triangles, shape):
    n_x, n_y, n_z = shape
    count = np.zeros(n_x * n_y, np.int64)
    column_crossings(vertices, triangles, n_x, n_y, False, count, np.empty(0))
    start = np.concatenate([[0], np.cumsum(count)])
    height = np.empty(int(start[-1]))
    column_crossings(vertices, triangles, n_x, n_y, True, start[:-1].copy(), height)
    number = np.full((n_x * n_y, n_z), -1, np.int32)
    n = int(fill_columns(n_y, n_z, start, height, number, np.empty((0, 3), np.int32), False))
    cells = np.empty((n, 3), np.int32)
    fill_columns(n_y, n_z, start, height, number, cells, True)
    return number, cells


@pytest.mark.parametrize("high", [(4.6, 3.2, 5.5), (5.0, 4.0, 6.0), (4.0, 4.0, 4.0)])
def test_a_box_is_filled_also_when_its_faces_run_through_centres(high):
    """Faces and diagonals that pass through centres of cells: every column still has an even number of crossings."""
    vertices, triangles = box((1.0, 1.0, 0.7), high)
    number, cells = filled(vertices, triangles, (8, 8, 8))
    x, y, z = (np.unique(cells[:, axis]) for axis in range(3))
    assert len(cells) == len(x) * len(y) * len(z)
    assert abs(len(x) - (high[0] - 1.0)) <= 1.0 and abs(len(y) - (high[1] - 1.0)) <= 1.0
    assert z.min() == 1 and z.max() == int(np.ceil(high[2])) - 1
    assert (number.reshape(8, 8, 8)[cells[:, 0], cells[:, 1], cells[:, 2]] == np.arange(len(cells))).all()


def test_two_boxes_side_by_side_fill_as_one():
    """A shared face belongs to one of them exactly: no column is counted twice or left out."""
    one, triangles = box((1.0, 1.0, 0.7), (3.0, 5.3, 4.2))
    two, _ = box((3.0, 1.0, 0.7), (6.4, 5.3, 4.2))
    whole, _ = box((1.0, 1.0, 0.7), (6.4, 5.3, 4.2))
    parts = [len(filled(vertices, triangles, (9, 9, 9))[1]) for vertices in (one, two, whole)]
    assert parts[0] + parts[1] == parts[2]


def test_neighbours_are_the_cells_one_step_against_each_direction():
    vertices, triangles = box((0.5, 0.5, 0.5), (3.5, 2.5, 3.5))
    number, cells = filled(vertices, triangles, (5, 5, 5))
    source = np.empty((len(cells), 18), np.int32)
    join_cells(0, len(cells), number, 5, cells, source)
    grid = number.reshape(5, 5, 5)
    for i, cell in enumerate(cells):
        for q in range(1, 19):
            j = grid[tuple(cell - DIRECTIONS[q])]
            assert source[i, q - 1] == (19 * j + q if j >= 0 else -1)
