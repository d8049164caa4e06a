"""Making a triangle surface fit to be walked on: welding, filling small holes, splitting long edges."""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.geometry.mesh import Mesh


def weld(mesh: Mesh, within_mm: float) -> Mesh:
    """Returns `mesh` with vertices of equal position made one, and collapsed triangles left out.

    Equal means equal after rounding to `within_mm`. Vertices keep the order of their first use; of equal
    triangles the first stays.
    """
    key = np.round(mesh.vertices_mm / within_mm).astype(np.int64)
    order = np.lexsort(key.T)
    fresh = np.r_[True, (key[order[1:]] != key[order[:-1]]).any(axis=1)] if len(order) else np.zeros(0, np.bool_)
    group = np.empty(len(order), dtype=np.int64)
    group[order] = np.cumsum(fresh) - 1
    triangles = group[mesh.triangles]
    distinct = (triangles != np.roll(triangles, 1, axis=1)).all(axis=1)
    triangles = triangles[distinct]
    _, first = np.unique(np.sort(triangles, axis=1), axis=0, return_index=True)
    triangles = triangles[np.sort(first)]
    kept = np.full(int(group.max()) + 1 if len(group) else 0, -1, dtype=np.int64)
    source = order[np.flatnonzero(fresh)]
    used, at = np.unique(triangles.ravel(), return_index=True)
    in_order = used[np.argsort(at, kind="stable")]
    kept[in_order] = np.arange(len(in_order))
    return Mesh(mesh.vertices_mm[source[in_order]], kept[triangles])


def part_of(mesh: Mesh, keep: Ints) -> tuple[Mesh, Ints]:
    """Returns the triangles `keep (k,)` of `mesh` as a mesh of their own, and which vertices (j,) it took."""
    used, inverse = np.unique(mesh.triangles[keep], return_inverse=True)
    return Mesh(mesh.vertices_mm[used], inverse.reshape(-1, 3)), used


def loop_length_mm(mesh: Mesh, loop: Ints) -> float:
    """Returns the length of a closed loop of vertices (k,) in mm."""
    point = mesh.vertices_mm[loop]
    return float(np.linalg.norm(point - np.roll(point, -1, axis=0), axis=1).sum())


def fill_hole(mesh: Mesh, loop: Ints, normals: Floats) -> Mesh:
    """Returns `mesh` with the hole bounded by `loop (k,)` closed by even triangles that continue the surface.

    Over the loop's plane, points as far apart as the rim's lie at the height of the quadric that meets rim and
    vertex normals best, plus what it misses at the nearest rim vertex, fading inwards. The triangles are Delaunay's;
    where these do not keep the whole rim (a rim that folds back over itself) a fan to the middle closes it.

    Args:
        mesh: the surface.
        normals: (n, 3) of its vertices.
        loop: border vertices in the direction of their triangles.
    """
    rim = mesh.vertices_mm[loop]
    middle = rim.mean(axis=0)
    axis = normals[loop].mean(axis=0)
    axis /= max(float(np.linalg.norm(axis)), 1e-300)
    x = np.cross(axis, [1.0, 0.0, 0.0] if abs(axis[0]) < 0.7 else [0.0, 1.0, 0.0])
    x /= np.linalg.norm(x)
    frame = np.stack([x, np.cross(axis, x), axis])
    local = (rim - middle) @ frame.T
    flat = local[:, :2]
    quadric = _quadric_over(flat, local[:, 2], normals[loop] @ frame.T)
    inside = _points_within(flat)
    added = _delaunay_within(flat, inside)
    if added is None:
        inside = np.zeros((1, 2))
        k = len(loop)
        added = np.column_stack([np.roll(np.arange(k), -1), np.arange(k), np.full(k, k)])
    gap = np.linalg.norm(inside[:, None] - flat[None], axis=2)
    nearest = gap.argmin(axis=1)
    miss = (local[:, 2] - _quadric_at(quadric, flat))[nearest]
    fade = np.maximum(1.0 - gap.min(axis=1) / max(float(np.linalg.norm(flat, axis=1).mean()), 1e-9), 0.0)
    points = middle + np.column_stack([inside, _quadric_at(quadric, inside) + fade * miss]) @ frame
    number = np.concatenate([loop, len(mesh.vertices_mm) + np.arange(len(inside))])
    return Mesh(np.concatenate([mesh.vertices_mm, points]), np.concatenate([mesh.triangles, number[added]]))


def _within(polygon: Floats, points: Floats) -> Bools:
    """Returns which points (k, 2) lie within a polygon (n, 2), by counting crossings."""
    after = np.roll(polygon, -1, axis=0)
    above = polygon[:, 1][None] > points[:, 1][:, None]
    crosses = above != (after[:, 1][None] > points[:, 1][:, None])
    rise = np.where(after[:, 1] == polygon[:, 1], 1.0, after[:, 1] - polygon[:, 1])
    x = polygon[:, 0] + (points[:, 1][:, None] - polygon[:, 1]) / rise * (after[:, 0] - polygon[:, 0])
    return np.asarray(((crosses & (points[:, 0][:, None] < x)).sum(axis=1) % 2) == 1, dtype=np.bool_)


def _points_within(polygon: Floats) -> Floats:
    """Returns a triangular grid of points (k, 2) within a polygon (n, 2), spaced like its corners."""
    step = float(np.linalg.norm(polygon - np.roll(polygon, -1, axis=0), axis=1).mean())
    low, high = polygon.min(axis=0), polygon.max(axis=0)
    step = max(step, float((high - low).max()) / 80.0)
    rows = np.arange(low[1], high[1], step * np.sqrt(0.75))
    columns = np.arange(low[0], high[0] + step, step)
    grid = np.stack(np.meshgrid(rows, columns, indexing="ij"), axis=-1)[:, :, ::-1].copy()
    grid[1::2, :, 0] += 0.5 * step
    points = grid.reshape(-1, 2)
    points = points[_within(polygon, points)]
    if len(points) == 0:
        return points
    after = np.roll(polygon, -1, axis=0)
    side = after - polygon
    along = ((points[:, None] - polygon) * side).sum(axis=2) / np.maximum((side * side).sum(axis=1), 1e-300)
    foot = polygon + np.clip(along, 0.0, 1.0)[:, :, None] * side
    clear = np.linalg.norm(points[:, None] - foot, axis=2).min(axis=1) > 0.6 * step
    return np.asarray(points[clear], dtype=np.float64)


def _delaunay_within(polygon: Floats, inside: Floats) -> Ints | None:
    """Returns triangles (m, 3) of rim and inner points that fill the polygon, None when they do not keep its rim.

    The polygon runs with the triangles outside it, so the filling runs against it.
    """
    from scipy.spatial import Delaunay, QhullError

    points = np.concatenate([polygon, inside])
    try:
        triangles = Delaunay(points).simplices.astype(np.int64)
    except QhullError:
        return None
    triangles = triangles[_within(polygon, points[triangles].mean(axis=1))]
    corner = points[triangles]
    one, two = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    wound = one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0]
    triangles[wound < 0.0] = triangles[wound < 0.0][:, ::-1]
    half = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [2, 0]]])
    n, k = len(points), len(polygon)
    key = half[:, 0] * n + half[:, 1]
    single = half[~np.isin(key, half[:, 1] * n + half[:, 0])]
    rim = np.column_stack([np.roll(np.arange(k), -1), np.arange(k)])
    same = len(single) == k and bool(np.isin(rim[:, 0] * n + rim[:, 1], single[:, 0] * n + single[:, 1]).all())
    return triangles if same else None


def _quadric_over(flat: Floats, height: Floats, normals: Floats) -> Floats:
    """Returns the 6 coefficients of the quadric that meets heights (k,) and normals (k, 3) best at places (k, 2)."""
    x, y = flat.T
    one, zero = np.ones_like(x), np.zeros_like(x)
    size = max(float(np.abs(flat).max()), 1e-9)
    steep = np.where(np.abs(normals[:, 2]) > 0.1, normals[:, 2], 1.0)
    rows = [
        np.column_stack([one, x, y, x * x, x * y, y * y]),
        size * np.column_stack([zero, one, zero, 2.0 * x, y, zero]),
        size * np.column_stack([zero, zero, one, zero, x, 2.0 * y]),
    ]
    wanted = np.concatenate([height, -size * normals[:, 0] / steep, -size * normals[:, 1] / steep])
    return np.asarray(np.linalg.lstsq(np.concatenate(rows), wanted, rcond=None)[0], dtype=np.float64)


def _quadric_at(quadric: Floats, flat: Floats) -> Floats:
    x, y = flat.T
    return np.asarray(np.column_stack([np.ones_like(x), x, y, x * x, x * y, y * y]) @ quadric, dtype=np.float64)


def split_long_edges(mesh: Mesh, most_mm: float, rounds: int = 12) -> tuple[Mesh, Ints]:
    """Returns `mesh` with longer edges than `most_mm` halved until none is, and the old triangle (m,) of each.

    Facets stay flat. Long thin triangles, as CAD programs write for cylinders, become ones that a fit can use.
    """
    points, triangles = mesh.vertices_mm, mesh.triangles
    source = np.arange(len(triangles), dtype=np.int64)
    for _ in range(rounds):
        half = np.concatenate([triangles[:, [1, 2]], triangles[:, [2, 0]], triangles[:, [0, 1]]])
        ends = np.sort(half, axis=1)
        longer = np.linalg.norm(points[ends[:, 0]] - points[ends[:, 1]], axis=1) > most_mm
        if not longer.any():
            break
        unique, inverse = np.unique(ends[longer], axis=0, return_inverse=True)
        middle = np.full(len(half), -1, dtype=np.int64)
        middle[longer] = len(points) + inverse.ravel()
        points = np.concatenate([points, 0.5 * (points[unique[:, 0]] + points[unique[:, 1]])])
        triangles, source = _cut_corners(triangles, middle.reshape(3, -1).T, source)
    return Mesh(points, triangles), source


def _cut_corners(triangles: Ints, middle: Ints, source: Ints) -> tuple[Ints, Ints]:
    """Returns triangles cut at `middle (m, 3)`, the new vertex on the edge opposite each corner or -1."""
    n_cut = (middle >= 0).sum(axis=1)
    kept = n_cut == 0
    result, origin = [triangles[kept]], [source[kept]]

    def add(rows: Ints, *corners: Ints) -> None:
        result.append(np.column_stack(corners))
        origin.append(source[rows])

    for k in range(3):
        t, m = np.roll(triangles, -k, axis=1), np.roll(middle, -k, axis=1)
        one = np.flatnonzero((n_cut == 1) & (m[:, 0] >= 0))
        a, b, c, p = t[one, 0], t[one, 1], t[one, 2], m[one, 0]
        add(one, a, b, p)
        add(one, a, p, c)
        two = np.flatnonzero((n_cut == 2) & (m[:, 0] < 0))
        a, b, c, q, r = t[two, 0], t[two, 1], t[two, 2], m[two, 1], m[two, 2]
        add(two, a, r, q)
        add(two, r, b, c)
        add(two, r, c, q)
    full = np.flatnonzero(n_cut == 3)
    a, b, c = triangles[full].T
    p, q, r = middle[full].T
    for corners in ((a, r, q), (r, b, p), (q, p, c), (p, q, r)):
        add(full, *corners)
    return np.concatenate(result), np.concatenate(origin)
