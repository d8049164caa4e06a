"""Cubics fitted to the vertices around places of a surface: curvature that does not see the triangles.

Facets have no curvature and scan noise has far too much; both are averaged by a fit over a reach that is
chosen from the noise itself. The noise is the scatter of the vertices about fits over a small reach.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints
from morph.geometry.surface import Surface

MOST_NEAR = 400
"""Points of one fit; of more every so many are taken."""
LARGEST_GRID = 4_000_000
"""Cubes of the search grid; a wide surface gets larger cubes."""


@dataclass(frozen=True, slots=True, eq=False)
class LocalFit:
    """What the fits say at k places.

    Args:
        xyz_mm: (k, 3) the fitted surface above or below each place. normals: (k, 3) unit, out of the metal.
        curvature: (k, 2) principal curvatures in 1/mm, largest first, positive where the surface is convex
            seen from outside. scatter_mm: (k,) root mean square distance of the points from the fit.
        points: (k,) how many points were used, 0 where no fit was possible (the rest is then the place itself).
    """

    xyz_mm: Floats
    normals: Floats
    curvature: Floats
    scatter_mm: Floats
    points: Ints

    def __post_init__(self) -> None:
        k = len(self.points)
        for name, shape in (("xyz_mm", (k, 3)), ("normals", (k, 3)), ("curvature", (k, 2)), ("scatter_mm", (k,))):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), shape))
        object.__setattr__(self, "points", frozen_ints("points", self.points, (k,)))


def fit_around(surface: Surface, place_mm: Floats, normals: Floats, reach_mm: Floats | float) -> LocalFit:
    """Returns the cubic fits to the vertices of `surface` within `reach_mm` of each place.

    Args:
        surface: the surface; vertices that face away from the place's normal are left out.
        place_mm: (k, 3) places on or near it.
        normals: (k, 3) first guesses of the normal there.
        reach_mm: radius of each fit, one or (k,).
    """
    from morph.kernels.surface_fit import fit_many

    place = np.ascontiguousarray(place_mm, dtype=np.float64)
    guess = np.ascontiguousarray(normals, dtype=np.float64)
    reach = np.ascontiguousarray(np.broadcast_to(np.asarray(reach_mm, dtype=np.float64), (len(place),)))
    result = np.zeros((len(place), 12))
    result[:, 1:4] = guess
    if len(place):
        # only vertices of triangles, and only those that any fit can reach
        used = np.bincount(surface.mesh.triangles.ravel(), minlength=len(surface.mesh.vertices_mm)) > 0
        low_mm, high_mm = place.min(axis=0) - reach.max(), place.max(axis=0) + reach.max()
        used &= ((surface.mesh.vertices_mm >= low_mm) & (surface.mesh.vertices_mm <= high_mm)).all(axis=1)
        points = surface.mesh.vertices_mm[used]
        if len(points) == 0:
            return _named(place, result)
        low, cell, cells, first, order = _search_grid(points, float(reach.max()))
        fit_many(
            points,
            surface.vertex_normals[used],
            first,
            order,
            low,
            cell,
            cells,
            place,
            guess,
            reach,
            MOST_NEAR,
            result,
        )
    return _named(place, result)


def _search_grid(points: Floats, reach_mm: float) -> tuple[Floats, float, Ints, Ints, Ints]:
    """Returns lowest corner, edge, counts (3,), first point of each cube and the points in cube order."""
    low, high = points.min(axis=0), points.max(axis=0)
    cell = max(reach_mm, float(np.ptp(points, axis=0).max()) * 1e-3, 1e-9)
    cells = np.maximum(((high - low) / cell).astype(np.int64) + 1, 1)
    while int(cells.prod()) > LARGEST_GRID:
        cell *= 1.5
        cells = np.maximum(((high - low) / cell).astype(np.int64) + 1, 1)
    place = np.minimum(((points - low) / cell).astype(np.int64), cells - 1)
    key = (place[:, 0] * cells[1] + place[:, 1]) * cells[2] + place[:, 2]
    order = np.argsort(key, kind="stable").astype(np.int64)
    first = np.searchsorted(key[order], np.arange(int(cells.prod()) + 1)).astype(np.int64)
    return low, cell, cells, first, order


def _named(place: Floats, result: Floats) -> LocalFit:
    normals, xx, xy, yy = result[:, 1:4], result[:, 4], result[:, 5], result[:, 6]
    middle, spread = -0.5 * (xx + yy), np.hypot(0.5 * (xx - yy), xy)
    curvature = np.column_stack([middle + spread, middle - spread])
    xyz = place + result[:, :1] * normals
    return LocalFit(xyz, normals, curvature, result[:, 10], result[:, 11].astype(np.int64))
