"""Creases of the channel wall made sharp: ridges of roofs, edges where channels meet without a fillet.

Vertices of cells with a crease move onto it, quads there are split along it, and edges that still cut across it get
a vertex on it. Only triangles near moved or new vertices are tested for crossings; where some cross, new
vertices are given up first, then moved ones go back to where they were.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.core.progress import SILENT, Progress
from morph.geometry.crossings import measure_crossings, measure_crossings_of
from morph.geometry.mesh import Mesh
from morph.geometry.slabs import run_slabs
from morph.solid.extract import Surface, any_corner
from morph.solid.field import BLOCKS_PER_SLAB, SampledField
from morph.solid.tidy import round_to_file

SMOOTHEST_COSINE = 0.93
"""Normals of neighbouring cells that turn more than this may belong to two sheets."""

CELLS_OF_TURN = 2.2
"""On a smooth wall of radius r the normals of neighbouring cells turn by less than 2.2 h / r."""

MOST_ROUNDS = 12
SPLITS_FIRST = 3
"""Rounds in which only new vertices are given up."""

WIDER_AFTER = 5
"""Rounds after which the neighbours of crossing triangles go back too."""

ITEMS_PER_SLAB = 4096
FOLDED = -0.1
"""Cosine between a triangle and the field below which the triangle is folded over."""


@dataclass(frozen=True, slots=True, eq=False)
class _Turns:
    """Where normals turn: beyond this cosine, and only at the triangles of the vertices `near (nv,)`."""

    least_cosine: float
    near: Bools


@dataclass(frozen=True, slots=True, eq=False)
class _Split:
    """Edges (k, 2) of the mesh with a new vertex (k, 3) each."""

    edges: Ints
    placed: Floats


def sharpen(field: SampledField, surface: Surface, progress: Progress = SILENT) -> tuple[Floats, Ints]:
    """Returns vertices (n, 3), rounded to float32, and triangles (m, 3) of the surface with its creases.

    The vertices of `surface` come first, in their order, new ones after them.

    Args:
        field: what `surface` was extracted from.
        surface: with normals.
        progress: told after each slab of cells; may raise Cancelled.
    """
    smallest = float(np.minimum(field.sweep.pieces[:, 7], _end_radius(field)).min())
    least_cosine = min(SMOOTHEST_COSINE, float(np.cos(min(CELLS_OF_TURN * field.h_mm / smallest, 1.2))))
    plain = round_to_file(surface.vertices)
    chosen, placed, turns = _crease_vertices(field, surface, least_cosine, progress)
    sharp = np.zeros(len(plain), np.bool_)
    sharp[chosen] = True
    target = plain.copy()
    target[chosen] = round_to_file(placed)
    given_up, n = np.zeros(0, np.int64), len(plain)
    asked: Bools | None = None
    quads, moved = surface.triangles, np.ones(n, np.bool_)
    for turn in range(MOST_ROUNDS):
        if asked is None:
            vertices = np.where(sharp[:, None], target, plain)
            quads = _turn_quads(field, surface, vertices, sharp, quads, moved, progress)
            triangles = _flip_edges(field, surface, vertices, quads, sharp, turns, progress)
            split = _find_splits(field, surface, vertices, triangles, sharp, turns, given_up, progress)
        made, joined = _with_splits(vertices, triangles, split)
        touched = np.ones(len(made), np.bool_)
        touched[:n] = sharp
        bad = _crossing_vertices(made, joined, touched, asked, turn >= WIDER_AFTER, progress)
        if not bad.any():
            return made, joined
        lost = split.edges[bad[n:]]
        given_up = np.concatenate([given_up, lost[:, 0] * n + lost[:, 1]])
        if turn < SPLITS_FIRST and len(lost):
            split = _Split(split.edges[~bad[n:]], split.placed[~bad[n:]])
            asked = bad[:n].copy()
            asked[lost] = True
        else:
            asked = None
            moved = sharp & bad[:n]
            sharp &= ~moved
    return plain, surface.triangles


def _end_radius(field: SampledField) -> Floats:
    pieces = field.sweep.pieces
    return np.asarray(pieces[:, 7] + pieces[:, 8] * pieces[:, 6])


def _crease_vertices(
    field: SampledField, surface: Surface, least_cosine: float, progress: Progress
) -> tuple[Ints, Floats, _Turns]:
    """Returns the vertices (k,) that have a crease in their cell, their places (k, 3) on it, and where to look on."""
    from morph.kernels.crease import mark_creases, place_on_creases

    marked = np.zeros(len(surface.vertices), np.uint8)
    cells_of = (surface.cases, field.neighbours, surface.n_loops, surface.first_vertex)
    run_slabs(
        "solid: creases",
        len(field.corner),
        4 * BLOCKS_PER_SLAB,
        lambda a, b: mark_creases(a, b, *cells_of, surface.normals, least_cosine, marked),
        progress,
    )
    chosen = np.flatnonzero(marked)
    filled = np.flatnonzero(surface.n_loops[surface.cases.ravel()] > 0)
    cell_of = np.empty(len(surface.vertices), np.int64)
    cell_of[surface.first_vertex.ravel()[filled]] = filled
    cells = cell_of[chosen]
    placed, found = np.empty((len(cells), 3)), np.zeros(len(cells), np.uint8)
    around = (*field.kernel_arguments(), cells, *cells_of, surface.vertices, surface.normals)
    run_slabs(
        "solid: creases",
        len(cells),
        ITEMS_PER_SLAB,
        lambda a, b: place_on_creases(a, b, *around, placed, found),
        progress,
    )
    near = marked > 0
    near[surface.triangles[any_corner(near, surface.triangles)]] = True
    return chosen[found > 0], placed[found > 0], _Turns(least_cosine, near)


def _field_at(field: SampledField, points: Floats, block: Ints, progress: Progress) -> tuple[Floats, Floats]:
    """Returns field (k,) and directions (k, 3) at points (k, 3); `block` counts where a point lies in no active one."""
    from morph.kernels.crease_edge import field_at_points

    values, directions = np.empty(len(points)), np.empty((len(points), 3))
    arguments = (*field.list_arguments(), field.block_at(points, block), points)
    run_slabs(
        "solid: creases",
        len(points),
        ITEMS_PER_SLAB,
        lambda a, b: field_at_points(a, b, *arguments, values, directions),
        progress,
    )
    return values, directions


def _block_of(surface: Surface, vertex: Ints) -> Ints:
    """Returns the block each vertex is from."""
    return np.searchsorted(surface.vertex_offset, vertex, side="right") - 1


def _turn_quads(
    field: SampledField, surface: Surface, vertices: Floats, sharp: Bools, before: Ints, moved: Bools,
    progress: Progress,
) -> Ints:  # fmt: skip
    """Returns the triangles with each quad at a crease vertex split along the diagonal that lies on the surface.

    A diagonal whose triangles fold over is taken only if both do. Quads without a vertex that `moved (n,)` stay as
    they were `before`.
    """
    lower, upper = surface.triangles[0::2], surface.triangles[1::2]
    again = np.flatnonzero(any_corner(moved, lower) | moved[upper[:, 2]])
    triangles = before.copy()
    triangles[2 * again], triangles[2 * again + 1] = lower[again], upper[again]
    rows = again[any_corner(sharp, lower[again]) | sharp[upper[again, 2]]]
    if not len(rows):
        return triangles
    ring = np.column_stack([triangles[2 * rows], triangles[2 * rows + 1, 2]])
    block = _block_of(surface, ring[:, 0])
    off, folded = [], []
    for turn in range(2):
        a, b, c, d = (vertices[ring[:, (k + turn) % 4]] for k in range(4))
        middle, _ = _field_at(field, 0.5 * (a + c), block, progress)
        off.append(np.abs(middle))
        over = np.zeros(len(rows), np.bool_)
        for one, two, three in ((a, b, c), (a, c, d)):
            _, way = _field_at(field, (one + two + three) / 3.0, block, progress)
            normal = np.cross(two - one, three - one)
            over |= (normal * way).sum(axis=1) < FOLDED * np.linalg.norm(normal, axis=1)
        folded.append(over)
    other = np.where(folded[0] == folded[1], off[1] < off[0], folded[0])
    at, ring = rows[other], ring[other]
    triangles[2 * at] = ring[:, [1, 2, 3]]
    triangles[2 * at + 1] = ring[:, [1, 3, 0]]
    return triangles


def _cutting_edges(surface: Surface, triangles: Ints, sharp: Bools, turns: _Turns) -> tuple[Ints, Ints, Ints]:
    """Returns edges (k, 2) whose ends lie off the crease with differing normals, each once; its triangle and corner."""
    rows = np.flatnonzero(any_corner(turns.near, triangles))
    few = triangles[rows]
    edges = np.concatenate([few[:, [0, 1]], few[:, [1, 2]], few[:, [2, 0]]])
    kept = np.flatnonzero(
        (edges[:, 0] < edges[:, 1])
        & ~(sharp[edges[:, 0]] | sharp[edges[:, 1]])
        & ((surface.normals[edges[:, 0]] * surface.normals[edges[:, 1]]).sum(axis=1) < turns.least_cosine)
    )
    return edges[kept], rows[kept % max(len(rows), 1)], kept // max(len(rows), 1)


def _flip_edges(
    field: SampledField, surface: Surface, vertices: Floats, triangles: Ints, sharp: Bools, turns: _Turns,
    progress: Progress,
) -> Ints:  # fmt: skip
    """Returns the triangles with edges that cut across a crease flipped where the other two corners lie on it."""
    edges, row, corner = _cutting_edges(surface, triangles, sharp, turns)
    c = triangles[row, (corner + 2) % 3]
    keep = sharp[c]
    edges, row, c = edges[keep], row[keep], c[keep]
    n = len(vertices)
    near = np.flatnonzero(any_corner(~sharp, triangles) & any_corner(sharp, triangles))
    directed = np.concatenate([triangles[near, k] * n + triangles[near, (k + 1) % 3] for k in range(3)])
    order = np.argsort(directed)
    wanted = edges[:, 1] * n + edges[:, 0]
    if not len(order) or not len(wanted):
        return triangles
    at = order[np.minimum(np.searchsorted(directed[order], wanted), len(order) - 1)]
    keep = directed[at] == wanted
    edges, row, c, at = edges[keep], row[keep], c[keep], at[keep]
    behind = near[at % len(near)]
    d = triangles[behind, (at // len(near) + 2) % 3]
    keep = sharp[d]
    edges, row, c, behind, d = edges[keep], row[keep], c[keep], behind[keep], d[keep]
    a, b = edges.T
    block = _block_of(surface, a)
    now, _ = _field_at(field, 0.5 * (vertices[a] + vertices[b]), block, progress)
    then, _ = _field_at(field, 0.5 * (vertices[c] + vertices[d]), block, progress)
    better = np.abs(then) < 0.5 * np.abs(now)
    for one, two, three in ((a, d, c), (b, c, d)):
        corners = vertices[one], vertices[two], vertices[three]
        _, way = _field_at(field, (corners[0] + corners[1] + corners[2]) / 3.0, block, progress)
        normal = np.cross(corners[1] - corners[0], corners[2] - corners[0])
        better &= (normal * way).sum(axis=1) > 0.5 * np.linalg.norm(normal, axis=1)
    rows = np.flatnonzero(better)
    both = np.concatenate([row[rows], behind[rows]])
    once = np.bincount(both, minlength=len(triangles)) == 1  # a triangle takes part in one flip
    rows = rows[once[row[rows]] & once[behind[rows]]]
    triangles = triangles.copy()
    triangles[row[rows]] = np.column_stack([a, d, c])[rows]
    triangles[behind[rows]] = np.column_stack([b, c, d])[rows]
    return triangles


def _find_splits(
    field: SampledField, surface: Surface, vertices: Floats, triangles: Ints, sharp: Bools, turns: _Turns,
    given_up: Ints, progress: Progress,
) -> _Split:  # fmt: skip
    """Returns the edges that cut across a crease between two vertices that are not on it, with the crease's places."""
    from morph.kernels.crease_edge import split_edges

    n = len(vertices)
    edges, _, _ = _cutting_edges(surface, triangles, sharp, turns)
    edges = edges[~np.isin(edges[:, 0] * n + edges[:, 1], given_up)]
    placed, found = np.empty((len(edges), 3)), np.zeros(len(edges), np.uint8)
    middle = 0.5 * (vertices[edges[:, 0]] + vertices[edges[:, 1]])
    block = field.block_at(middle, _block_of(surface, edges[:, 0]))
    arguments = (*field.list_arguments(), field.h_mm, block, edges, vertices, surface.normals)
    run_slabs(
        "solid: creases",
        len(edges),
        ITEMS_PER_SLAB,
        lambda a, b: split_edges(a, b, *arguments, placed, found),
        progress,
    )
    return _Split(edges[found > 0], round_to_file(placed[found > 0]))


def _with_splits(vertices: Floats, triangles: Ints, split: _Split) -> tuple[Floats, Ints]:
    """Returns the mesh with a vertex on each split edge; triangles beside two or three are cut in three or four."""
    n = len(vertices)
    if not len(split.edges):
        return vertices, triangles
    key = split.edges[:, 0] * n + split.edges[:, 1]
    order = np.argsort(key)
    at_split = np.zeros(n, np.bool_)
    at_split[split.edges] = True
    beside = at_split[triangles].sum(axis=1) >= 2
    untouched, triangles = triangles[~beside], triangles[beside]
    ends = np.sort(np.stack([triangles, np.roll(triangles, -1, axis=1)]), axis=0)
    wanted = ends[0] * n + ends[1]  # (m, 3): the edge from corner k to the next
    at = np.minimum(np.searchsorted(key[order], wanted), len(key) - 1)
    new = np.where(key[order][at] == wanted, n + order[at], -1)
    vertices = np.concatenate([vertices, split.placed])
    count = (new >= 0).sum(axis=1)
    parts = [untouched, triangles[count == 0]]
    for k in range(3):
        rows = (count == 1) & (new[:, k] >= 0)
        a, b, c = (triangles[rows, (k + j) % 3] for j in range(3))
        p = new[rows, k]
        parts += [np.column_stack([a, p, c]), np.column_stack([p, b, c])]
        rows = (count == 2) & (new[:, k] < 0)
        a, b, c = (triangles[rows, (k + j) % 3] for j in range(3))
        p, q = new[rows, (k + 1) % 3], new[rows, (k + 2) % 3]
        parts.append(np.column_stack([q, p, c]))
        away = ((vertices[a] - vertices[p]) ** 2).sum(axis=1) < ((vertices[b] - vertices[q]) ** 2).sum(axis=1)
        parts.append(np.where(away[:, None], np.column_stack([a, b, p]), np.column_stack([a, b, q])))
        parts.append(np.where(away[:, None], np.column_stack([a, p, q]), np.column_stack([b, p, q])))
    rows = count == 3
    (a, b, c), (p, q, r) = triangles[rows].T, new[rows].T
    parts += [np.column_stack(three) for three in ((a, p, r), (p, b, q), (r, q, c), (p, q, r))]
    return vertices, np.concatenate(parts)


def _crossing_vertices(
    vertices: Floats, triangles: Ints, touched: Bools, asked: Bools | None, wider: bool, progress: Progress
) -> Bools:
    """Returns the vertices (n,) of triangles that cross another, looking at touched vertices and two rings around.

    With `asked (k,)`, of the first k vertices, only triangles at those are looked at; what they cross may be others.
    """
    near = np.zeros(len(vertices), np.bool_)
    near[triangles[any_corner(touched, triangles)]] = True
    rows = np.flatnonzero(any_corner(near, triangles))
    if asked is None:
        crossed = measure_crossings(Mesh(vertices, triangles[rows]), progress).crossed
    else:
        at = np.zeros(len(vertices), np.bool_)
        at[: len(asked)] = asked
        mesh = Mesh(vertices, triangles[rows])
        crossed = measure_crossings_of(mesh, any_corner(at, mesh.triangles), progress).crossed
    bad = np.zeros(len(vertices), np.bool_)
    bad[triangles[rows[crossed]]] = True
    if wider:
        bad[triangles[any_corner(bad, triangles)]] = True
    return bad
