"""Smallest gaps between two surfaces, triangle against triangle (sampling points does not converge to them)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats
from morph.geometry.mesh import Mesh
from morph.geometry.tree import TriangleTree


@dataclass(frozen=True, slots=True)
class Gap:
    """The smallest distance between two surfaces in mm and the two points it lies between."""

    distance_mm: float
    from_mm: tuple[float, float, float]
    to_mm: tuple[float, float, float]

    @property
    def middle_mm(self) -> tuple[float, float, float]:
        """The point half way across the gap."""
        a, b = self.from_mm, self.to_mm
        return (0.5 * (a[0] + b[0]), 0.5 * (a[1] + b[1]), 0.5 * (a[2] + b[2]))


def _place(row: Floats) -> tuple[float, float, float]:
    return (float(row[0]), float(row[1]), float(row[2]))


def measure_gap(surface: Mesh, tree: TriangleTree, limit_mm: float = np.inf) -> Gap | None:
    """Returns the smallest gap from any triangle of `surface` to the surface in `tree`, None above `limit_mm`.

    The two surfaces must not cross: crossing faces are not noticed, only corners and edges are measured.
    """
    from morph.kernels.tree_gap import smallest_gap

    pair = np.zeros(6)
    queries = surface.vertices_mm[surface.triangles].reshape(-1, 9)
    distance = float(
        smallest_gap(tree.node_box, tree.node_child, tree.node_count, tree.corners_mm, queries, float(limit_mm), pair)
    )
    if not np.isfinite(distance):
        return None
    return Gap(distance, _place(pair[:3]), _place(pair[3:]))
