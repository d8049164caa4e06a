"""The channel wall as triangles: closed, 2-manifold, facing outwards (out of the coolant)."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from morph.core.arrays import Bools, Floats, Ints
from morph.core.progress import Progress
from morph.geometry.slabs import run_slabs
from morph.solid.field import BLOCKS_PER_SLAB, SampledField

CHORD_BIAS = 0.07
"""Vertices on a round wall of radius r are placed at the level 0.07 h^2 / r: makes up for the chords (measured)."""

NEWTON_STEPS = 2


@dataclass(frozen=True, slots=True, eq=False)
class Surface:
    """The surface of a field, with what tells which cell each vertex is from; work arrays, not copied.

    Args:
        vertices: (nv, 3) in mm, one per loop of each cell. normals: (nv, 3) float32 directions of the field there.
        triangles: (2 nq, 3); rows 2 q and 2 q + 1 make quad q.
        cases: (n, 8, 8, 8) uint16 case of each cell. first_vertex: (n, 8, 8, 8) int32 first vertex of each cell.
        vertex_offset: (n,) first vertex of each block. n_loops: (512,) loops of each case.
        end: (nv,) the end of a stretch each vertex is near to, negative for none (kernels/stretch.py).
    """

    vertices: Floats
    normals: NDArray[np.float32]
    triangles: Ints
    cases: NDArray[np.uint16]
    first_vertex: NDArray[np.int32]
    vertex_offset: Ints
    n_loops: Ints
    end: Ints


@cache
def _tables() -> tuple[Ints, Ints, Ints]:
    from morph.kernels.dual_surface import make_loop_tables

    return make_loop_tables()


def extract_surface(field: SampledField, progress: Progress, steps: int = NEWTON_STEPS) -> Surface:
    """Returns the surface of `field`; every vertex lies in its own cell.

    Args:
        field: the sampled field.
        progress: told after each slab of blocks.
        steps: Newton steps of each vertex towards the field's zero; 0 leaves it at the mean of its edge
            crossings, a coarser place that never folds, without normals.
    """
    from morph.kernels.dual_surface import count_cells, join_quads, place_vertices

    loop_of, n_loops, double_face = _tables()
    n = len(field.corner)
    cases = np.empty(field.codes.shape, np.uint16)
    n_vertices, n_quads = np.zeros(n, np.int64), np.zeros(n, np.int64)
    run_slabs(
        "solid: cells",
        n,
        4 * BLOCKS_PER_SLAB,
        lambda a, b: count_cells(a, b, field.codes, field.neighbours, n_loops, double_face, cases, n_vertices, n_quads),
        progress,
    )
    first_vertex = np.empty(field.codes.shape, np.int32)
    vertices = np.empty((int(n_vertices.sum()), 3))
    normals = np.zeros((len(vertices), 3), np.float32)
    piece = np.zeros(len(vertices), np.int32)
    vertex_offset = np.cumsum(n_vertices) - n_vertices
    arguments = field.kernel_arguments()
    tables = (field.values, cases, loop_of, n_loops, vertex_offset, CHORD_BIAS, steps)
    run_slabs(
        "solid: vertices",
        n,
        BLOCKS_PER_SLAB,
        lambda a, b: place_vertices(a, b, *arguments, *tables, first_vertex, vertices, normals, piece),
        progress,
    )
    made = np.empty((2 * int(n_quads.sum()), 3), np.int32)
    quad_offset = np.cumsum(n_quads) - n_quads
    joined = (field.codes, cases, field.neighbours, loop_of, first_vertex, vertices, quad_offset, made)
    run_slabs("solid: triangles", n, 2 * BLOCKS_PER_SLAB, lambda a, b: join_quads(a, b, *joined), progress)
    end = field.end[piece]
    triangles = _without_swept(field, vertices, end, made)
    return Surface(vertices, normals, triangles, cases, first_vertex, vertex_offset, n_loops, end)


def _without_swept(field: SampledField, vertices: Floats, end: Ints, triangles: NDArray[np.int32]) -> Ints:
    """Returns the triangles of the quads that are not left to rings."""
    if len(field.planes) == 0:
        if triangles.size and triangles.min() < 0:
            raise RuntimeError("the sampled field is not closed: a cell beside a crossed edge was skipped")
        return triangles.astype(np.int64)
    gone = np.append(beyond_planes(vertices, end, field.planes), True)  # the last one answers for skipped vertices
    by_triangle = any_corner(gone, triangles)
    lost = np.repeat(by_triangle[0::2] | by_triangle[1::2], 2)
    return triangles[~lost].astype(np.int64)


def any_corner(marked: Bools, triangles: NDArray[Any]) -> Bools:
    """Returns which triangles (m, 3) have a marked vertex; a third of the time of `any` over an axis of three."""
    a, b, c = triangles.T
    return np.asarray(marked[a] | marked[b] | marked[c])


def beyond_planes(vertices: Floats, end: Ints, planes: Floats) -> Bools:
    """Returns which vertices (n, 3) lie in a stretch, beyond the plane of the end (n,) they are near to."""
    from morph.kernels.stretch import INSIDE

    near = np.flatnonzero(end >= 0)
    plane = planes[end[near]]
    beyond: Bools = np.asarray(end == INSIDE)
    beyond[near] = ((vertices[near] - plane[:, :3]) * plane[:, 3:]).sum(axis=1) > 0.0
    return beyond
