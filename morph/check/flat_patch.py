"""Flat patches of a surface: where it faces down flatter than an angle, and the largest circle inside.

The angle is taken per triangle corner from the smooth normal there (creases kept), so that the
border of a flat patch runs through triangles and not along their edges: on a level round bore of
radius r the cap below angle a is 2 r sin(a) wide, however coarse the facets.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.geometry.mesh import Mesh, triangle_normals

CREASE_DEG = 30.0
"""Neighbouring triangles that turn by more meet in a crease; their normals are not averaged."""

SMOOTH_DEG = 20.0
"""Triangles farther than this from the angle asked for are flat, or not, at all three corners."""

BORDER_STEP_MM = 0.1
"""Borders of flat patches are sampled at most this far apart."""

CIRCLES = 40
"""This many of the widest places are grown to their largest circle."""

GROW_STEPS = 60


@dataclass(frozen=True, slots=True, eq=False)
class FlatTriangles:
    """The triangles of a mesh that are flat at a corner, or border such.

    Args:
        triangle: (k,) triangle of the mesh. over_deg: (k, 3) angle less the limit at each corner; below 0 is flat.
    """

    triangle: Ints
    over_deg: Floats


def ceiling_angles_deg(normals: Floats, direction: Floats) -> Floats:
    """Returns the angle (k,) of wall normals (k, 3) into the channel: 0 level ceiling, 90 upright, 180 floor."""
    return np.asarray(np.degrees(np.arccos(np.clip(-(normals @ direction), -1.0, 1.0))), dtype=np.float64)


def _corner_normals(mesh: Mesh, normals: Floats, area_mm2: Floats, near: Ints, asked: Bools) -> Floats:
    """Returns the smooth unit normals (k, 3, 3) at the corners of the triangles `near[asked]`.

    At each corner the normals of the triangles `near (n,)` around the vertex that turn less than
    CREASE_DEG from the triangle's own are added, weighted by area.
    """
    from scipy.sparse import coo_array

    around, mine = mesh.triangles[near].reshape(-1), np.flatnonzero(asked)
    at = (around, np.repeat(np.arange(len(near)), 3))
    touching = coo_array((np.ones(len(around), np.int8), at), shape=(len(mesh.vertices_mm), len(near))).tocsr()
    flat = mesh.triangles[near[mine]].reshape(-1)
    start, count = touching.indptr[flat], np.diff(touching.indptr)[flat]
    corner = np.repeat(np.arange(len(flat)), count)
    within = np.arange(int(count.sum())) - np.repeat(np.cumsum(count) - count, count)
    theirs = near[touching.indices[within + np.repeat(start, count)]]
    own = np.repeat(near[mine], 3)
    turn = np.einsum("ij,ij->i", normals[own[corner]], normals[theirs])
    weight = np.where(turn > np.cos(np.radians(CREASE_DEG)), area_mm2[theirs], 0.0)
    total = np.stack([np.bincount(corner, weight * normals[theirs, axis], len(flat)) for axis in range(3)], axis=1)
    length = np.linalg.norm(total, axis=1)
    total = np.where(length[:, None] > 0.0, total / np.where(length > 0.0, length, 1.0)[:, None], normals[own])
    return np.asarray(total.reshape(-1, 3, 3), dtype=np.float64)


def find_flat(mesh: Mesh, direction: Floats, limit_deg: float) -> FlatTriangles:
    """Returns the triangles of `mesh` that face down flatter than `limit_deg`, wholly or in part.

    Args:
        mesh: triangles facing into the void under the ceiling.
        direction: (3,) unit, upwards.
        limit_deg: angle from the level.
    """
    normals, area_mm2 = triangle_normals(mesh)
    angle = ceiling_angles_deg(normals, direction)
    near = np.flatnonzero(angle < limit_deg + SMOOTH_DEG)
    over = np.repeat(angle[near, None] - limit_deg, 3, axis=1)
    asked = angle[near] > limit_deg - SMOOTH_DEG
    smooth = _corner_normals(mesh, normals, area_mm2, near, asked)
    over[asked] = ceiling_angles_deg(smooth.reshape(-1, 3), direction).reshape(-1, 3) - limit_deg
    kept = (over < 0.0).any(axis=1)
    return FlatTriangles(near[kept], over[kept])


def flat_area_mm2(mesh: Mesh, chosen: FlatTriangles) -> float:
    """Returns the area in mm2 of the flat parts of triangles, cut along their level lines."""
    corner, over = mesh.vertices_mm[mesh.triangles[chosen.triangle]], chosen.over_deg
    area = 0.5 * np.linalg.norm(np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]), axis=1)
    flat = over < 0.0
    count = flat.sum(axis=1)
    lone = np.argmax(flat == (count == 1)[:, None], axis=1)
    rows = np.arange(len(over))
    a, b, c = over[rows, lone], over[rows, (lone + 1) % 3], over[rows, (lone + 2) % 3]
    mixed = (count == 1) | (count == 2)
    tip = np.where(mixed, a * a / np.where(mixed, (a - b) * (a - c), 1.0), 0.0)
    share = np.choose(count, [np.zeros(len(over)), tip, 1.0 - tip, np.ones(len(over))])
    return float((share * area).sum())


def _level_lines(corner: Floats, over: Floats) -> tuple[Floats, Floats]:
    """Returns both ends (k, 3) of the lines inside triangles where the corner values `over (n, 3)` pass 0.

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
    return ends[0], ends[1]


def _rim_edges(mesh: Mesh, chosen: FlatTriangles) -> tuple[Floats, Floats]:
    """Returns both ends (k, 3) of triangle edges at which a flat patch stops: creases, rims, steep neighbours.

    An edge counts where both its corners are flat, and it has no neighbour across it for which both are flat too.
    """
    tri, over = mesh.triangles[chosen.triangle], chosen.over_deg
    n_vertices = len(mesh.vertices_mm)
    edge = np.concatenate([tri[:, [0, 1]], tri[:, [1, 2]], tri[:, [2, 0]]])
    flat = np.concatenate([(over[:, [i, (i + 1) % 3]] < 0.0).all(axis=1) for i in range(3)])
    edge = edge[flat]
    key = edge[:, 0] * n_vertices + edge[:, 1]
    twin = edge[:, 1] * n_vertices + edge[:, 0]
    lonely = edge[~np.isin(key, twin)]
    return mesh.vertices_mm[lonely[:, 0]], mesh.vertices_mm[lonely[:, 1]]


def _sampled(start: Floats, end: Floats) -> Floats:
    """Returns points (k, 3) on segments (n, 3) - (n, 3), at most BORDER_STEP_MM apart, ends included."""
    parts = np.maximum(1, np.ceil(np.linalg.norm(end - start, axis=1) / BORDER_STEP_MM).astype(np.int64))
    index = np.repeat(np.arange(len(parts)), parts + 1)
    step = np.arange(len(index)) - np.repeat(np.cumsum(parts + 1) - (parts + 1), parts + 1)
    share = (step / parts[index])[:, None]
    return np.asarray(start[index] * (1.0 - share) + end[index] * share, dtype=np.float64)


def largest_circle(mesh: Mesh, flat: FlatTriangles, frame: Floats) -> tuple[float, Floats] | None:
    """Returns diameter in mm and middle (3,) of the largest circle inside a flat patch, seen along the third axis.

    The nearest border point of a place is asked in space, where the patch it belongs to is nearest;
    its distance is taken in the plan. The widest places are then grown against the border around them.

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
    corner, inside = mesh.vertices_mm[mesh.triangles[flat.triangle]], flat.over_deg < 0.0
    border = np.concatenate([_sampled(*_level_lines(corner, flat.over_deg)), _sampled(*_rim_edges(mesh, flat))])
    border = border @ frame.T
    flat_vertex = np.unique(mesh.triangles[flat.triangle][inside])
    whole = inside.all(axis=1)
    places = np.concatenate([mesh.vertices_mm[flat_vertex], corner[whole].mean(axis=1)]) @ frame.T
    tree = cKDTree(border)
    _, near = tree.query(places)
    radius = np.linalg.norm(places[:, :2] - border[near, :2], axis=1)
    best, middle = -1.0, places[0].copy()
    for index in np.argsort(-radius, kind="stable")[:CIRCLES]:
        around = border[np.sort(tree.query_ball_point(places[index], 3.0 * radius[index] + 1.0))]
        grown, point = _grow(places[index, :2], around[:, :2])
        if grown > best:
            best, middle = grown, np.append(point, places[index, 2])
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


def _grow(start: Floats, border: Floats) -> tuple[float, Floats]:
    """Returns the radius and middle (2,) of the largest circle reached from `start (2,)` clear of `border (n, 2)`.

    Each step goes to the middle of the widest angle free of contacts (border within a step of the
    circle); the circle is at its largest when no free angle is wider than half a turn.
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
            point, distance, best = trial, trial_distance, float(trial_distance.min())
        else:
            step *= 0.5
    return best, point
