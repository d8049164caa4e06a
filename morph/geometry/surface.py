"""A triangle surface to stand on: its normals, its neighbours, and places on it.

A place is a triangle and three shares (barycentric coordinates), so that the same place can be found on
any surface with the same triangles.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints, unit_rows
from morph.geometry.adjacency import Adjacency, make_adjacency, vertex_normals
from morph.geometry.mesh import Mesh, triangle_normals
from morph.geometry.tree import TriangleTree, closest_points, make_tree


@dataclass(frozen=True, slots=True, eq=False)
class Surface:
    """A mesh with what walking on it needs.

    Args:
        mesh: the triangles. adjacency: their neighbours.
        normals: (m, 3) unit normals of the triangles. areas_mm2: (m,).
        vertex_normals: (n, 3) unit.
    """

    mesh: Mesh
    adjacency: Adjacency
    normals: Floats
    areas_mm2: Floats
    vertex_normals: Floats

    def __post_init__(self) -> None:
        n, m = len(self.mesh.vertices_mm), len(self.mesh.triangles)
        object.__setattr__(self, "normals", frozen_floats("normals", self.normals, (m, 3)))
        object.__setattr__(self, "areas_mm2", frozen_floats("areas_mm2", self.areas_mm2, (m,)))
        object.__setattr__(self, "vertex_normals", frozen_floats("vertex_normals", self.vertex_normals, (n, 3)))


@dataclass(frozen=True, slots=True, eq=False)
class Places:
    """Points on a surface: `triangle (k,)` and `xyz_mm (k, 3)`."""

    triangle: Ints
    xyz_mm: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "triangle", frozen_ints("triangle", self.triangle, (None,)))
        object.__setattr__(self, "xyz_mm", frozen_floats("xyz_mm", self.xyz_mm, (len(self.triangle), 3)))


def make_surface(mesh: Mesh, adjacency: Adjacency | None = None) -> Surface:
    """Returns `mesh` with its normals and neighbours; `adjacency` when it is known already."""
    normals, areas = triangle_normals(mesh)
    found = make_adjacency(mesh.triangles) if adjacency is None else adjacency
    return Surface(mesh, found, normals, areas, vertex_normals(mesh))


def turned_over(surface: Surface) -> Surface:
    """Returns `surface` with its triangles the other way round and its normals on the other side."""
    found = surface.adjacency
    return Surface(
        Mesh(surface.mesh.vertices_mm, surface.mesh.triangles[:, ::-1]),
        Adjacency(found.neighbour[:, ::-1], found.crowded, found.same_way),
        -surface.normals,
        surface.areas_mm2,
        -surface.vertex_normals,
    )


def corner_shares(surface: Surface, places: Places) -> Floats:
    """Returns the shares (k, 3) of the corners at the places, each in [0, 1] and of sum 1."""
    corner = surface.mesh.vertices_mm[surface.mesh.triangles[places.triangle]]
    one, two, to = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0], places.xyz_mm - corner[:, 0]
    aa, ab, bb = (one * one).sum(1), (one * two).sum(1), (two * two).sum(1)
    at, bt = (one * to).sum(1), (two * to).sum(1)
    whole = aa * bb - ab * ab
    safe = np.where(whole > 0.0, whole, 1.0)
    second, third = (bb * at - ab * bt) / safe, (aa * bt - ab * at) / safe
    shares = np.clip(np.column_stack([1.0 - second - third, second, third]), 0.0, 1.0)
    return np.asarray(shares / shares.sum(axis=1, keepdims=True), dtype=np.float64)


def smooth_normals(surface: Surface, places: Places) -> Floats:
    """Returns the unit normals (k, 3) at the places, interpolated between the corners'."""
    shares = corner_shares(surface, places)
    corner = surface.vertex_normals[surface.mesh.triangles[places.triangle]]
    return unit_rows(np.einsum("kc,kcx->kx", shares, corner))


def same_places(surface: Surface, other: Surface, places: Places) -> Places:
    """Returns the places of `surface` on `other`, a surface with the same triangles in another position."""
    shares = corner_shares(surface, places)
    corner = other.mesh.vertices_mm[other.mesh.triangles[places.triangle]]
    return Places(places.triangle, np.einsum("kc,kcx->kx", shares, corner))


def walk(surface: Surface, places: Places, steps_mm: Floats) -> tuple[Places, Floats, Ints]:
    """Returns where straight walks over the surface end.

    Args:
        surface: the surface.
        places: (k) starts.
        steps_mm: (k, 3) direction and length of each walk; what stands out of the surface is left out of the
            direction, not of the length.

    Returns:
        the ends, the length left in mm (k,) where the surface ended, and the outcome (k,):
        0 arrived, 1 at the border, 2 lost.
    """
    from morph.kernels.surface_walk import walk_many

    triangle, point = places.triangle.copy(), places.xyz_mm.copy()
    direction = np.array(steps_mm, dtype=np.float64, order="C")
    left = np.linalg.norm(direction, axis=1)
    outcome = np.zeros(len(triangle), dtype=np.int64)
    mesh = surface.mesh
    most = 20 * len(mesh.triangles) + 1000
    walk_many(
        mesh.vertices_mm,
        mesh.triangles,
        surface.adjacency.neighbour,
        surface.normals,
        most,
        triangle,
        point,
        direction,
        left,
        outcome,
    )
    return Places(triangle, point), left, outcome


@dataclass(frozen=True, slots=True, eq=False)
class SignedSurface:
    """A surface that knows its sides: distances positive on the inner side, against the normals.

    The sign comes from the angle-weighted normal at the nearest point (Baerentzen and Aanaes 2005), so that it is
    right next to edges and vertices; an open surface is signed by the same rule, which means little past its border.
    """

    surface: Surface
    tree: TriangleTree

    def nearest(self, xyz_mm: Floats) -> tuple[Floats, Places]:
        """Returns the unsigned distance (k,) in mm of points (k, 3) and the nearest places."""
        distance, triangle, point = closest_points(self.tree, xyz_mm)
        return distance, Places(triangle, point)

    def inside_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the signed distance (k,) of points (k, 3), positive on the side the normals point away from."""
        distance, places = self.nearest(xyz_mm)
        away = self.side_normals(places)
        sign = np.where(((xyz_mm - places.xyz_mm) * away).sum(axis=1) > 0.0, -1.0, 1.0)
        return np.asarray(sign * distance, dtype=np.float64)

    def side_normals(self, places: Places) -> Floats:
        """Returns the normals (k, 3) that tell the sides at places: of the triangle, the edge or the vertex."""
        shares = corner_shares(self.surface, places)
        normals = self.surface.normals[places.triangle].copy()
        on = shares < SIDE_SHARE
        for k in range(3):
            edge = on[:, k] & (on.sum(axis=1) == 1)
            other = self.surface.adjacency.neighbour[places.triangle, k]
            both = edge & (other >= 0)
            normals[both] += self.surface.normals[other[both]]
        vertex = on.sum(axis=1) == 2
        corner = self.surface.mesh.triangles[places.triangle, shares.argmax(axis=1)]
        normals[vertex] = self.surface.vertex_normals[corner[vertex]]
        return normals


SIDE_SHARE = 1e-9
"""A share below this is none: the place lies on the edge or the vertex left over."""


def make_signed(surface: Surface) -> SignedSurface:
    """Returns `surface` with the tree that finds its nearest points."""
    return SignedSurface(surface, make_tree(surface.mesh))
