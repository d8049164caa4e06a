"""Machining stock on the flat ends of a mesh blank: each region carried straight out along its normal.

The region's triangles move by the stock and walls close the gap around them: no boolean, so the result is
closed whenever the mesh is. Where two such ends share an edge its points move onto both new planes, so that
the corner is filled; ends that are nearly in line keep a step between them.
"""

from __future__ import annotations

import numpy as np

from morph.body.blank import Blank
from morph.body.skin_face import FlatFace
from morph.core.arrays import Bools, Floats, Ints
from morph.geometry.mesh import Mesh

IN_LINE_COSINE = float(np.cos(np.radians(30.0)))
"""Ends whose normals turn by less than this from one to the other are not joined: their corner would run far out."""


def with_stock(blank: Blank) -> Mesh:
    """Returns the mesh of a mesh blank as printed.

    Args:
        blank: with a skin.

    Raises:
        ValueError: the blank is no mesh.
    """
    if blank.skin is None:
        raise ValueError("expected a blank given as a mesh")
    mesh = blank.skin.mesh
    faces = [face for face in blank.faces if isinstance(face, FlatFace) and face.stock_mm > 0.0]
    if not faces:
        return mesh
    owner = np.full(len(mesh.triangles), -1, dtype=np.int64)
    for k, face in enumerate(faces):
        owner[blank.skin.region == face.region] = k
    rows = np.flatnonzero(owner >= 0)
    normals = np.array([face.normal for face in faces])
    stock_mm = np.array([face.stock_mm for face in faces])
    return _carried_out(mesh, rows, owner[rows], normals, stock_mm)


def _carried_out(mesh: Mesh, rows: Ints, owner: Ints, normals: Floats, stock_mm: Floats) -> Mesh:
    """Returns `mesh` with the triangles `rows (k,)` moved out and walls around them.

    Args:
        mesh: closed.
        rows: (k,) triangles that move.
        owner: (k,) the end each belongs to.
        normals: (e, 3) unit normals of the ends.
        stock_mm: (e,) how far each moves.
    """
    region = mesh.triangles[rows]
    n, k = len(mesh.vertices_mm), len(rows)
    start, end = region.T.reshape(-1), np.roll(region, -1, axis=1).T.reshape(-1)
    inner, twin = _paired(start, end, n)
    side = np.arange(3 * k) % k
    joined = normals @ normals.T < IN_LINE_COSINE
    np.fill_diagonal(joined, True)
    inner &= joined[owner[side], owner[side[twin]]]
    piece = _pieces(side[inner], side[twin[inner]], k)
    # one new vertex for each vertex of each piece, so that pieces that only touch stay apart
    pair, number = np.unique(piece[side] * n + start, return_inverse=True)
    lifted = mesh.vertices_mm[pair % n] + _moves(number, owner[side], len(pair), normals, stock_mm)
    moved = number.reshape(3, k).T + n
    rim = ~inner
    a, b = start[rim], end[rim]
    a_out, b_out = moved.T.reshape(-1)[rim], np.roll(moved, -1, axis=1).T.reshape(-1)[rim]
    walls = np.concatenate([np.column_stack([a, b, b_out]), np.column_stack([a, b_out, a_out])])
    triangles = mesh.triangles.copy()
    triangles[rows] = moved
    return Mesh(np.concatenate([mesh.vertices_mm, lifted]), np.concatenate([triangles, walls]))


def _paired(start: Ints, end: Ints, n_vertices: int) -> tuple[Bools, Ints]:
    """Returns which sides (s,) have their opposite side in the list, and its row (s,), any row where they have none."""
    key, back = start * n_vertices + end, end * n_vertices + start
    order = np.argsort(key, kind="stable")
    place = np.minimum(np.searchsorted(key[order], back), len(key) - 1)
    twin = order[place]
    return np.asarray(key[twin] == back, dtype=np.bool_), twin


def _pieces(one: Ints, two: Ints, count: int) -> Ints:
    """Returns the number of the edge-connected piece (count,) of each triangle."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    graph = coo_array((np.ones(len(one), np.int8), (one, two)), shape=(count, count))
    return np.asarray(connected_components(graph, directed=False)[1], dtype=np.int64)


def _moves(number: Ints, owner: Ints, count: int, normals: Floats, stock_mm: Floats) -> Floats:
    """Returns how each new vertex moves (count, 3): the shortest way onto the new planes of all its ends."""
    of = np.zeros((count, len(stock_mm)), dtype=np.bool_)
    of[number, owner] = True
    moves = np.empty((count, 3))
    kinds, kind = np.unique(of, axis=0, return_inverse=True)
    for row, ends in enumerate(kinds):
        move, *_ = np.linalg.lstsq(normals[ends], stock_mm[ends], rcond=None)
        moves[kind.reshape(-1) == row] = move
    return moves
