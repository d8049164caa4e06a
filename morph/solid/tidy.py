"""A mesh as a file will hold it: float32 positions, welded, no flat triangle, in one fixed order.

Rounding moves a vertex by at most 4e-6 mm at 64 mm. It can make two vertices one, or lay three in
a line; both are repaired without opening the mesh, by collapsing the short edge or by flipping
the long edge of the flat triangle. The order does not depend on how the mesh was made: vertices
by (x, y, z), triangles by their lowest vertex first.
"""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats, Ints
from morph.core.errors import GeometryError
from morph.core.tolerance import WELD_MM
from morph.geometry.mesh import Mesh, measure_condition

FLAT_HEIGHT_MM = 1e-6
"""Triangles lower than this over their longest edge have no direction left after rounding to float32."""

MOST_ROUNDS = 12


def round_to_file(xyz_mm: Floats) -> Floats:
    """Returns positions (n, 3) rounded to the nearest float32, as float64."""
    return np.asarray(xyz_mm, dtype=np.float32).astype(np.float64)


def make_file_mesh(vertices_mm: Floats, triangles: Ints, label: Ints, what: str) -> tuple[Mesh, Ints]:
    """Returns the mesh as a file holds it, and the labels (m,) of its triangles.

    Args:
        vertices_mm: (n, 3).
        triangles: (k, 3).
        label: (k,) a number per triangle that follows it.
        what: what the mesh is, for the message.

    Raises:
        GeometryError: ``solid-not-closed`` when the result is not closed.
    """
    vertices, triangles = _weld(round_to_file(vertices_mm), triangles)
    triangles, label = _drop_collapsed(triangles, label)
    for _ in range(MOST_ROUNDS):
        short = _short_edges(vertices, triangles)
        if len(short):
            triangles = _merged(triangles, short, len(vertices))
            triangles, label = _drop_collapsed(triangles, label)
        flat = _flat_triangles(vertices, triangles)
        if len(flat):
            triangles, label = _flip_flat(vertices, triangles, label, flat)
        elif len(short) == 0:
            break
    mesh, label = _ordered(vertices, triangles, label)
    require_closed(mesh, what)
    return mesh, label


def require_closed(mesh: Mesh, what: str) -> None:
    """Raises ``solid-not-closed`` when `mesh` is empty or any edge is not shared by two opposite triangles."""
    if is_closed(mesh):
        return
    condition = measure_condition(mesh)
    raise GeometryError(
        "solid-not-closed",
        expected="a closed mesh, every edge between two triangles",
        found=f"{condition.open_edges} open and {condition.odd_edges} odd edges in {len(mesh.triangles)} triangles",
        where=what,
        do="Set another [quality] h_mm (some hundredths of a mm away); if it stays, report the job.",
    )


def is_closed(mesh: Mesh) -> bool:
    """Returns whether every edge of `mesh` is shared by exactly two triangles, in opposite directions."""
    start, end = mesh.triangles.ravel(), np.roll(mesh.triangles, -1, axis=1).ravel()
    n = len(mesh.vertices_mm)
    there, back = np.sort(start * n + end), np.sort(end * n + start)
    return len(there) > 0 and bool((there == back).all()) and bool((there[1:] != there[:-1]).all())


def _weld(vertices_mm: Floats, triangles: Ints) -> tuple[Floats, Ints]:
    """Returns the distinct vertices by (x, y, z), -0 as 0, and the triangles on them."""
    vertices = vertices_mm + 0.0
    order = np.lexsort((vertices[:, 2], vertices[:, 1], vertices[:, 0]))
    by_place = vertices[order]
    fresh = np.concatenate([[True], (by_place[1:] != by_place[:-1]).any(axis=1)])
    number = np.empty(len(vertices), np.int64)
    number[order] = np.cumsum(fresh) - 1
    return by_place[fresh], number[triangles]


def _drop_collapsed(triangles: Ints, label: Ints) -> tuple[Ints, Ints]:
    """Drops triangles with a repeated vertex, and pairs of triangles on the same three vertices facing each other."""
    a, b, c = triangles.T
    kept = (a != b) & (b != c) & (c != a)
    triangles, label = triangles[kept], label[kept]
    if kept.all():
        return triangles, label
    low = np.sort(triangles, axis=1)
    order = np.lexsort(low.T)
    same = (low[order][1:] == low[order][:-1]).all(axis=1)
    twin = np.zeros(len(triangles), np.bool_)
    twin[order[1:][same]] = True
    twin[order[:-1][same]] = True
    return triangles[~twin], label[~twin]


def _short_edges(vertices: Floats, triangles: Ints) -> Ints:
    """Returns the edges (k, 2), lower vertex first, shorter than the welding distance."""
    edges = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [2, 0]]])
    edges = edges[edges[:, 0] < edges[:, 1]]
    short = ((vertices[edges[:, 1]] - vertices[edges[:, 0]]) ** 2).sum(axis=1) < WELD_MM**2
    return np.asarray(edges[short], dtype=np.int64)


def _merged(triangles: Ints, edges: Ints, n_vertices: int) -> Ints:
    """Returns the triangles with the ends of `edges` made one vertex (the lowest of each group)."""
    into = np.arange(n_vertices)
    for low, high in edges[np.lexsort((edges[:, 1], edges[:, 0]))]:
        one, two = int(low), int(high)
        while into[one] != one:
            one = int(into[one])
        while into[two] != two:
            two = int(into[two])
        into[max(one, two)] = min(one, two)
    while True:
        deeper = into[into]
        if (deeper == into).all():
            return np.asarray(into[triangles], dtype=np.int64)
        into = deeper


def _heights(vertices: Floats, triangles: Ints) -> tuple[Floats, Ints]:
    """Returns each triangle's height (m,) over its longest edge in mm, and the corner (m,) where that edge starts."""
    corner = vertices[triangles]
    side = np.roll(corner, -1, axis=1) - corner
    length = np.sqrt((side**2).sum(axis=2))
    area2 = np.linalg.norm(np.cross(side[:, 0], side[:, 1]), axis=1)
    return area2 / length.max(axis=1), length.argmax(axis=1)


def _flat_triangles(vertices: Floats, triangles: Ints) -> Ints:
    """Returns the numbers of the triangles without height."""
    return np.flatnonzero(_heights(vertices, triangles)[0] < FLAT_HEIGHT_MM)


def _flip_flat(vertices: Floats, triangles: Ints, label: Ints, flat: Ints) -> tuple[Ints, Ints]:
    """Returns triangles and labels with the long edge of each flat triangle flipped, where that makes no double edge.

    A flat triangle (a, b, c) with b on its long edge a c hands b to the triangle (c, a, d) behind that edge:
    (a, b, d) and (b, c, d) take its place, with its label.
    """
    triangles, label = triangles.copy(), label.copy()
    n = len(vertices)
    a, b, c = triangles.T
    key = np.concatenate([a * n + b, b * n + c, c * n + a])
    order = np.argsort(key, kind="stable")
    directed = key[order]
    _, starts = _heights(vertices, triangles[flat])
    touched: set[int] = set()
    made: set[int] = set()
    for row, start in zip(flat.tolist(), starts.tolist(), strict=True):
        end, corner, far = triangles[row, start], triangles[row, (start + 2) % 3], triangles[row, (start + 1) % 3]
        # the long edge runs end -> far; the corner lies on it; the triangle behind holds far -> end
        at = np.searchsorted(directed, far * n + end)
        if at == len(directed) or directed[at] != far * n + end:
            continue
        behind = int(order[at]) % len(triangles)
        if row in touched or behind in touched:
            continue
        apex = int(triangles[behind].sum() - far - end)
        new_edge = min(corner, apex) * n + max(corner, apex)
        back = np.searchsorted(directed, new_edge)
        if new_edge in made or apex == corner or (back < len(directed) and directed[back] == new_edge):
            continue
        made.add(new_edge)
        touched.update((row, behind))
        triangles[row] = (far, corner, apex)
        triangles[behind] = (corner, end, apex)
        label[row] = label[behind]
    return triangles, label


def _ordered(vertices: Floats, triangles: Ints, label: Ints) -> tuple[Mesh, Ints]:
    """Returns mesh and labels in the fixed order, unused vertices left out."""
    used = np.unique(triangles)
    triangles = np.searchsorted(used, triangles)
    first = triangles.argmin(axis=1)
    triangles = triangles[np.arange(len(triangles))[:, None], (first[:, None] + np.arange(3)) % 3]
    order = np.lexsort((triangles[:, 2], triangles[:, 1], triangles[:, 0]))
    return Mesh(vertices[used], triangles[order]), label[order]
