"""The triangle tree: nearest points, first hits, inscribed balls and gaps on triangle meshes.

A TriangleTree is built once per mesh (about 1 microsecond per triangle) and asked many times. The
loops are in kernels/tree_build.py and tree_walk.py; this is their front, with triangle numbers of the caller's mesh.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

import numpy as np

from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints
from morph.geometry.mesh import Mesh

FACING_TURN_DEG = 120.0
"""Two faces bound one wall when their normals turn by at least this; flatter pairs are an edge or a web tip."""


@dataclass(frozen=True, slots=True, eq=False)
class TriangleTree:
    """A bounding-volume tree over the triangles of a mesh.

    Args:
        node_box: (k, 6) box of each node, low x y z then high x y z, mm.
        node_child: (k,) first child, or first triangle of a leaf (leaf order).
        node_count: (k,) triangles of a leaf, 0 for an inner node.
        corners_mm: (n, 9) triangle corners in leaf order. normals: (n, 3) unit, in leaf order.
        order: (n,) triangle of the mesh at each place of the leaf order.
    """

    node_box: Floats
    node_child: Ints
    node_count: Ints
    corners_mm: Floats
    normals: Floats
    order: Ints

    def __post_init__(self) -> None:
        n = len(self.order)
        object.__setattr__(self, "node_box", frozen_floats("node_box", self.node_box, (None, 6)))
        for name in ("node_child", "node_count"):
            object.__setattr__(self, name, frozen_ints(name, getattr(self, name), (len(self.node_box),)))
        object.__setattr__(self, "corners_mm", frozen_floats("corners_mm", self.corners_mm, (n, 9)))
        object.__setattr__(self, "normals", frozen_floats("normals", self.normals, (n, 3)))
        object.__setattr__(self, "order", frozen_ints("order", self.order, (n,), below=n))


class Medium(Enum):
    """Which side of the surface a ball lies in: the value is the sign of the triangle normals there."""

    METAL = 1.0
    VOID = -1.0


def make_tree(mesh: Mesh) -> TriangleTree:
    """Returns the tree over all triangles of `mesh`.

    Raises:
        ValueError: the mesh has no triangle.
    """
    from morph.kernels.tree_build import build

    n = len(mesh.triangles)
    if n == 0:
        raise ValueError("triangles: expected at least one, found none")
    corner = mesh.vertices_mm[mesh.triangles]
    boxes = np.concatenate([corner.min(axis=1), corner.max(axis=1)], axis=1)
    order = np.arange(n, dtype=np.int64)
    node_box = np.empty((2 * n, 6))
    node_child, node_count = np.zeros(2 * n, np.int64), np.zeros(2 * n, np.int64)
    k = int(build(boxes, order, node_box, node_child, node_count))
    corner = corner[order]
    cross = np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0])
    length = np.linalg.norm(cross, axis=1)
    normals = cross / np.where(length > 0.0, length, 1.0)[:, None]
    return TriangleTree(node_box[:k], node_child[:k], node_count[:k], corner.reshape(n, 9), normals, order)


def _rows(name: str, value: Floats) -> Floats:
    return frozen_floats(name, value, (None, 3))


def _mesh_triangle(tree: TriangleTree, hit: Ints) -> Ints:
    return np.where(hit >= 0, tree.order[hit], -1)


def closest_points(tree: TriangleTree, xyz_mm: Floats, limit_mm: float = np.inf) -> tuple[Floats, Ints, Floats]:
    """Returns for each of `xyz_mm (k, 3)` the distance to the surface, the nearest triangle and the point on it.

    Args:
        tree: the surface.
        xyz_mm: (k, 3) points.
        limit_mm: farther than this counts as nothing: distance inf, triangle -1, the point itself.

    Returns:
        distance_mm (k,), triangle (k,), point_mm (k, 3).
    """
    from morph.kernels.tree_walk import closest_many

    points = _rows("xyz_mm", xyz_mm)
    distance, hit, nearest = np.empty(len(points)), np.empty(len(points), np.int64), points.copy()
    closest_many(
        tree.node_box,
        tree.node_child,
        tree.node_count,
        tree.corners_mm,
        points,
        float(limit_mm),
        distance,
        hit,
        nearest,
    )
    return distance, _mesh_triangle(tree, hit), nearest


def cast_rays(tree: TriangleTree, origin_mm: Floats, direction: Floats, least_mm: float = 1e-7) -> tuple[Floats, Ints]:
    """Returns for each ray the distance to the first triangle it meets beyond `least_mm`, and that triangle.

    Args:
        tree: the surface.
        origin_mm: (k, 3) starting points.
        direction: (k, 3) unit directions.
        least_mm: nearer hits are passed over (a ray that starts on the surface).

    Returns:
        distance_mm (k,) (inf for no hit), triangle (k,) (-1 for no hit).
    """
    from morph.kernels.tree_walk import ray_many

    origins, directions = _rows("origin_mm", origin_mm), _rows("direction", direction)
    distance, hit = np.empty(len(origins)), np.empty(len(origins), np.int64)
    ray_many(
        tree.node_box,
        tree.node_child,
        tree.node_count,
        tree.corners_mm,
        origins,
        directions,
        float(least_mm),
        distance,
        hit,
    )
    return distance, _mesh_triangle(tree, hit)


def inscribed_balls(
    tree: TriangleTree,
    xyz_mm: Floats,
    inward: Floats,
    medium: Medium = Medium.METAL,
    largest_mm: float = 1000.0,
    turn_deg: float = FACING_TURN_DEG,
) -> tuple[Floats, Ints]:
    """Returns the diameter of the largest ball in `medium` that touches each surface point, and what stops it.

    Args:
        tree: the surface.
        xyz_mm: (k, 3) points on the surface.
        inward: (k, 3) unit directions from there into the medium.
        medium: the side the balls lie in.
        largest_mm: largest diameter looked for (returned where nothing stops the ball).
        turn_deg: only triangles whose normal turns by at least this from the point's own stop a ball.

    Returns:
        diameter_mm (k,), triangle (k,) (-1 where nothing stops it).
    """
    from morph.kernels.tree_walk import ball_many

    points, directions = _rows("xyz_mm", xyz_mm), _rows("inward", inward)
    radius, hit = np.empty(len(points)), np.empty(len(points), np.int64)
    ball_many(
        tree.node_box,
        tree.node_child,
        tree.node_count,
        tree.corners_mm,
        tree.normals * medium.value,
        points,
        directions,
        0.5 * float(largest_mm),
        float(np.cos(np.radians(turn_deg))),
        radius,
        hit,
    )
    return 2.0 * radius, _mesh_triangle(tree, hit)
