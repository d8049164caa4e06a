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

FEW_TRIANGLES = 20_000
"""Smaller meshes are tested for being closed by sorting, without compiling anything."""


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
    mesh, label = tidy_mesh(vertices_mm, triangles, label)
    require_closed(mesh, what)
    return mesh, label


def tidy_mesh(vertices_mm: Floats, triangles: Ints, label: Ints) -> tuple[Mesh, Ints]:
    """Returns what `make_file_mesh` returns, without the test that it is closed."""
    vertices, triangles = _weld(round_to_file(vertices_mm), triangles)
    triangles, label = _drop_collapsed(triangles, label)
    for _ in range(MOST_ROUNDS):
        length, height = _measure(vertices, triangles)
        short = length < WELD_MM
        if short.any():
            row, side = np.nonzero(short)
            edges = np.column_stack([triangles[row, side], triangles[row, (side + 1) % 3]])
            triangles = _merged(triangles, np.sort(edges, axis=1), len(vertices))
            triangles, label = _drop_collapsed(triangles, label)
            continue
        flat = np.flatnonzero(height < FLAT_HEIGHT_MM)
        if len(flat) == 0:
            break
        triangles, label = _flip_flat(vertices, triangles, label, flat, length[flat].argmax(axis=1))
    return _ordered(vertices, triangles, label)


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
    n = len(mesh.vertices_mm)
    if len(mesh.triangles) > FEW_TRIANGLES:
        from morph.kernels.collapse import pair_edges

        return bool(pair_edges(mesh.triangles, n, np.empty(mesh.triangles.size, np.int64)))
    start, end = mesh.triangles.ravel(), np.roll(mesh.triangles, -1, axis=1).ravel()
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


def _measure(vertices: Floats, triangles: Ints) -> tuple[Floats, Floats]:
    """Returns the side lengths (m, 3) of each triangle, from corner k to the next, and its least height (m,), in mm."""
    a, b, c = vertices[triangles[:, 0]], vertices[triangles[:, 1]], vertices[triangles[:, 2]]
    one, two = b - a, c - b
    length = np.sqrt(np.column_stack([(one**2).sum(axis=1), (two**2).sum(axis=1), ((a - c) ** 2).sum(axis=1)]))
    x = one[:, 1] * two[:, 2] - one[:, 2] * two[:, 1]
    y = one[:, 2] * two[:, 0] - one[:, 0] * two[:, 2]
    z = one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0]
    return length, np.sqrt(x * x + y * y + z * z) / np.maximum(length.max(axis=1), 1e-300)


def _flip_flat(vertices: Floats, triangles: Ints, label: Ints, flat: Ints, longest: Ints) -> tuple[Ints, Ints]:
    """Returns triangles and labels with the long edge of each flat triangle flipped, where that makes no double edge.

    A flat triangle (a, b, c) with b on its long edge a c hands b to the triangle (c, a, d) behind that edge: (a, b, d)
    and (b, c, d) take its place, with its label. `longest (len(flat),)` is the corner at which the long edge starts.
    """
    triangles, label = triangles.copy(), label.copy()
    n = len(vertices)
    a, b, c = triangles.T
    key = np.concatenate([a * n + b, b * n + c, c * n + a])
    order = np.argsort(key, kind="stable")
    directed = key[order]
    touched: set[int] = set()
    made: set[int] = set()
    for row, start in zip(flat.tolist(), longest.tolist(), strict=True):
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
    is_used = np.zeros(len(vertices), np.bool_)
    is_used[triangles] = True
    triangles = (np.cumsum(is_used) - 1)[triangles]
    a, b, c = triangles.T
    low = np.minimum(np.minimum(a, b), c)
    after = np.where(low == a, b, np.where(low == b, c, a))
    # on a closed mesh no two triangles share a directed edge, so the first two corners order them
    order = np.argsort(low * len(vertices) + after, kind="stable")
    triangles = np.column_stack([low, after, a + b + c - low - after])[order]
    return Mesh(vertices[is_used], triangles), label[order]
