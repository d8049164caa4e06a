"""The exact field at any point, and figures of a mesh against it; slow lists instead of blocks."""

from __future__ import annotations

import numpy as np
from scipy.spatial import cKDTree

from morph.kernels.distance_field import field_at


def exact_field(sweep, points_mm):
    """Field in mm at points (k, 3), each from all pieces that can matter there."""
    pieces = sweep.pieces
    middle = pieces[:, :3] + 0.5 * pieces[:, 3:6] * pieces[:, 6:7]
    reach = 3.0 * float((pieces[:, 7] + 0.5 * pieces[:, 6]).max()) + 2.0 * sweep.blend_mm + 1.0
    lists = cKDTree(middle).query_ball_point(points_mm, reach, return_sorted=True)
    n = len(pieces)
    work, number, none = np.empty(n), np.empty(n, np.int64), np.empty(0)
    rows = (pieces, sweep.owner, sweep.nodes, sweep.blend_mm)
    return np.array(
        [
            field_at(*point, *rows, np.array(near, np.int64), len(near), work, number, none)[0]
            for point, near in zip(points_mm, lists, strict=True)
        ]
    )


def spread_points(mesh, n, seed=0):
    """Points (n, 3) evenly over the area of a mesh, and the triangle of each."""
    rng = np.random.default_rng(seed)
    corner = mesh.vertices_mm[mesh.triangles]
    area = np.linalg.norm(np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]), axis=1)
    of = rng.choice(len(area), n, p=area / area.sum())
    u, v = rng.random((2, n, 1))
    over = u + v > 1.0
    u, v = np.where(over, 1.0 - u, u), np.where(over, 1.0 - v, v)
    return corner[of, 0] + u * (corner[of, 1] - corner[of, 0]) + v * (corner[of, 2] - corner[of, 0]), of


def ceiling_share(mesh, up, angle_deg):
    """Share of the area of a channel's wall (facing out of it) that is ceiling flatter than an angle to the plate."""
    corner = mesh.vertices_mm[mesh.triangles]
    normal = np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0])
    area = np.linalg.norm(normal, axis=1)
    return float(area[normal @ np.asarray(up) > np.cos(np.radians(angle_deg)) * area].sum() / area.sum())


def sharp_corner_share(mesh, angle_deg=10.0):
    """Share of a mesh's triangle angles below `angle_deg`."""
    corner = mesh.vertices_mm[mesh.triangles]
    angles = []
    for k in range(3):
        one, two = corner[:, (k + 1) % 3] - corner[:, k], corner[:, (k + 2) % 3] - corner[:, k]
        angles.append(np.arctan2(np.linalg.norm(np.cross(one, two), axis=1), (one * two).sum(axis=1)))
    return float((np.degrees(np.concatenate(angles)) < angle_deg).mean())
