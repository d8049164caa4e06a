"""Fewer triangles for the screen: vertices that share a grid cell become one, at their mean.

Only for looking at; nothing is measured on the result. Method: vertex clustering (Rossignac and
Borrel, "Multi-resolution 3D approximations for rendering complex scenes", 1993; from memory). The
cell grows until the mesh has few enough triangles.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints, frozen_ints
from morph.geometry.mesh import Mesh, mesh_area_mm2

GROWTH = 1.15
FIRST_CELL_SHARE = 0.7
"""The first cell is this share of the one that would just do on an even surface."""


@dataclass(frozen=True, slots=True, eq=False)
class ScreenMesh:
    """A mesh to look at: `mesh`, and for each vertex of the full mesh the vertex (n,) that stands for it."""

    mesh: Mesh
    stands_for: Ints

    def __post_init__(self) -> None:
        n = len(self.mesh.vertices_mm)
        object.__setattr__(self, "stands_for", frozen_ints("stands_for", self.stands_for, (None,), below=n))

    def mean_of(self, value: Floats) -> Floats:
        """Returns the mean of `value (n,)` of the full mesh's vertices at each vertex of the screen mesh."""
        size = len(self.mesh.vertices_mm)
        count = np.bincount(self.stands_for, minlength=size)
        return np.asarray(np.bincount(self.stands_for, value, size) / np.maximum(count, 1), dtype=np.float64)

    def first_of(self, value: Ints) -> Ints:
        """Returns the `value (n,)` of the first vertex of the full mesh that each screen vertex stands for."""
        order = np.argsort(self.stands_for, kind="stable")
        first = np.searchsorted(self.stands_for[order], np.arange(len(self.mesh.vertices_mm)))
        return np.asarray(value)[order[first]]


def _one_key(rows: Ints) -> Ints:
    """Returns one number (n,) per row of the small non-negative numbers `rows (n, 3)`, equal rows alike."""
    span = int(rows.max(initial=0)) + 1
    return np.asarray((rows[:, 0] * span + rows[:, 1]) * span + rows[:, 2], dtype=np.int64)


def _clustered(mesh: Mesh, cell_mm: float) -> ScreenMesh:
    low = mesh.vertices_mm.min(axis=0)
    key = np.floor((mesh.vertices_mm - low) / cell_mm).astype(np.int64)
    _, cluster = np.unique(_one_key(key), return_inverse=True)
    size = int(cluster.max()) + 1
    count = np.bincount(cluster, minlength=size)
    centre = np.stack([np.bincount(cluster, mesh.vertices_mm[:, i], size) / count for i in range(3)], axis=1)
    triangles = cluster[mesh.triangles]
    a, b, c = triangles.T
    triangles = triangles[(a != b) & (b != c) & (c != a)]
    _, first = np.unique(_one_key(np.sort(triangles, axis=1)), return_index=True)
    return ScreenMesh(Mesh(centre, triangles[np.sort(first)]), cluster)


def make_screen_mesh(mesh: Mesh, most_triangles: int) -> ScreenMesh:
    """Returns `mesh` with at most `most_triangles` triangles, unchanged when it has no more.

    Args:
        mesh: any triangles; every vertex should be used by one.
        most_triangles: at least 1.
    """
    if len(mesh.triangles) <= most_triangles:
        return ScreenMesh(mesh, np.arange(len(mesh.vertices_mm)))
    extent = float(np.ptp(mesh.vertices_mm, axis=0).max())
    # a grid of cells over the surface gives about two triangles per cell
    cell_mm = max(FIRST_CELL_SHARE * float(np.sqrt(2.0 * mesh_area_mm2(mesh) / most_triangles)), 1e-6 * extent)
    while True:
        small = _clustered(mesh, cell_mm)
        if len(small.mesh.triangles) <= most_triangles:
            return small
        cell_mm *= GROWTH
