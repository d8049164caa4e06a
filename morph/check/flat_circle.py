"""The largest circle inside a flat patch, seen along a direction: the span a ceiling has to bridge."""

from __future__ import annotations

import numpy as np

from morph.check.flat_patch import FlatTriangles
from morph.core.arrays import Floats, Ints
from morph.geometry.mesh import Mesh

BORDER_STEP_MM = 0.1
"""Borders of flat patches are sampled at most this far apart."""

INSIDE_MM = 0.02
"""Places nearer to a border cannot be told from outside, and no circle is grown from them."""

LARGE_MM = 3.0
"""Triangles with a longer side get a grid of places inside."""

CIRCLES = 40
"""This many of the widest places are grown to their largest circle."""

GROW_STEPS = 60

MOVES = 8
"""A circle that outgrows the border looked at is grown on from where it is at most this often."""


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


def _patch_numbers(mesh: Mesh, flat: FlatTriangles) -> Ints:
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

    The nearest border point of a place is asked in space, its distance is taken in the plan; the widest
    places are then grown against the border of their own patch around them.

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
    patch = _patch_numbers(mesh, flat)
    pieces = [_sampled(*_level_lines(corner, flat.over_deg)), _sampled(*_rim_edges(mesh, flat))]
    border = np.concatenate([points for points, _ in pieces]) @ frame.T
    border_patch = patch[np.concatenate([owner for _, owner in pieces])]
    places, place_patch = _places(mesh, flat, patch)
    places = places @ frame.T
    tree = cKDTree(border)
    _, near = tree.query(places)
    radius = np.linalg.norm(places[:, :2] - border[near, :2], axis=1)
    order = np.argsort(-radius, kind="stable")
    best, middle = 0.0, places[order[0]].copy()
    for index in order[:CIRCLES]:
        if radius[index] <= INSIDE_MM:
            break
        point, grown = places[index].copy(), float(radius[index])
        for _ in range(MOVES):
            reach = 3.0 * grown + 1.0
            around = np.sort(np.asarray(tree.query_ball_point(point, reach), dtype=np.int64))
            around = around[border_patch[around] == place_patch[index]]
            if len(around) == 0:
                break
            grown, point[:2], settled = _grow(point[:2], border[around, :2], reach)
            if settled:
                break
        if grown > best:
            best, middle = grown, point
    middle[2] = _height_at(corner @ frame.T, middle)
    return 2.0 * best, np.asarray(middle @ frame, dtype=np.float64)


def _height_at(corner: Floats, point: Floats) -> float:
    """Returns the height of the triangles (n, 3, 3) over the plan place of `point (3,)`, the one nearest to its own."""
    a, u, v = corner[:, 0], corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    w = point - a
    area = u[:, 0] * v[:, 1] - u[:, 1] * v[:, 0]
    area[area == 0.0] = np.inf
    s = (w[:, 0] * v[:, 1] - w[:, 1] * v[:, 0]) / area
    t = (u[:, 0] * w[:, 1] - u[:, 1] * w[:, 0]) / area
    over = np.flatnonzero((s >= -1e-9) & (t >= -1e-9) & (s + t <= 1.0 + 1e-9) & np.isfinite(area))
    if len(over) == 0:
        return float(point[2])
    height = a[over, 2] + s[over] * u[over, 2] + t[over] * v[over, 2]
    return float(height[np.argmin(np.abs(height - point[2]))])


def _grow(start: Floats, border: Floats, reach_mm: float) -> tuple[float, Floats, bool]:
    """Returns radius and middle (2,) of the largest circle reached from `start (2,)`, and whether it is settled.

    Each step goes to the middle of the widest angle free of contacts (border within a step of the circle); the
    circle is at its largest when no free angle is wider than half a turn. The border (n, 2) is known within
    `reach_mm` of the start: a circle that comes to the end of that is not settled.
    """
    point = start
    distance = np.linalg.norm(border - point, axis=1)
    best = float(distance.min())
    step = 0.5 * best
    for _ in range(GROW_STEPS):
        if step < 1e-4:
            break
        contact = border[distance <= best + 0.5 * step] - point
        angle = np.sort(np.arctan2(contact[:, 1], contact[:, 0]))
        gap = np.diff(np.append(angle, angle[0] + 2.0 * np.pi))
        widest = int(np.argmax(gap))
        heading = angle[widest] + 0.5 * gap[widest]
        trial = point + step * np.array([np.cos(heading), np.sin(heading)])
        trial_distance = np.linalg.norm(border - trial, axis=1)
        if gap[widest] > np.pi and trial_distance.min() > best:
            if float(np.linalg.norm(trial - start)) + float(trial_distance.min()) > reach_mm:
                return best, point, False
            point, distance, best = trial, trial_distance, float(trial_distance.min())
        else:
            step *= 0.5
    return best, point, True
