"""The largest circle inside a flat patch, seen along a direction: the span a ceiling has to bridge.

Around each wide place the border of its patch is triangulated in the plan (Delaunay); the largest
circle clear of the border has its middle at a circumcentre, so the largest circumcircle whose
middle lies on the patch is it, to the sampling of the border.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from morph.check.flat_patch import FlatTriangles
from morph.core.arrays import Bools, Floats, Ints
from morph.geometry.mesh import Mesh

if TYPE_CHECKING:
    from scipy.spatial import cKDTree

BORDER_STEP_MM = 0.1
"""Borders of flat patches are sampled at most this far apart."""

INSIDE_MM = 0.02
"""Places nearer to a border cannot be told from outside."""

LARGE_MM = 3.0
"""Triangles with a longer side get a grid of places inside."""

REACH_RADII = 4.0
"""The border is looked at this many radii around a place."""

LOOKS = 60
"""So many places at most are looked at, widest first, each a radius apart from the others."""

HOPELESS_RATIO = 0.6
"""Places whose distance from the border is below this part of the best radius are not looked at."""

TRIED = 64
"""Of the circumcentres around a place the widest so many are asked whether they lie on the patch."""


def _level_lines(corner: Floats, over: Floats) -> tuple[Floats, Floats, Ints]:
    """Returns both ends (k, 3) of the lines inside triangles where `over (n, 3)` passes 0, and their triangles (k,).

    Args:
        corner: (n, 3, 3) triangle corners.
        over: (n, 3) angle less roof angle; below 0 is flat.
    """
    flat = over < 0.0
    mixed = np.flatnonzero(flat.any(axis=1) & ~flat.all(axis=1))
    corner, over, flat = corner[mixed], over[mixed], flat[mixed]
    lone_is_flat = flat.sum(axis=1) == 1
    lone = np.argmax(flat == lone_is_flat[:, None], axis=1)
    rows = np.arange(len(mixed))
    ends = []
    for step in (1, 2):
        other = (lone + step) % 3
        a, b = over[rows, lone], over[rows, other]
        t = a / (a - b)
        ends.append(corner[rows, lone] + t[:, None] * (corner[rows, other] - corner[rows, lone]))
    return ends[0], ends[1], mixed


def _rim_edges(mesh: Mesh, flat: FlatTriangles) -> tuple[Floats, Floats, Ints]:
    """Returns both ends (k, 3) of the flat parts of edges at which a patch stops, and their triangles (k,).

    A patch stops at a crease, a rim or a steep neighbour: at an edge with a flat corner that no triangle across
    it shares.
    """
    tri, over, n = mesh.triangles[flat.triangle], flat.over_deg, len(flat.triangle)
    edge = np.concatenate([tri[:, [i, (i + 1) % 3]] for i in range(3)])
    value = np.concatenate([over[:, [i, (i + 1) % 3]] for i in range(3)])
    owner = np.tile(np.arange(n), 3)
    some = (value < 0.0).any(axis=1)
    edge, value, owner = edge[some], value[some], owner[some]
    n_vertices = len(mesh.vertices_mm)
    lonely = ~np.isin(edge[:, 0] * n_vertices + edge[:, 1], edge[:, 1] * n_vertices + edge[:, 0])
    edge, value, owner = edge[lonely], value[lonely], owner[lonely]
    a, b = mesh.vertices_mm[edge[:, 0]], mesh.vertices_mm[edge[:, 1]]
    change = value[:, 0] - value[:, 1]
    share = (value[:, 0] / np.where(change != 0.0, change, 1.0))[:, None]
    level = a + share * (b - a)
    start = np.where((value[:, 0] < 0.0)[:, None], a, level)
    end = np.where((value[:, 1] < 0.0)[:, None], b, level)
    return start, end, owner


def _sampled(start: Floats, end: Floats, owner: Ints) -> tuple[Floats, Ints]:
    """Returns points (k, 3) on segments (n, 3) - (n, 3), at most BORDER_STEP_MM apart, and the owner (k,) of each."""
    parts = np.maximum(1, np.ceil(np.linalg.norm(end - start, axis=1) / BORDER_STEP_MM).astype(np.int64))
    index = np.repeat(np.arange(len(parts)), parts + 1)
    step = np.arange(len(index)) - np.repeat(np.cumsum(parts + 1) - (parts + 1), parts + 1)
    share = (step / parts[index])[:, None]
    return np.asarray(start[index] * (1.0 - share) + end[index] * share, dtype=np.float64), owner[index]


def patch_numbers(mesh: Mesh, flat: FlatTriangles) -> Ints:
    """Returns the patch number (k,) of each flat triangle: triangles that share a flat corner are one patch."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    n, inside = len(flat.triangle), flat.over_deg < 0.0
    vertex = n + mesh.triangles[flat.triangle][inside]
    row = np.repeat(np.arange(n), 3)[inside.reshape(-1)]
    size = n + len(mesh.vertices_mm)
    graph = coo_array((np.ones(len(row), np.int8), (row, vertex)), shape=(size, size))
    return np.asarray(connected_components(graph, directed=False)[1][:n], dtype=np.int64)


def _places(mesh: Mesh, flat: FlatTriangles, patch: Ints) -> tuple[Floats, Ints]:
    """Returns points (k, 3) of the flat patches and the patch (k,) of each.

    Flat corners, middles of flat triangles, and a grid of points inside large ones.
    """
    tri, inside = mesh.triangles[flat.triangle], flat.over_deg < 0.0
    vertex, first = np.unique(tri[inside], return_index=True)
    whole = np.flatnonzero(inside.all(axis=1))
    corner = mesh.vertices_mm[tri[whole]]
    side = np.linalg.norm(corner - np.roll(corner, 1, axis=1), axis=2).max(axis=1)
    large = np.flatnonzero(side > LARGE_MM)
    grid = np.array([(i, j, 7 - i - j) for i in range(1, 6) for j in range(1, 7 - i)]) / 7.0
    fine = np.einsum("gc,kcx->kgx", grid, corner[large]).reshape(-1, 3)
    points = np.concatenate([mesh.vertices_mm[vertex], corner.mean(axis=1), fine])
    of_vertex = np.repeat(patch, 3)[inside.reshape(-1)][first]
    return points, np.concatenate([of_vertex, patch[whole], np.repeat(patch[whole[large]], len(grid))])


def largest_circle(mesh: Mesh, flat: FlatTriangles, frame: Floats) -> tuple[float, Floats] | None:
    """Returns diameter in mm and middle (3,) of the largest circle inside a flat patch, seen along the third axis.

    Args:
        mesh: the surface.
        flat: its flat triangles, from `find_flat`.
        frame: (3, 3) rows x, y of the plan and the direction it is seen along.

    Returns:
        None when nothing is flat.
    """
    from scipy.spatial import cKDTree

    if len(flat.triangle) == 0:
        return None
    corner = mesh.vertices_mm[mesh.triangles[flat.triangle]]
    patch = patch_numbers(mesh, flat)
    pieces = [_sampled(*_level_lines(corner, flat.over_deg)), _sampled(*_rim_edges(mesh, flat))]
    border = np.concatenate([points for points, _ in pieces]) @ frame.T
    border_patch = patch[np.concatenate([owner for _, owner in pieces])]
    places, place_patch = _places(mesh, flat, patch)
    places, corner = places @ frame.T, corner @ frame.T
    tree, middles = cKDTree(border), cKDTree(corner.mean(axis=1))
    largest_side = float(np.linalg.norm(corner - np.roll(corner, 1, axis=1), axis=2).max())
    _, near = tree.query(places)
    radius = np.linalg.norm(places[:, :2] - border[near, :2], axis=1)
    best, middle = 0.0, places[int(np.argmax(radius))].copy()
    for _ in range(LOOKS):
        index = int(np.argmax(radius))
        wide = float(radius[index])
        if wide <= max(INSIDE_MM, HOPELESS_RATIO * best):
            break
        reach = REACH_RADII * wide + 1.0
        around = _within(tree, places[index], reach, border_patch == place_patch[index])
        close = _within(middles, places[index], reach + largest_side, patch == place_patch[index])
        grown, point = _widest_circle(places[index], border[around, :2], corner[close], reach)
        if grown > best:
            best, middle = grown, point
        radius[np.linalg.norm(places - places[index], axis=1) <= wide] = 0.0
    return 2.0 * best, np.asarray(middle @ frame, dtype=np.float64)


def _within(tree: cKDTree, point: Floats, reach_mm: float, wanted: Bools) -> Ints:
    """Returns the points of `tree` within reach that are wanted, in order."""
    found = np.sort(np.asarray(tree.query_ball_point(point, reach_mm), dtype=np.int64))
    return found[wanted[found]]


def _widest_circle(start: Floats, border: Floats, corner: Floats, reach_mm: float) -> tuple[float, Floats]:
    """Returns radius and middle (3,) of the widest circle near `start (3,)` that is clear of the border.

    Args:
        start: a place on the patch.
        border: (n, 2) border points within reach of it, in the plan.
        corner: (k, 3, 3) triangles of the patch around it.
        reach_mm: circles that leave this reach are not known to be clear.
    """
    from scipy.spatial import Delaunay, QhullError

    radius = float(np.linalg.norm(border - start[:2], axis=1).min()) if len(border) else 0.0
    if len(border) < 4:
        return radius, start
    try:
        simplex = Delaunay(border).simplices
    except QhullError:
        return radius, start
    centre, size = _circumcircles(border[simplex])
    known = np.linalg.norm(centre - start[:2], axis=1) + size <= reach_mm
    centre, size = centre[known & (size > radius)], size[known & (size > radius)]
    for index in np.argsort(-size, kind="stable")[:TRIED]:
        height = _height_at(corner, centre[index], float(start[2]))
        if height is not None:
            return float(size[index]), np.append(centre[index], height)
    return radius, start


def _circumcircles(corner: Floats) -> tuple[Floats, Floats]:
    """Returns the circumcentres (k, 2) and radii (k,) of triangles (k, 3, 2); a sliver gets an infinite one."""
    b, c = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    cross = 2.0 * (b[:, 0] * c[:, 1] - b[:, 1] * c[:, 0])
    bb, cc = (b**2).sum(axis=1), (c**2).sum(axis=1)
    safe = np.where(cross == 0.0, 1.0, cross)
    offset = np.column_stack([c[:, 1] * bb - b[:, 1] * cc, b[:, 0] * cc - c[:, 0] * bb]) / safe[:, None]
    size = np.where(cross == 0.0, np.inf, np.linalg.norm(offset, axis=1))
    return corner[:, 0] + offset, size


def _height_at(corner: Floats, plan: Floats, near_mm: float) -> float | None:
    """Returns the height of the triangles (n, 3, 3) over the place `plan (2,)`, nearest to `near_mm`; None beside."""
    a, u, v = corner[:, 0], corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    w = plan - a[:, :2]
    area = u[:, 0] * v[:, 1] - u[:, 1] * v[:, 0]
    safe = np.where(area == 0.0, 1.0, area)
    s = (w[:, 0] * v[:, 1] - w[:, 1] * v[:, 0]) / safe
    t = (u[:, 0] * w[:, 1] - u[:, 1] * w[:, 0]) / safe
    over = np.flatnonzero((area != 0.0) & (s >= -1e-9) & (t >= -1e-9) & (s + t <= 1.0 + 1e-9))
    if len(over) == 0:
        return None
    height = a[over, 2] + s[over] * u[over, 2] + t[over] * v[over, 2]
    return float(height[np.argmin(np.abs(height - near_mm))])
