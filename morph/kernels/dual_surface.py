"""The closed surface of a sampled field: one vertex per surface sheet in each cell, one quad per crossed cell edge.

A cell of the grid has 12 edges; the crossed ones are joined across its faces into loops, and each
loop gets one vertex inside the cell. Each crossed grid edge joins the vertices of its four cells.
On a face with four crossings the inside corners are kept apart, except where both cells would
run one loop twice over the same face: there the outside corners are kept apart instead, in both
cells, and the surface stays 2-manifold (R. Wenger, Isosurfaces: geometry, topology and
algorithms, 2013, on manifold dual contouring; from memory).

Edge e = 4 axis + a + 2 b: a and b are the coordinates of its start corner on the other two axes, in
increasing order of axis.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from morph.core.arrays import Floats, Ints
from morph.kernels.distance_field import BLOCK, SQRT3, field_at, keep_near
from morph.kernels.swept_ball import piece_gradient

N_CASES = 256


def _edge(corner_a: int, corner_b: int) -> int:
    axis = (corner_a ^ corner_b).bit_length() - 1
    low = min(corner_a, corner_b)
    first, second = [k for k in range(3) if k != axis]
    return 4 * axis + ((low >> first) & 1) + 2 * ((low >> second) & 1)


def _face_corners(face: int) -> list[int]:
    """Returns the four corners in a ring around face 2 axis + side."""
    axis, side = divmod(face, 2)
    first, second = [1 << k for k in range(3) if k != axis]
    base = side << axis
    return [base, base | first, base | first | second, base | second]


def _loops(case: int, flipped_face: int) -> tuple[list[int], int]:
    """Returns the loop of each edge (-1 uncrossed) and the face one loop runs over twice (-1 none)."""
    inside = [(case >> corner) & 1 for corner in range(8)]
    group = list(range(12))

    def root(edge: int) -> int:
        while group[edge] != edge:
            edge = group[edge]
        return edge

    crossed: set[int] = set()
    double: list[tuple[int, int, int]] = []
    for face in range(6):
        ring = _face_corners(face)
        edges = [_edge(ring[k], ring[(k + 1) % 4]) for k in range(4)]
        cut = [k for k in range(4) if inside[ring[k]] != inside[ring[(k + 1) % 4]]]
        crossed.update(edges[k] for k in cut)
        if len(cut) == 2:
            group[root(edges[cut[0]])] = root(edges[cut[1]])
        elif len(cut) == 4:
            # cut off the corners that are inside (outside on the flipped face): corner k lies between edges k - 1 and k
            corners = [k for k in range(4) if bool(inside[ring[k]]) != (face == flipped_face)]
            for k in corners:
                group[root(edges[k - 1])] = root(edges[k])
            double.append((face, edges[corners[0]], edges[corners[1]]))
    names = sorted({root(edge) for edge in crossed}, key=lambda r: min(e for e in crossed if root(e) == r))
    loop = [names.index(root(edge)) if edge in crossed else -1 for edge in range(12)]
    twice = [face for face, one, two in double if loop[one] == loop[two]]
    if len(twice) > 1:
        raise RuntimeError(f"case {case} runs twice over {len(twice)} faces")
    return loop, twice[0] if twice else -1


def make_loop_tables() -> tuple[Ints, Ints, Ints]:
    """Returns the tables of the surface loops.

    Returns:
        loop_of: (512, 12) loop of each edge, -1 when uncrossed; rows 256.. hold the flipped cases.
        n_loops: (512,) loops of each case.
        double_face: (256,) the face that a loop of the case runs over twice, -1 for none.
    """
    loop_of = np.full((2 * N_CASES, 12), -1, dtype=np.int64)
    double_face = np.full(N_CASES, -1, dtype=np.int64)
    for case in range(N_CASES):
        loop_of[case], double_face[case] = _loops(case, -1)
        if double_face[case] >= 0:
            loop_of[N_CASES + case], _ = _loops(case, int(double_face[case]))
    return loop_of, loop_of.max(axis=1) + 1, double_face


@njit(cache=True, nogil=True)
def neighbour_cell(b: int, x: int, y: int, z: int, neighbours: Ints) -> tuple[int, int, int, int]:
    """Returns block and cell of cell (x, y, z) counted from block b, coordinates -1..8; block -1 when there is none."""
    dx = x >> 3
    dy = y >> 3
    dz = z >> 3
    block = neighbours[b, 9 * (dx + 1) + 3 * (dy + 1) + dz + 1]
    return block, x & 7, y & 7, z & 7


@njit(cache=True, nogil=True)
def count_cells(
    first: int,
    last: int,
    codes: NDArray[np.uint8],
    neighbours: Ints,
    n_loops: Ints,
    double_face: Ints,
    cases: NDArray[np.uint16],
    n_vertices: Ints,
    n_quads: Ints,
) -> None:
    """Finds the case of each cell (flipped where needed) and counts vertices and quads of the blocks first..last - 1.

    `codes (n, 8, 8, 8)` holds the inside bits, `neighbours (n, 27)` block numbers or -1; `cases (n, 8, 8, 8)` receives
    each cell's row of the loop table, `n_vertices (n,)` and `n_quads (n,)` the counts.
    """
    for b in range(first, last):
        vertices = 0
        quads = 0
        for cell in range(BLOCK * BLOCK * BLOCK):
            x = cell >> 6
            y = (cell >> 3) & 7
            z = cell & 7
            code = np.int64(codes[b, x, y, z])
            cases[b, x, y, z] = code
            if code == 0 or code == 255:
                continue
            face = double_face[code]
            if face >= 0:
                step = 2 * (face & 1) - 1
                axis = face >> 1
                c, i, j, k = neighbour_cell(
                    b,
                    x + (step if axis == 0 else 0),
                    y + (step if axis == 1 else 0),
                    z + (step if axis == 2 else 0),
                    neighbours,
                )
                if c >= 0 and double_face[codes[c, i, j, k]] == (face ^ 1):
                    cases[b, x, y, z] = code + 256
            vertices += n_loops[cases[b, x, y, z]]
            for axis in range(3):
                quads += (code & 1) != ((code >> (1 << axis)) & 1)
        n_vertices[b] = vertices
        n_quads[b] = quads


@njit(cache=True, nogil=True, error_model="numpy")
def place_vertices(
    first: int, last: int, corner: Ints, start: Ints, length: Ints, near: Ints,
    pieces: Floats, owner: Ints, nodes: Floats, blend_mm: float, origin: Floats, h_mm: float,
    values: NDArray[np.float32], cases: NDArray[np.uint16], loop_of: Ints, n_loops: Ints, offset: Ints,
    bias: float, steps: int,
    first_vertex: NDArray[np.int32], vertices: Floats, normals: NDArray[np.float32], piece: NDArray[np.int32],
) -> None:  # fmt: skip
    """Places the vertices of the blocks first..last - 1.

    A vertex starts at the mean of its loop's edge crossings and is moved `steps` times along the gradient to the
    level bias h^2 / r (r the local radius; none on roofs, which are flat, and where blended), which makes up for the chords; it never leaves its cell.

    The blocks and the field are given as to `sample_blocks`, which filled `values`; `cases` comes from `count_cells`;
    `offset (n,)` is the first vertex of each block. `first_vertex (n, 8, 8, 8)` receives the number of each cell's
    first vertex, `vertices (nv, 3)` the places in mm, `normals (nv, 3)` the field's direction there and
    `piece (nv,)` the nearest piece (both with `steps` > 0).
    """
    longest = 1
    for b in range(first, last):
        longest = max(longest, length[b])
    kept = np.empty(longest, np.int64)
    distance = np.empty(longest)
    run_piece = np.empty(longest, np.int64)
    gradient = np.zeros(3)
    low = np.empty(3)
    point = np.empty(3)
    for b in range(first, last):
        own = near[start[b] : start[b] + length[b]]
        at = offset[b]
        for cell in range(BLOCK * BLOCK * BLOCK):
            x = cell >> 6
            y = (cell >> 3) & 7
            z = cell & 7
            case = cases[b, x, y, z]
            first_vertex[b, x, y, z] = at
            if n_loops[case] == 0:
                continue
            for a in range(3):
                low[a] = origin[a] + (corner[b, a] + (x, y, z)[a]) * h_mm
            n = keep_near(
                low[0] + 0.5 * h_mm, low[1] + 0.5 * h_mm, low[2] + 0.5 * h_mm,
                0.50001 * SQRT3 * h_mm, pieces, owner, blend_mm, own, length[b], kept, distance,
            )  # fmt: skip
            margin = (0.001 if n_loops[case] == 1 else 0.05) * h_mm
            for loop in range(n_loops[case]):
                mean_crossing(values[b], x, y, z, case, loop, loop_of, point)
                for a in range(3):
                    point[a] = low[a] + point[a] * h_mm
                for _ in range(steps):
                    piece[at] = settle(
                        point, low, margin, h_mm, bias,
                        pieces, owner, nodes, blend_mm, kept, n, distance, run_piece, gradient,
                    )  # fmt: skip
                size = np.sqrt(gradient[0] ** 2 + gradient[1] ** 2 + gradient[2] ** 2) + 1e-12
                for a in range(3):
                    vertices[at, a] = point[a]
                    normals[at, a] = gradient[a] / size
                at += 1


@njit(cache=True, nogil=True, error_model="numpy")
def settle(
    point: Floats, low: Floats, margin: float, h_mm: float, bias: float,
    pieces: Floats, owner: Ints, nodes: Floats, blend_mm: float, near: Ints, n_near: int,
    run_distance: Floats, run_piece: Ints, gradient: Floats,
) -> int:  # fmt: skip
    """Moves a vertex one Newton step along the gradient to its level, held `margin` inside the cell from `low`.

    Returns the nearest piece.
    """
    f, blended = field_at(
        point[0], point[1], point[2],
        pieces, owner, nodes, blend_mm, near, n_near, run_distance, run_piece, gradient,
    )  # fmt: skip
    size = gradient[0] ** 2 + gradient[1] ** 2 + gradient[2] ** 2 + 1e-12
    best = nearest_piece(run_piece, run_distance, n_near, owner, near)
    level = bias * h_mm * h_mm * piece_gradient(point[0], point[1], point[2], pieces, best)[3]
    if blended > 0.0:
        level *= max(0.0, 1.0 - 16.0 * blended / blend_mm)
    for a in range(3):
        moved = point[a] + (level - f) * gradient[a] / size
        point[a] = min(max(moved, low[a] + margin), low[a] + h_mm - margin)
    return best


@njit(cache=True, nogil=True)
def nearest_piece(run_piece: Ints, run_distance: Floats, n_near: int, owner: Ints, near: Ints) -> int:
    """Returns the nearest piece, read from the work space `field_at` left."""
    best = 0
    n_runs = 0
    last = -1
    for q in range(n_near):
        if owner[near[q], 0] != last:
            last = owner[near[q], 0]
            if run_distance[n_runs] < run_distance[best]:
                best = n_runs
            n_runs += 1
    return int(run_piece[best])


@njit(cache=True, nogil=True, error_model="numpy")
def mean_crossing(
    value: NDArray[np.float32], x: int, y: int, z: int, case: int, loop: int, loop_of: Ints, point: Floats
) -> None:
    """Writes to `point` the mean of the edge crossings of one loop of cell (x, y, z), in cell units from its low corner."""
    point[:] = 0.0
    count = 0
    for edge in range(12):
        if loop_of[case, edge] != loop:
            continue
        axis = edge >> 2
        a = edge & 1
        b = (edge >> 1) & 1
        i = 0 if axis == 0 else a
        j = 0 if axis == 1 else (a if axis == 0 else b)
        k = 0 if axis == 2 else b
        here = np.float64(value[x + i, y + j, z + k])
        there = np.float64(value[x + i + (axis == 0), y + j + (axis == 1), z + k + (axis == 2)])
        share = here / (here - there)
        point[0] += i + (share if axis == 0 else 0.0)
        point[1] += j + (share if axis == 1 else 0.0)
        point[2] += k + (share if axis == 2 else 0.0)
        count += 1
    point /= count


@njit(cache=True, nogil=True, error_model="numpy")
def join_quads(
    first: int,
    last: int,
    codes: NDArray[np.uint8],
    cases: NDArray[np.uint16],
    neighbours: Ints,
    loop_of: Ints,
    first_vertex: NDArray[np.int32],
    vertices: Floats,
    offset: Ints,
    triangles: NDArray[np.int32],
) -> None:
    """Writes two triangles per crossed edge of the blocks first..last - 1, split along the shorter diagonal.

    `offset (n,)` is the first quad of each block; quad q makes the triangles 2 q and 2 q + 1 of `triangles (2 nq, 3)`,
    counter-clockwise from outside; -1 where a cell was skipped (never without stretches).
    """
    ring = np.empty(4, np.int64)
    for b in range(first, last):
        at = 2 * offset[b]
        for cell in range(BLOCK * BLOCK * BLOCK):
            x = cell >> 6
            y = (cell >> 3) & 7
            z = cell & 7
            code = np.int64(codes[b, x, y, z])
            if code == 0 or code == 255:
                continue
            for axis in range(3):
                inside = code & 1
                if inside == ((code >> (1 << axis)) & 1):
                    continue
                for corner in range(4):
                    # cells around the edge, counter-clockwise about +axis; u, v follow axis in a right-handed way
                    du = 1 if corner == 1 or corner == 2 else 0
                    dv = 1 if corner >= 2 else 0
                    i = dv if axis == 1 else (du if axis == 2 else 0)
                    j = du if axis == 0 else (dv if axis == 2 else 0)
                    k = dv if axis == 0 else (du if axis == 1 else 0)
                    c, p, q, r = neighbour_cell(b, x - i, y - j, z - k, neighbours)
                    if axis == 0:
                        edge = j + 2 * k
                    elif axis == 1:
                        edge = 4 + i + 2 * k
                    else:
                        edge = 8 + i + 2 * j
                    loop = loop_of[cases[c, p, q, r], edge] if c >= 0 else -1
                    ring[corner if inside else 3 - corner] = first_vertex[c, p, q, r] + loop if loop >= 0 else -1
                one = 0.0
                two = 0.0
                for a in range(3):
                    one += (vertices[ring[0], a] - vertices[ring[2], a]) ** 2
                    two += (vertices[ring[1], a] - vertices[ring[3], a]) ** 2
                turn = 0 if one <= two else 1
                for a in range(3):
                    triangles[at, a] = ring[(turn + a) & 3]
                triangles[at + 1, 0] = ring[turn]
                triangles[at + 1, 1] = ring[(turn + 2) & 3]
                triangles[at + 1, 2] = ring[(turn + 3) & 3]
                at += 2
