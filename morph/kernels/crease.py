"""Vertices on creases: where the field's sheets meet, the surface has an edge or a corner.

A cell whose normal differs from a neighbour's holds a crease. Its vertex goes to the point that lies nearest, in the
least-squares sense, to the tangent planes at the vertices around it (L. Kobbelt et al., Feature sensitive surface
extraction, 2001; T. Ju et al., Dual contouring of Hermite data, 2002; from memory); the planes are then taken
anew closer to that point, where curved sheets are flatter, and so on. Mesh edges that still cut across a crease get
a new vertex on it, found the same way from the two planes at their ends.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from morph.core.arrays import Floats, Ints
from morph.kernels.distance_field import BLOCK, field_at, keep_near
from morph.kernels.dual_surface import neighbour_cell

ROUNDS = 3
"""Times the planes are taken, each closer to the point by CLOSER."""

CLOSER = 0.3
SAME_SHEET = 0.93
"""Cosine between two normals of one sheet: a plane is only replaced by one of its own sheet."""

NO_CREASE = 0.97
"""Cosine: planes all closer than this are one smooth wall."""

MOST_OFF = 0.02
"""A crease vertex must lie this near to the surface, in cells."""

LOOKS_AROUND = 3.0
"""Farthest a crease vertex and its planes lie from the cell's own vertex, in cells."""

MOST_PLANES = 27


@njit(cache=True, nogil=True)
def mark_creases(
    first: int,
    last: int,
    cases: NDArray[np.uint16],
    neighbours: Ints,
    n_loops: Ints,
    first_vertex: NDArray[np.int32],
    normals: NDArray[np.float32],
    least_cosine: float,
    marked: NDArray[np.uint8],
) -> None:
    """Sets `marked (nv,)` for the vertices of one-loop cells whose normal turns to a face neighbour beyond a cosine.

    The other arguments as in `place_vertices`; blocks first..last - 1.
    """
    for b in range(first, last):
        for cell in range(BLOCK * BLOCK * BLOCK):
            x = cell >> 6
            y = (cell >> 3) & 7
            z = cell & 7
            case = cases[b, x, y, z]
            if case > 255 or n_loops[case] != 1:
                continue
            own = first_vertex[b, x, y, z]
            for side in range(6):
                axis = side >> 1
                step = 2 * (side & 1) - 1
                c, i, j, k = neighbour_cell(
                    b,
                    x + (step if axis == 0 else 0),
                    y + (step if axis == 1 else 0),
                    z + (step if axis == 2 else 0),
                    neighbours,
                )
                if c < 0 or n_loops[cases[c, i, j, k]] == 0:
                    continue
                other = first_vertex[c, i, j, k]
                cosine = 0.0
                for a in range(3):
                    cosine += normals[own, a] * normals[other, a]
                if cosine < least_cosine:
                    marked[own] = 1
                    break


@njit(cache=True, nogil=True, error_model="numpy")
def retake_plane(
    place: Floats, plane: Floats,
    pieces: Floats, owner: Ints, nodes: Floats, blend_mm: float, near: Ints, n_near: int,
    run_distance: Floats, run_piece: Ints, gradient: Floats,
) -> None:  # fmt: skip
    """Replaces `plane (4,)`, unit normal and offset, by that of the field at `place (3,)` if the sheet is the same."""
    f, _ = field_at(
        place[0], place[1], place[2],
        pieces, owner, nodes, blend_mm, near, n_near, run_distance, run_piece, gradient,
    )  # fmt: skip
    size = np.sqrt(gradient[0] ** 2 + gradient[1] ** 2 + gradient[2] ** 2) + 1e-12
    if gradient[0] * plane[0] + gradient[1] * plane[1] + gradient[2] * plane[2] <= SAME_SHEET * size:
        return
    plane[3] = -f / size
    for a in range(3):
        plane[a] = gradient[a] / size
        plane[3] += plane[a] * place[a]


@njit(cache=True, nogil=True, error_model="numpy")
def step_to_planes(point: Floats, planes: Floats, weights: Floats, n: int, hold: float, step: Floats) -> float:
    """Writes to `step (3,)` the move from `point` to the least-squares meeting point of n planes.

    `hold` keeps the point where the planes do not say. Returns the least cosine between two normals.
    """
    m = np.zeros((3, 3))
    step[:] = 0.0
    total = 0.0
    cosine = 1.0
    for i in range(n):
        for j in range(i):
            cosine = min(
                cosine, planes[i, 0] * planes[j, 0] + planes[i, 1] * planes[j, 1] + planes[i, 2] * planes[j, 2]
            )
        lack = planes[i, 3] - planes[i, 0] * point[0] - planes[i, 1] * point[1] - planes[i, 2] * point[2]
        total += weights[i]
        for a in range(3):
            step[a] += weights[i] * planes[i, a] * lack
            for c in range(3):
                m[a, c] += weights[i] * planes[i, a] * planes[i, c]
    for a in range(3):
        m[a, a] += hold * total
    c0 = m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1]
    c1 = m[0, 2] * m[2, 1] - m[0, 1] * m[2, 2]
    c2 = m[0, 1] * m[1, 2] - m[0, 2] * m[1, 1]
    determinant = m[0, 0] * c0 + m[1, 0] * c1 + m[2, 0] * c2
    c3 = m[0, 0] * m[2, 2] - m[0, 2] * m[2, 0]
    c4 = m[0, 2] * m[1, 0] - m[0, 0] * m[1, 2]
    c5 = m[0, 0] * m[1, 1] - m[0, 1] * m[1, 0]
    r0, r1, r2 = step
    step[0] = (c0 * r0 + c1 * r1 + c2 * r2) / determinant
    step[1] = (c1 * r0 + c3 * r1 + c4 * r2) / determinant
    step[2] = (c2 * r0 + c4 * r1 + c5 * r2) / determinant
    return cosine


@njit(cache=True, nogil=True, error_model="numpy")
def gather_planes(
    b: int, x: int, y: int, z: int, reach: float, own: int, neighbours: Ints, cases: NDArray[np.uint16],
    n_loops: Ints, first_vertex: NDArray[np.int32], vertices: Floats, normals: NDArray[np.float32], h_mm: float,
    places: Floats, planes: Floats, weights: Floats,
) -> int:  # fmt: skip
    """Collects the tangent planes at the vertices of the 27 cells around one, within `reach` mm of its own vertex."""
    n = 0
    for around in range(27):
        c, i, j, k = neighbour_cell(b, x + around // 9 - 1, y + (around // 3) % 3 - 1, z + around % 3 - 1, neighbours)
        if c < 0 or n_loops[cases[c, i, j, k]] == 0:
            continue
        other = first_vertex[c, i, j, k]
        away = 0.0
        for a in range(3):
            away += (vertices[other, a] - vertices[own, a]) ** 2
        if away > reach * reach:
            continue
        planes[n, 3] = 0.0
        for a in range(3):
            places[n, a] = vertices[other, a]
            planes[n, a] = normals[other, a]
            planes[n, 3] += planes[n, a] * places[n, a]
        weights[n] = 1.0 / (1.0 + 2.0 * away / (h_mm * h_mm))
        n += 1
    return n


@njit(cache=True, nogil=True, error_model="numpy")
def settle_on_planes(
    b: int, x: int, y: int, z: int, point: Floats, places: Floats, planes: Floats, weights: Floats, n: int, h_mm: float,
    neighbours: Ints, cases: NDArray[np.uint16], n_loops: Ints, low: Floats, high: Floats, step: Floats,
    pieces: Floats, owner: Ints, nodes: Floats, blend_mm: float, near: Ints, n_near: int,
    run_distance: Floats, run_piece: Ints, gradient: Floats,
) -> float:  # fmt: skip
    """Moves `point (3,)` to where its n planes meet, taking them anew from closer by; returns the planes' cosine.

    A cosine above NO_CREASE means that the planes are one: there is no crease, and `point` is not settled.
    """
    cosine = 1.0
    share = 1.0
    for turn in range(ROUNDS):
        if turn > 0:
            for i in range(n):
                for a in range(3):
                    step[a] = point[a] + share * (places[i, a] - point[a])
                retake_plane(
                    step, planes[i], pieces, owner, nodes, blend_mm, near, n_near,
                    run_distance, run_piece, gradient,
                )  # fmt: skip
        cosine = step_to_planes(point, planes, weights, n, 0.01 if turn == 0 else 0.003, step)
        if cosine > NO_CREASE:
            break
        for a in range(3):
            point[a] += step[a]
        if turn == 0:
            open_one_face(b, x, y, z, point, h_mm, neighbours, cases, n_loops, low, high)
        for a in range(3):
            point[a] = min(max(point[a], low[a]), high[a])
        share *= CLOSER
    return cosine


@njit(cache=True, nogil=True, error_model="numpy")
def place_on_creases(
    first: int, last: int, corner: Ints, start: Ints, length: Ints, near: Ints,
    pieces: Floats, owner: Ints, nodes: Floats, blend_mm: float, origin: Floats, h_mm: float,
    cells: Ints, cases: NDArray[np.uint16], neighbours: Ints, n_loops: Ints,
    first_vertex: NDArray[np.int32], vertices: Floats, normals: NDArray[np.float32],
    placed: Floats, found: NDArray[np.uint8],
) -> None:  # fmt: skip
    """Finds the crease vertices of the cells `cells[first:last]`, each block * 512 + cell.

    The vertex may leave its cell through one face if no surface passes the cell behind it. `placed (k, 3)`
    receives the place in mm and `found (k,)` 1 where there is one; tried with planes from within 1.75, 1.15 and 2.4 cells.
    """
    places = np.empty((MOST_PLANES, 3))
    planes = np.empty((MOST_PLANES, 4))
    weights = np.empty(MOST_PLANES)
    gradient = np.zeros(3)
    point = np.empty(3)
    step = np.empty(3)
    low = np.empty(3)
    high = np.empty(3)
    for w in range(first, last):
        found[w] = 0
        b = cells[w] >> 9
        x = (cells[w] >> 6) & 7
        y = (cells[w] >> 3) & 7
        z = cells[w] & 7
        own = first_vertex[b, x, y, z]
        n_near = length[b]
        run_distance = np.empty(n_near)
        run_piece = np.empty(n_near, np.int64)
        list_ = np.empty(n_near, np.int64)
        n_near = keep_near(
            vertices[own, 0], vertices[own, 1], vertices[own, 2], LOOKS_AROUND * h_mm, pieces, owner, blend_mm,
            near[start[b] : start[b] + n_near], n_near, list_, run_distance,
        )  # fmt: skip
        for attempt in range(3):
            reach = h_mm * (1.75 if attempt == 0 else (1.15 if attempt == 1 else 2.4))
            n = gather_planes(
                b, x, y, z, reach, own, neighbours, cases, n_loops, first_vertex, vertices, normals, h_mm,
                places, planes, weights,
            )  # fmt: skip
            for a in range(3):
                point[a] = vertices[own, a]
                low[a] = origin[a] + (corner[b, a] + (x, y, z)[a] + 0.001) * h_mm
                high[a] = low[a] + 0.998 * h_mm
            cosine = settle_on_planes(
                b, x, y, z, point, places, planes, weights, n, h_mm, neighbours, cases, n_loops, low, high, step,
                pieces, owner, nodes, blend_mm, list_, n_near, run_distance, run_piece, gradient,
            )  # fmt: skip
            if cosine > NO_CREASE:
                break
            f, _ = field_at(
                point[0], point[1], point[2],
                pieces, owner, nodes, blend_mm, list_, n_near, run_distance, run_piece, gradient,
            )  # fmt: skip
            if abs(f) < MOST_OFF * h_mm:
                found[w] = 1
                for a in range(3):
                    placed[w, a] = point[a]
                break


@njit(cache=True, nogil=True)
def open_one_face(
    b: int, x: int, y: int, z: int, point: Floats, h_mm: float, neighbours: Ints, cases: NDArray[np.uint16],
    n_loops: Ints, low: Floats, high: Floats,
) -> None:  # fmt: skip
    """Widens the box low..high of a cell through the face its vertex leaves furthest, if the cell behind is empty."""
    axis = 0
    most = 0.0
    for a in range(3):
        beyond = max(low[a] - point[a], point[a] - high[a])
        if beyond > most:
            most = beyond
            axis = a
    if most <= 0.0:
        return
    step = 1 if point[axis] > high[axis] else -1
    c, i, j, k = neighbour_cell(
        b,
        x + (step if axis == 0 else 0),
        y + (step if axis == 1 else 0),
        z + (step if axis == 2 else 0),
        neighbours,
    )
    if c >= 0 and n_loops[cases[c, i, j, k]] > 0:
        return
    if step > 0:
        high[axis] += 0.95 * h_mm
    else:
        low[axis] -= 0.95 * h_mm
