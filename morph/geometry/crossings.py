"""Self-crossing test of a mesh: how many pairs of triangles pass through each other, and which."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.core.progress import SILENT, Progress
from morph.geometry.mesh import Mesh
from morph.geometry.slabs import run_slabs

LEAVES_PER_SLAB = 4096
TRIANGLES_PER_SLAB = 100_000
GRID_BITS = 20


@dataclass(frozen=True, slots=True, eq=False)
class Crossings:
    """Pairs of triangles that cross strictly: their number, and `crossed (m,)` true for every triangle in one."""

    pairs: int
    crossed: Bools


def measure_crossings(mesh: Mesh, progress: Progress = SILENT) -> Crossings:
    """Returns the strict self-crossings of `mesh`.

    Touching, triangles that share an edge, and overlaps within one plane do not count. Two shells that mirror each
    other edge on edge are therefore not seen.
    """
    from morph.kernels.crossing import find_crossings

    if len(mesh.triangles) == 0:
        return Crossings(0, np.zeros(0, np.bool_))
    order = _space_filling_order(mesh.vertices_mm, mesh.triangles)
    triangles = np.ascontiguousarray(mesh.triangles[order])
    triangle_boxes, boxes, n_leaves = _box_tree(mesh.vertices_mm, triangles)
    pairs, crossed = np.zeros(n_leaves, np.int64), np.zeros(len(triangles), np.uint8)
    vertices = mesh.vertices_mm
    run_slabs(
        "solid: crossings",
        n_leaves,
        LEAVES_PER_SLAB,
        lambda a, b: find_crossings(a, b, vertices, triangles, triangle_boxes, boxes, n_leaves, pairs, crossed),
        progress,
    )
    back = np.zeros(len(triangles), np.bool_)
    back[order] = crossed > 0
    return Crossings(int(pairs.sum()), back)


def measure_crossings_of(mesh: Mesh, asked: Bools, progress: Progress = SILENT) -> Crossings:
    """Returns the strict crossings of `mesh` that have one of the `asked (m,)` triangles in them.

    Much less work than `measure_crossings` where few are asked for. Crossings of other triangles may be
    among those returned, where they lie beside.
    """
    from morph.kernels.crossing import mark_near

    rows = np.flatnonzero(asked)
    if len(rows) == 0:
        return Crossings(0, np.zeros(len(mesh.triangles), np.bool_))
    vertices, every = mesh.vertices_mm, np.ascontiguousarray(mesh.triangles)
    few = every[rows]
    _, boxes, n_leaves = _box_tree(vertices, few[_space_filling_order(vertices, few)])
    near = np.zeros(len(every), np.uint8)
    run_slabs(
        "solid: crossings",
        len(every),
        TRIANGLES_PER_SLAB,
        lambda a, b: mark_near(a, b, vertices, every, boxes, n_leaves, near),
        progress,
    )
    beside = np.flatnonzero(near)
    found = measure_crossings(Mesh(vertices, every[beside]), progress)
    crossed = np.zeros(len(every), np.bool_)
    crossed[beside[found.crossed]] = True
    return Crossings(found.pairs, crossed)


def _space_filling_order(vertices_mm: Floats, triangles: Ints) -> Ints:
    """Returns the order of the triangles' centres along a Z-order curve (bits of x, y, z interleaved)."""
    from morph.kernels.crossing import place_codes

    codes = np.empty(len(triangles), np.uint64)
    place_codes(vertices_mm, triangles, GRID_BITS, codes)
    return np.argsort(codes, kind="stable")


def _box_tree(vertices_mm: Floats, triangles: Ints) -> tuple[Floats, Floats, int]:
    """Returns the box of each triangle (m, 6), the heap of boxes (2 n_leaves, 6) over them in order, and n_leaves."""
    from morph.kernels.crossing import LEAF, fill_boxes

    n_leaves = 1
    while n_leaves * LEAF < len(triangles):
        n_leaves *= 2
    triangle_boxes, boxes = np.empty((len(triangles), 6)), np.empty((2 * n_leaves, 6))
    fill_boxes(vertices_mm, triangles, triangle_boxes, boxes, n_leaves)
    return triangle_boxes, boxes, n_leaves
