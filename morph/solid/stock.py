"""Machining stock on the flat ends of a mesh blank: each region carried straight out along its normal.

The region's triangles move by the stock and walls close the gap around them: no boolean, so the result is
closed whenever the mesh is. Between two ends with stock that share an edge the corner stays open.
"""

from __future__ import annotations

import numpy as np

from morph.body.blank import Blank
from morph.body.skin_face import FlatFace
from morph.core.arrays import Floats, Ints
from morph.geometry.mesh import Mesh


def with_stock(blank: Blank) -> Mesh:
    """Returns the mesh of a mesh blank as printed.

    Args:
        blank: with a skin.

    Raises:
        ValueError: the blank is no mesh.
    """
    if blank.skin is None:
        raise ValueError("expected a blank given as a mesh")
    vertices, triangles = blank.skin.mesh.vertices_mm, blank.skin.mesh.triangles
    for face in blank.faces:
        if isinstance(face, FlatFace) and face.stock_mm > 0.0:
            rows = np.flatnonzero(blank.skin.region == face.region)
            vertices, triangles = _carried_out(vertices, triangles, rows, face.stock_mm * face.normal)
    return Mesh(vertices, triangles)


def _carried_out(vertices: Floats, triangles: Ints, rows: Ints, move_mm: Floats) -> tuple[Floats, Ints]:
    """Returns vertices and triangles with those in `rows (k,)` moved by `move_mm (3,)` and walls around them.

    Every edge-connected piece gets its own corners, so pieces that touch in a point stay apart.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    region = triangles[rows]
    start, end = region.T.reshape(-1), np.roll(region, -1, axis=1).T.reshape(-1)
    n, k = len(vertices), len(rows)
    key, back = start * n + end, end * n + start
    order = np.argsort(key, kind="stable")
    place = np.minimum(np.searchsorted(key[order], back), len(key) - 1)
    inner = key[order][place] == back
    one, two = np.flatnonzero(inner) % k, order[place[inner]] % k
    _, piece = connected_components(coo_array((np.ones(len(one), np.int8), (one, two)), shape=(k, k)), directed=False)
    # one new vertex for each vertex of each piece
    pair, number = np.unique(np.tile(piece, 3) * n + region.T.reshape(-1), return_inverse=True)
    moved = number.reshape(3, k).T + n
    lifted = vertices[pair % n] + move_mm
    a, b = start[~inner], end[~inner]
    a_out = moved.T.reshape(-1)[~inner]
    b_out = np.roll(moved, -1, axis=1).T.reshape(-1)[~inner]
    walls = np.concatenate([np.column_stack([a, b, b_out]), np.column_stack([a, b_out, a_out])])
    result = triangles.copy()
    result[rows] = moved
    return np.concatenate([vertices, lifted]), np.concatenate([result, walls]).astype(np.int64)
