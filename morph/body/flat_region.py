"""Flat regions at the ends of a mesh: where the body would stand on a plate pressed against it.

The plane comes from the convex hull, so the whole body lies behind it; the region is the skin in that plane.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.geometry.mesh import Mesh, triangle_normals

WITHIN_RAD = np.radians(1.0)
"""A face belongs to a direction when its normal is this near to it."""

FLAT_MM = 0.005
"""Skin this near to the plane is flat."""

LEAST_WIDTH_MM = 3.0
"""A region that holds no circle of this diameter is a facet or an edge, not a face where a channel comes out."""

MOST_PLANES = 64
PARTS, MOST_TRIED = 8, 1500
"""Parts of a triangle's side between places tried for the middle of a circle, and triangles so divided."""

RIM_STEP_MM = 0.25
MOST_RIM_POINTS = 100_000


@dataclass(frozen=True, slots=True, eq=False)
class FlatRegion:
    """A flat region: its triangles (k,), a point in its plane (3,), the unit normal (3,), area and width in mm.

    `width_mm` is the diameter of the largest circle found in it.
    """

    triangle: Ints
    origin_mm: Floats
    normal: Floats
    area_mm2: float
    width_mm: float


def hull_planes(mesh: Mesh) -> Floats:
    """Returns the planes (k, 5) of the convex hull: unit normal outwards, offset (n x = offset), and area in mm2."""
    from scipy.spatial import ConvexHull, QhullError

    try:
        hull = ConvexHull(mesh.vertices_mm)
    except QhullError:  # a body so thin that it has no hull in double precision has no ends either
        return np.empty((0, 5))
    corner = mesh.vertices_mm[hull.simplices]
    area = 0.5 * np.linalg.norm(np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]), axis=1)
    plane, inverse = np.unique(np.round(hull.equations, 9), axis=0, return_inverse=True)
    total = np.bincount(inverse.reshape(-1), area)
    return np.column_stack([plane[:, :3], -plane[:, 3], total])


@dataclass(frozen=True, slots=True, eq=False)
class FlatSearch:
    """What every search on one mesh shares: hull planes (k, 5), unit normals (m, 3), areas (m,), and two masks (m,).

    `free`: triangles that may belong to a region. `needle`: of these, those whose normal is rounding.
    """

    mesh: Mesh
    planes: Floats
    normals: Floats
    area_mm2: Floats
    free: Bools
    needle: Bools


def make_flat_search(mesh: Mesh, free: Bools) -> FlatSearch:
    """Returns the search for flat ends of a closed `mesh` among the triangles `free (m,)`."""
    normals, area = triangle_normals(mesh)
    needle = free & (least_heights_mm(mesh, area) < FLAT_MM)
    return FlatSearch(mesh, hull_planes(mesh), normals, area, free, np.asarray(needle, dtype=np.bool_))


def find_flat_region(search: FlatSearch, direction: Floats) -> FlatRegion | None:
    """Returns the largest flat region at the end of a mesh in a unit `direction (3,)`; None when it is nowhere flat."""
    mesh, planes = search.mesh, search.planes
    along = planes[planes[:, :3] @ direction >= np.cos(WITHIN_RAD)]
    along = along[np.argsort(-along[:, 4], kind="stable")][:MOST_PLANES]
    best: FlatRegion | None = None
    for plane in along:
        normal = plane[:3] / np.linalg.norm(plane[:3]) + 0.0
        height = mesh.vertices_mm @ normal
        offset = float(height.max())
        near = np.flatnonzero((height >= offset - FLAT_MM)[mesh.triangles].all(axis=1) & search.free)
        turned = search.normals[near] @ normal >= np.cos(WITHIN_RAD)
        rows = near[turned | search.needle[near]]
        total = float(search.area_mm2[rows].sum())
        if total <= 0.0 or (best is not None and total <= best.area_mm2):
            continue
        middles = mesh.vertices_mm[mesh.triangles[rows]].mean(axis=1)
        centre = np.average(middles, axis=0, weights=search.area_mm2[rows])
        origin = centre + (offset - float(centre @ normal)) * normal
        best = FlatRegion(rows, origin, normal, total, region_width_mm(mesh, rows))
    return best


def least_heights_mm(mesh: Mesh, area_mm2: Floats) -> Floats:
    """Returns the height (m,) of each triangle over its longest side; the normal of a needle is rounding."""
    corner = mesh.vertices_mm[mesh.triangles]
    longest = np.linalg.norm(corner - np.roll(corner, 1, axis=1), axis=2).max(axis=1)
    return np.asarray(2.0 * area_mm2 / np.where(longest > 0.0, longest, 1.0), dtype=np.float64)


def region_width_mm(mesh: Mesh, rows: Ints) -> float:
    """Returns the diameter of the largest circle found inside a flat region of triangles `rows (k,)`.

    Tried at places spread over its largest triangles: never too large, a few per cent small on round regions.
    """
    from scipy.spatial import cKDTree

    triangles = mesh.triangles[rows]
    corner = mesh.vertices_mm[triangles]
    size = np.linalg.norm(np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]), axis=1)
    large = corner[np.argsort(-size, kind="stable")[:MOST_TRIED]]
    share = [(i, j, PARTS - i - j) for i in range(PARTS + 1) for j in range(PARTS + 1 - i)]
    tried = np.einsum("sk,tkd->tsd", np.array(share) / PARTS, large).reshape(-1, 3)
    start, end = triangles.T.reshape(-1), np.roll(triangles, -1, axis=1).T.reshape(-1)
    n = len(mesh.vertices_mm)
    rim = ~np.isin(start * n + end, end * n + start)
    one, two = mesh.vertices_mm[start[rim]], mesh.vertices_mm[end[rim]]
    length = np.linalg.norm(two - one, axis=1)
    step = max(RIM_STEP_MM, float(length.sum()) / MOST_RIM_POINTS)
    parts = np.maximum(np.ceil(length / step), 1.0).astype(np.int64)
    edge = np.repeat(np.arange(len(parts)), parts)
    along = (np.arange(len(edge)) - np.repeat(np.cumsum(parts) - parts, parts)) / parts[edge]
    points = one[edge] + along[:, None] * (two - one)[edge]
    far = float(np.max(cKDTree(points).query(tried)[0]))
    return 2.0 * float(np.sqrt(max(far**2 - (0.5 * step) ** 2, 0.0)))
