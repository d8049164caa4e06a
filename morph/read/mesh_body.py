"""Whether a mesh bounds one solid body: closed, one orientation, one piece, no crossing; each fault by its own name.

Counted on edges, never by parity: an edge of a body lies between exactly two triangles that run along it in
opposite directions, around a vertex all its triangles form one fan, and the signed volume is positive.
Crossings are strict (see geometry/crossings.py): coplanar overlaps are not seen.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.core.errors import InputError
from morph.core.progress import SILENT, Progress
from morph.core.verdict import Notice
from morph.core.words import counted
from morph.geometry.crossings import measure_crossings
from morph.geometry.mesh import Mesh, mesh_area_mm2, mesh_volume_mm3

LEAST_VOLUME_MM3 = 1.0
LEAST_FULLNESS = 1e-5
"""A body whose volume is below this share of area^1.5 is a folded sheet (a sphere has 0.094)."""

MOST_NAMED, MOST_MEASURED = 4, 50
"""Pieces whose volume an error names, and pieces measured for it."""


@dataclass(frozen=True, slots=True, eq=False)
class _Edges:
    """The undirected edges of a mesh: vertices low < high (e,), triangles on each, and how many run low to high.

    Args:
        low, high: vertices of each edge. count: triangles on it. upward: of these, those that run from low to high.
        edge_of_side: (3 m,) edge of each side; side k of triangle t is row t + k m.
    """

    low: Ints
    high: Ints
    count: Ints
    upward: Ints
    edge_of_side: Ints


def require_body(mesh: Mesh, name: str, progress: Progress = SILENT) -> tuple[Mesh, tuple[Notice, ...]]:
    """Returns the mesh facing outwards, and a notice when it had to be turned.

    Args:
        mesh: welded triangles.
        name: base name of the file, for messages.
        progress: told by the crossing test.

    Raises:
        InputError: `mesh-edge-of-three`, `mesh-open`, `mesh-mixed-orientation`, `mesh-pinched`, `mesh-several-bodies`,
            `mesh-no-volume`, `mesh-crosses-itself`.
    """
    edges = _edges_of(mesh)
    _require_pairs(mesh, edges, name)
    label = _label_fans(mesh, edges)
    _require_one_fan(mesh, label, name)
    _require_one_body(mesh, edges, name)
    volume = mesh_volume_mm3(mesh)
    area = mesh_area_mm2(mesh)
    if abs(volume) < max(LEAST_VOLUME_MM3, LEAST_FULLNESS * area**1.5):
        raise InputError(
            "mesh-no-volume",
            expected="a body with a volume",
            found=f"{abs(volume):.6g} mm3 within {area:.6g} mm2 of surface",
            where=name,
            do="Export the solid body, not a sheet folded onto itself.",
        )
    found = measure_crossings(mesh, progress)
    if found.pairs:
        raise InputError(
            "mesh-crosses-itself",
            expected="a surface that does not pass through itself",
            found=f"{counted(found.pairs, 'pair')} of triangles that cross",
            where=f"{name} at {_place(mesh.vertices_mm[mesh.triangles[int(found.crossed.argmax())]].mean(axis=0))}",
            do="Unite the overlapping bodies or repair the surface there, and export it again.",
        )
    if volume > 0.0:
        return mesh, ()
    text = f"{name} faced inwards on all {len(mesh.triangles)} triangles; it was turned outwards."
    return Mesh(mesh.vertices_mm, mesh.triangles[:, ::-1]), (Notice("mesh-turned-outwards", text),)


def _place(xyz_mm: Floats) -> str:
    x, y, z = xyz_mm
    return f"({x:.3f}, {y:.3f}, {z:.3f}) mm"


def _edges_of(mesh: Mesh) -> _Edges:
    a, b, c = mesh.triangles.T
    start, end = np.concatenate([a, b, c]), np.concatenate([b, c, a])
    n = len(mesh.vertices_mm)
    key, inverse, count = np.unique(
        np.minimum(start, end) * n + np.maximum(start, end), return_inverse=True, return_counts=True
    )
    edge = inverse.astype(np.int64)
    upward = np.bincount(edge[start < end], minlength=len(key))
    return _Edges(key // n, key % n, count.astype(np.int64), upward.astype(np.int64), edge)


def _require_pairs(mesh: Mesh, edges: _Edges, name: str) -> None:
    """Raises unless every edge lies between two triangles that run along it in opposite directions."""

    def first(which: Bools) -> str:
        row = int(which.argmax())
        ends = mesh.vertices_mm[[edges.low[row], edges.high[row]]]
        return f"{name} at {_place(ends.mean(axis=0))}"

    crowded = edges.count > 2
    if crowded.any():
        raise InputError(
            "mesh-edge-of-three",
            expected="edges between exactly two triangles",
            found=f"{counted(int(crowded.sum()), 'edge')} of three or more (at most {int(edges.count.max())})",
            where=first(crowded),
            do="Remove inner walls and doubled faces; bodies that touch along an edge must be united.",
        )
    single = edges.count == 1
    if single.any():
        holes, longest = _holes(mesh, edges, single)
        raise InputError(
            "mesh-open",
            expected="a closed surface",
            found=f"{counted(holes, 'hole')} with {counted(int(single.sum()), 'open edge')}, the longest rim "
            f"{longest:.3f} mm",
            where=first(single),
            do="Close the holes in the program the mesh comes from, or export the solid body.",
        )
    same_way = edges.upward != 1
    if same_way.any():
        raise InputError(
            "mesh-mixed-orientation",
            expected="triangles that all face outwards",
            found=f"{counted(int(same_way.sum()), 'edge')} between triangles that face opposite sides",
            where=first(same_way),
            do="Make the normals consistent in the program the mesh comes from, and export it again.",
        )


def _holes(mesh: Mesh, edges: _Edges, single: Bools) -> tuple[int, float]:
    """Returns the number of connected rims of open edges, and the length in mm of the longest."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    low, high, n = edges.low[single], edges.high[single], len(mesh.vertices_mm)
    _, label = connected_components(coo_array((np.ones(len(low), np.int8), (low, high)), shape=(n, n)), directed=False)
    length = np.linalg.norm(mesh.vertices_mm[low] - mesh.vertices_mm[high], axis=1)
    _, rim = np.unique(label[low], return_inverse=True)
    total = np.bincount(rim, length)
    return len(total), float(total.max())


def _sides_by_edge(edges: _Edges) -> tuple[Ints, Ints]:
    """Returns the two sides (e,) that meet at each edge of a closed mesh."""
    order = np.argsort(edges.edge_of_side, kind="stable")
    return order[0::2], order[1::2]


def _label_fans(mesh: Mesh, edges: _Edges) -> Ints:
    """Returns a label (3 m,) per corner (row t + k m): corners of one vertex that share triangles' edges share it."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    m = len(mesh.triangles)
    one, two = _sides_by_edge(edges)
    triangle_one, triangle_two = one % m, two % m
    # side k runs from corner k to corner k + 1; on the opposite side of the edge they change places
    next_one, next_two = triangle_one + (one // m + 1) % 3 * m, triangle_two + (two // m + 1) % 3 * m
    rows, columns = np.concatenate([one, next_one]), np.concatenate([next_two, two])
    graph = coo_array((np.ones(len(rows), np.int8), (rows, columns)), shape=(3 * m, 3 * m))
    return np.asarray(connected_components(graph, directed=False)[1], dtype=np.int64)


def _require_one_fan(mesh: Mesh, label: Ints, name: str) -> None:
    vertex = mesh.triangles.T.reshape(-1)
    _, row = np.unique(label, return_index=True)
    fans = np.bincount(vertex[row], minlength=len(mesh.vertices_mm))
    pinched = fans > 1
    if pinched.any():
        raise InputError(
            "mesh-pinched",
            expected="points around which the surface is one sheet",
            found=f"{counted(int(pinched.sum()), 'point')} where parts of the surface touch only there",
            where=f"{name} at {_place(mesh.vertices_mm[int(pinched.argmax())])}",
            do="Separate or join the parts there, and export it again.",
        )


def _require_one_body(mesh: Mesh, edges: _Edges, name: str) -> None:
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    m = len(mesh.triangles)
    one, two = _sides_by_edge(edges)
    graph = coo_array((np.ones(len(one), np.int8), (one % m, two % m)), shape=(m, m))
    pieces, label = connected_components(graph, directed=False)
    if pieces == 1:
        return
    first = range(min(pieces, MOST_MEASURED))
    volumes = sorted(mesh_volume_mm3(Mesh(mesh.vertices_mm, mesh.triangles[label == k])) for k in first)
    named = ", ".join(f"{volume:.6g}" for volume in volumes[::-1][:MOST_NAMED])
    more = f" and {pieces - MOST_NAMED} more" if pieces > MOST_NAMED else ""
    inner = " (a negative one is a void inside the other)" if volumes[0] < 0.0 < volumes[-1] else ""
    raise InputError(
        "mesh-several-bodies",
        expected="one body without inner voids",
        found=f"{pieces} pieces of {named} mm3{more}{inner}",
        where=name,
        do="Export the blank alone, or unite its parts; fill voids inside it.",
    )
