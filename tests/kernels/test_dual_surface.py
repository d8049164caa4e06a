"""The surface of any sign pattern is closed and 2-manifold, and its tables obey what they promise."""

import numpy as np
import pytest

from morph.geometry.mesh import Mesh, measure_condition
from morph.kernels.distance_field import BLOCK
from morph.kernels.dual_surface import count_cells, join_quads, make_loop_tables, mean_crossing, neighbour_cell

LOOP_OF, N_LOOPS, DOUBLE_FACE = make_loop_tables()


def surface_of(inside, corner_blocks):
    """Runs the kernels on a sign pattern (8 n + 1 cubed samples); vertices are the means of the edge crossings."""
    cells = np.array(list(np.ndindex(*(corner_blocks,) * 3)))
    number = {tuple(c): i for i, c in enumerate(cells.tolist())}
    neighbours = np.full((len(cells), 27), -1)
    for i, c in enumerate(cells):
        for k, d in enumerate(np.ndindex(3, 3, 3)):
            neighbours[i, k] = number.get(tuple((c + d - 1).tolist()), -1)
    values = np.where(inside, -1.0, 1.0).astype(np.float32)
    n = len(cells)
    codes = np.zeros((n, BLOCK, BLOCK, BLOCK), np.uint8)
    block_values = np.empty((n, BLOCK + 1, BLOCK + 1, BLOCK + 1), np.float32)
    for i, c in enumerate(cells * BLOCK):
        block = values[tuple(slice(a, a + BLOCK + 1) for a in c)]
        block_values[i] = block
        for k in range(8):
            part = block[(k & 1) : (k & 1) + 8, ((k >> 1) & 1) : ((k >> 1) & 1) + 8, (k >> 2) : (k >> 2) + 8]
            codes[i] |= ((part < 0) << k).astype(np.uint8)
    cases, n_vertices, n_quads = np.zeros(codes.shape, np.uint16), np.zeros(n, np.int64), np.zeros(n, np.int64)
    count_cells(0, n, codes, neighbours, N_LOOPS, DOUBLE_FACE, cases, n_vertices, n_quads)
    first_vertex, vertices = np.zeros(codes.shape, np.int32), np.zeros((int(n_vertices.sum()), 3))
    at = 0
    for i in range(n):
        for x, y, z in np.ndindex(8, 8, 8):
            first_vertex[i, x, y, z] = at
            for loop in range(N_LOOPS[cases[i, x, y, z]]):
                point = np.zeros(3)
                mean_crossing(block_values[i], x, y, z, int(cases[i, x, y, z]), loop, LOOP_OF, point)
                assert (point >= 0).all() and (point <= 1).all()
                vertices[at] = cells[i] * BLOCK + (x, y, z) + point
                at += 1
    assert at == len(vertices)
    triangles = np.full((2 * int(n_quads.sum()), 3), -1, np.int32)
    offset = np.cumsum(n_quads) - n_quads
    join_quads(0, n, codes, cases, neighbours, LOOP_OF, first_vertex, vertices, offset, triangles)
    return Mesh(vertices, triangles.astype(np.int64)), int((cases > 255).sum())


@pytest.mark.parametrize(("seed", "share"), [(0, 0.5), (1, 0.3), (2, 0.7), (3, 0.12)])
def test_any_sign_pattern_gives_a_closed_manifold(seed, share):
    inside = np.zeros((9, 9, 9), bool)
    inside[1:-1, 1:-1, 1:-1] = np.random.default_rng(seed).random((7, 7, 7)) < share
    mesh, flipped = surface_of(inside, 1)
    condition = measure_condition(mesh)
    assert condition.closed
    if share == 0.5:
        assert flipped > 0


def test_neighbouring_blocks_join():
    inside = np.zeros((17, 17, 17), bool)
    inside[5:12, 6:13, 4:11] = True
    mesh, _ = surface_of(inside, 2)
    condition = measure_condition(mesh)
    assert condition.closed and condition.bodies == 1 and condition.genus == 0
    corner = mesh.vertices_mm[mesh.triangles]
    volume = np.einsum("ij,ij->", corner[:, 0], np.cross(corner[:, 1], corner[:, 2])) / 6.0
    assert 6.5**3 < volume < 7.0**3


def test_tables_cover_each_crossed_edge_once():
    for case in range(256):
        inside = [(case >> c) & 1 for c in range(8)]
        for edge in range(12):
            axis, a, b = edge // 4, edge % 2, (edge // 2) % 2
            others = [k for k in range(3) if k != axis]
            low = (a << others[0]) | (b << others[1])
            crossed = inside[low] != inside[low | (1 << axis)]
            assert (LOOP_OF[case, edge] >= 0) == crossed
        assert LOOP_OF[case].max() + 1 == N_LOOPS[case]
        if N_LOOPS[case]:
            sizes = np.bincount(LOOP_OF[case][LOOP_OF[case] >= 0])
            assert sizes.min() >= 3


def test_the_flipped_cases_run_their_face_in_two_loops_or_stay_one():
    assert np.count_nonzero(DOUBLE_FACE >= 0) == 36
    for case in np.flatnonzero(DOUBLE_FACE >= 0):
        assert ((LOOP_OF[case] >= 0) == (LOOP_OF[256 + case] >= 0)).all()
        assert N_LOOPS[256 + case] >= N_LOOPS[case]


def test_neighbour_cell_by_hand():
    neighbours = np.arange(27)[None, :] + 100
    assert neighbour_cell(0, 3, 4, 5, neighbours) == (113, 3, 4, 5)
    assert neighbour_cell(0, -1, 0, 8, neighbours) == (100 + 0 * 9 + 1 * 3 + 2, 7, 0, 0)
