"""The channel wall of the written insert: its triangles alone, and which centreline sample each vertex belongs to."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.check.centreline import Centrelines
from morph.core.arrays import Floats, Ints, frozen_ints
from morph.geometry.mesh import Mesh
from morph.geometry.tree import TriangleTree, make_tree
from morph.solid.result import Insert


@dataclass(frozen=True, slots=True, eq=False)
class ChannelWall:
    """The channel-labelled triangles of an insert.

    Args:
        mesh: those triangles, facing out of the metal (into the channel).
        tree: over them.
        sample: (n,) centreline sample that each vertex belongs to.
    """

    mesh: Mesh
    tree: TriangleTree
    sample: Ints

    def __post_init__(self) -> None:
        object.__setattr__(self, "sample", frozen_ints("sample", self.sample, (len(self.mesh.vertices_mm),)))


def channel_mesh(insert: Insert) -> Mesh:
    """Returns the channel wall of `insert` as an open mesh facing into the channel."""
    return sub_mesh(insert.mesh, np.flatnonzero(insert.channel_triangle == 1))


def sub_mesh(mesh: Mesh, triangle: Ints) -> Mesh:
    """Returns the triangles `triangle (k,)` of `mesh` with only their own vertices, in their old order."""
    used = np.zeros(len(mesh.vertices_mm), dtype=bool)
    used[mesh.triangles[triangle]] = True
    return Mesh(mesh.vertices_mm[used], (np.cumsum(used) - 1)[mesh.triangles[triangle]])


def nearest_samples(lines: Centrelines, xyz_mm: Floats) -> Ints:
    """Returns for each of `xyz_mm (k, 3)` the sample whose ball it lies on or is nearest to.

    The least power distance |x - c|^2 - r^2 is asked, which is 0 on the wall of the sample's own ball and
    positive for every other ball: a thin branch beside a thick one keeps to its own wall. It is an
    ordinary nearest-neighbour search with sqrt(largest r^2 - r^2) as a fourth coordinate.
    """
    from scipy.spatial import cKDTree

    radius_squared = (0.5 * lines.bore_mm) ** 2
    lift = np.sqrt(radius_squared.max() - radius_squared)
    tree = cKDTree(np.column_stack([lines.xyz_mm, lift]))
    _, index = tree.query(np.column_stack([xyz_mm, np.zeros(len(xyz_mm))]))
    return np.asarray(index, dtype=np.int64)


def make_channel_wall(insert: Insert, lines: Centrelines) -> ChannelWall:
    """Returns the channel wall of `insert`, each vertex with its centreline sample.

    Raises:
        ValueError: the insert has no channel triangle.
    """
    mesh = channel_mesh(insert)
    return ChannelWall(mesh, make_tree(mesh), nearest_samples(lines, mesh.vertices_mm))
