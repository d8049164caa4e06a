"""Mesh edges that cut across a crease: the field at their middles, and where the crease passes them."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from morph.core.arrays import Floats, Ints
from morph.kernels.crease import CLOSER, MOST_OFF, ROUNDS, retake_plane, step_to_planes
from morph.kernels.distance_field import field_at


@njit(cache=True, nogil=True, error_model="numpy")
def field_at_points(
    first: int,
    last: int,
    start: Ints,
    length: Ints,
    near: Ints,
    pieces: Floats,
    owner: Ints,
    nodes: Floats,
    blend_mm: float,
    block: Ints,
    points: Floats,
    values: Floats,
    directions: Floats,
) -> None:
    """Writes field (k,) and unit gradient (k, 3) at `points[first:last]`, each with the list of its `block`."""
    gradient = np.zeros(3)
    for w in range(first, last):
        b = block[w]
        list_ = near[start[b] : start[b] + length[b]]
        values[w], _ = field_at(
            points[w, 0], points[w, 1], points[w, 2], pieces, owner, nodes, blend_mm, list_, length[b],
            np.empty(length[b]), np.empty(length[b], np.int64), gradient,
        )  # fmt: skip
        size = np.sqrt(gradient[0] ** 2 + gradient[1] ** 2 + gradient[2] ** 2) + 1e-12
        for a in range(3):
            directions[w, a] = gradient[a] / size


@njit(cache=True, nogil=True, error_model="numpy")
def meet_planes(edge: Ints, vertices: Floats, normals: NDArray[np.float32], planes: Floats, middle: Floats) -> float:
    """Returns the squared length (mm2) of an edge; `planes (2, 4)` receives its ends' planes (normal, offset).

    `middle (3,)` receives the place on the edge that is equally far from both planes, the midpoint where there is none.
    """
    for end in range(2):
        planes[end, 3] = 0.0
        for a in range(3):
            planes[end, a] = normals[edge[end], a]
            planes[end, 3] += planes[end, a] * vertices[edge[end], a]
    one = -planes[1, 3]
    two = -planes[0, 3]
    for a in range(3):
        one += planes[1, a] * vertices[edge[0], a]
        two += planes[0, a] * vertices[edge[1], a]
    along = one / (one + two) if one * two > 0.0 else 0.5
    size = 0.0
    for a in range(3):
        middle[a] = (1.0 - along) * vertices[edge[0], a] + along * vertices[edge[1], a]
        size += (vertices[edge[0], a] - vertices[edge[1], a]) ** 2
    return size


@njit(cache=True, nogil=True, error_model="numpy")
def split_edges(
    first: int, last: int, start: Ints, length: Ints, near: Ints,
    pieces: Floats, owner: Ints, nodes: Floats, blend_mm: float, h_mm: float,
    block: Ints, edges: Ints, vertices: Floats, normals: NDArray[np.float32],
    placed: Floats, found: NDArray[np.uint8],
) -> None:  # fmt: skip
    """Finds the crease between the ends of `edges[first:last]` (k, 2), whose normals differ.

    Least squares over the two planes at the ends, nearest to where the edge is equally far from both, so that new
    vertices on edges beside each other keep their order; the planes are taken anew from closer by.
    `placed (k, 3)` and `found (k,)` as in `place_on_creases`.
    """
    gradient = np.zeros(3)
    planes = np.empty((2, 4))
    weights = np.ones(2)
    middle = np.empty(3)
    point = np.empty(3)
    step = np.empty(3)
    for w in range(first, last):
        found[w] = 0
        b = block[w]
        n_near = length[b]
        list_ = near[start[b] : start[b] + n_near]
        run_distance = np.empty(n_near)
        run_piece = np.empty(n_near, np.int64)
        size = meet_planes(edges[w], vertices, normals, planes, middle)
        for a in range(3):
            point[a] = middle[a]
        f, _ = field_at(
            point[0], point[1], point[2],
            pieces, owner, nodes, blend_mm, list_, n_near, run_distance, run_piece, gradient,
        )  # fmt: skip
        if abs(f) < MOST_OFF * h_mm:
            continue
        share = 1.0
        cosine = 1.0
        for turn in range(ROUNDS):
            if turn > 0:
                for end in range(2):
                    for a in range(3):
                        step[a] = point[a] + share * (vertices[edges[w, end], a] - point[a])
                    retake_plane(
                        step, planes[end], pieces, owner, nodes, blend_mm, list_, n_near,
                        run_distance, run_piece, gradient,
                    )  # fmt: skip
            cosine = step_to_planes(middle, planes, weights, 2, 1e-6, step)
            if cosine > 0.98:
                break
            for a in range(3):
                point[a] = middle[a] + step[a]
            share *= CLOSER
        if cosine > 0.98 or (step[0] ** 2 + step[1] ** 2 + step[2] ** 2) > 0.6 * size:
            continue
        f, _ = field_at(
            point[0], point[1], point[2],
            pieces, owner, nodes, blend_mm, list_, n_near, run_distance, run_piece, gradient,
        )  # fmt: skip
        if abs(f) < MOST_OFF * h_mm:
            found[w] = 1
            for a in range(3):
                placed[w, a] = point[a]
