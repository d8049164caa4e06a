"""Triangle meshes: the record every solid is handed around as, and its exact measures.

Triangles are counter-clockwise seen from outside. Volume by the divergence theorem, genus by
Euler's formula; both exact for the triangles as they are.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints


@dataclass(frozen=True, slots=True, eq=False)
class Mesh:
    """A triangle mesh in the part frame.

    Args:
        vertices_mm: (n, 3) vertex positions.
        triangles: (m, 3) vertex indices, counter-clockwise seen from outside.
    """

    vertices_mm: Floats
    triangles: Ints

    def __post_init__(self) -> None:
        vertices = frozen_floats("vertices_mm", self.vertices_mm, (None, 3))
        object.__setattr__(self, "vertices_mm", vertices)
        object.__setattr__(self, "triangles", frozen_ints("triangles", self.triangles, (None, 3), below=len(vertices)))


@dataclass(frozen=True, slots=True)
class MeshCondition:
    """What edge counting says of a mesh.

    Args:
        closed: every edge is shared by exactly two triangles in opposite directions.
        bodies: connected pieces (by shared edges).
        genus: sum of the genus over the bodies (handles); meaningful only when closed.
        open_edges: edges with one triangle. odd_edges: edges with more than two or same-way pairs.
    """

    closed: bool
    bodies: int
    genus: int
    open_edges: int
    odd_edges: int


def mesh_volume_mm3(mesh: Mesh) -> float:
    """Returns the signed volume enclosed by `mesh` in mm^3 (positive when it faces outwards)."""
    origin = mesh.vertices_mm.mean(axis=0) if len(mesh.vertices_mm) else np.zeros(3)
    corner = mesh.vertices_mm[mesh.triangles] - origin
    return float(np.einsum("ij,ij->", corner[:, 0], np.cross(corner[:, 1], corner[:, 2])) / 6.0)


def triangle_normals(mesh: Mesh) -> tuple[Floats, Floats]:
    """Returns the unit normals (m, 3) and areas (m,) in mm^2 of the triangles; a sliver of area 0 gets normal 0."""
    corner = mesh.vertices_mm[mesh.triangles]
    cross = np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0])
    length = np.linalg.norm(cross, axis=1)
    return cross / np.where(length > 0.0, length, 1.0)[:, None], 0.5 * length


def mesh_area_mm2(mesh: Mesh) -> float:
    """Returns the surface area of `mesh` in mm^2."""
    return float(triangle_normals(mesh)[1].sum())


def measure_condition(mesh: Mesh) -> MeshCondition:
    """Returns whether `mesh` is closed and consistently oriented, and its bodies and genus."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    n_vertices, triangles = len(mesh.vertices_mm), mesh.triangles
    if len(triangles) == 0:
        return MeshCondition(False, 0, 0, 0, 0)
    directed = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [2, 0]]])
    key = directed[:, 0] * n_vertices + directed[:, 1]
    back = directed[:, 1] * n_vertices + directed[:, 0]
    unique, count = np.unique(key, return_counts=True)
    back.sort()
    has_twin = back[np.minimum(np.searchsorted(back, unique), len(back) - 1)] == unique
    open_edges = int(np.count_nonzero((count == 1) & ~has_twin))
    odd_edges = int(np.count_nonzero(count > 1))
    graph = coo_array(
        (np.ones(len(directed), np.int8), (directed[:, 0], directed[:, 1])), shape=(n_vertices, n_vertices)
    )
    used = np.flatnonzero(np.bincount(triangles.ravel(), minlength=n_vertices))
    _, label = connected_components(graph, directed=False)
    bodies = int(np.count_nonzero(np.bincount(label[used])))
    closed = open_edges == 0 and odd_edges == 0
    euler = len(used) - len(unique) // 2 + len(triangles)
    genus = (2 * bodies - euler) // 2 if closed else 0
    return MeshCondition(closed, bodies, int(genus), open_edges, odd_edges)
