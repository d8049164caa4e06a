"""An outside test for triangles that pass through each other: plain numpy, float64, every pair whose boxes meet.

Shares no code with the product: boxes by a KD-tree on centres, then the six segment-against-triangle tests by
solving for the point of the plane (Moller & Trumbore, Fast, minimum storage ray/triangle intersection, 1997).
"""

from __future__ import annotations

import numpy as np
from scipy.spatial import cKDTree

INSIDE = 1e-7
"""Barycentric and edge parameters closer to their bounds than this are touching, not crossing."""


def crossing_pairs(vertices, triangles) -> int:
    """Pairs of triangles without a common edge of which an edge of one passes through the inside of the other."""
    corner = vertices[triangles]
    low, high = corner.min(axis=1), corner.max(axis=1)
    centre, half = 0.5 * (low + high), 0.5 * np.linalg.norm(high - low, axis=1)
    found = 0
    # triangles in classes of size, so that few long ones do not make every ball large
    classes = np.ceil(np.log2(np.maximum(half, 1e-3) / 1e-3)).astype(int)
    members = {c: np.flatnonzero(classes == c) for c in np.unique(classes)}
    trees = {c: cKDTree(centre[rows]) for c, rows in members.items()}
    for a, rows_a in members.items():
        for b, rows_b in members.items():
            if b < a:
                continue
            reach = half[rows_a].max() + half[rows_b].max()
            near = trees[a].sparse_distance_matrix(trees[b], reach, output_type="coo_matrix")
            one, two = rows_a[near.row], rows_b[near.col]
            keep = (low[one] <= high[two]).all(axis=1) & (low[two] <= high[one]).all(axis=1)
            keep &= (one < two) if a == b else (one != two)
            found += _count(vertices, triangles, one[keep], two[keep])
    return found


def _count(vertices, triangles, one, two) -> int:
    shared = (triangles[one][:, :, None] == triangles[two][:, None, :]).sum(axis=(1, 2))
    one, two = one[shared < 2], two[shared < 2]
    cross = np.zeros(len(one), bool)
    for edges_of, faces_of in ((one, two), (two, one)):
        a, b, c = (vertices[triangles[faces_of, k]] for k in range(3))
        normal = np.cross(b - a, c - a)
        for k in range(3):
            p, q = triangles[edges_of, k], triangles[edges_of, (k + 1) % 3]
            corner = (triangles[faces_of] == p[:, None]).any(axis=1) | (triangles[faces_of] == q[:, None]).any(axis=1)
            start, way = vertices[p], vertices[q] - vertices[p]
            slope = (normal * way).sum(axis=1)
            with np.errstate(divide="ignore", invalid="ignore"):
                t = (normal * (a - start)).sum(axis=1) / slope
                hit = start + t[:, None] * way
                size = (normal * normal).sum(axis=1)
                u = (np.cross(b - a, hit - a) * normal).sum(axis=1) / size
                v = (np.cross(c - b, hit - b) * normal).sum(axis=1) / size
                w = 1.0 - u - v
                inside = (t > INSIDE) & (t < 1 - INSIDE) & (u > INSIDE) & (v > INSIDE) & (w > INSIDE)
            cross |= inside & ~corner
    return int(cross.sum())
