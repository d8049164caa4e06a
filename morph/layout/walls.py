"""The channel walls as sub-pixel contours, and the distance to them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.core.arrays import Floats, Ints
from morph.layout.frame import Extended


@dataclass(frozen=True, slots=True, eq=False)
class Walls:
    """Closed contours as points with neighbours.

    Args:
        point_mm: (n, 2) points on the contours.
        following: (n,) index of the next point on the same contour. preceding: of the one before.
        tree: search tree over the points.
    """

    point_mm: Floats
    following: Ints
    preceding: Ints
    tree: Any

    def nearest(self, sheet_mm: Floats) -> tuple[Floats, Floats]:
        """Returns the distance (k,) from each `sheet_mm (k, 2)` to the nearest wall, and the place there (k, 2).

        The nearest contour point is found first, then both contour segments that meet in it.
        """
        distance, index = self.tree.query(sheet_mm)
        place = self.point_mm[index].copy()
        start = self.point_mm[index]
        for neighbour in (self.following, self.preceding):
            along = self.point_mm[neighbour[index]] - start
            share = ((sheet_mm - start) * along).sum(axis=1) / np.maximum((along * along).sum(axis=1), 1e-18)
            foot = start + np.clip(share, 0.0, 1.0)[:, None] * along
            away = np.hypot(*(sheet_mm - foot).T)
            closer = away < distance
            distance = np.where(closer, away, distance)
            place[closer] = foot[closer]
        return distance, place

    def distance_mm(self, sheet_mm: Floats) -> Floats:
        """Returns the distance (k,) from each `sheet_mm (k, 2)` to the nearest wall."""
        return self.nearest(sheet_mm)[0]


def find_walls(picture: Extended, level: float) -> Walls:
    """Returns the contours of `picture.field` at `level`, linear between neighbouring samples.

    Diagonal coolant pixels count as joined, as they do for the pieces.
    """
    from scipy.spatial import cKDTree
    from skimage.measure import find_contours

    points, following, preceding, offset = [], [], [], 0
    for contour in find_contours(picture.field, level, fully_connected="high"):
        ring = contour[:-1] if np.allclose(contour[0], contour[-1]) else contour
        n = len(ring)
        if n < 3:
            continue
        index = np.arange(n)
        points.append(ring)
        following.append(offset + np.roll(index, -1))
        preceding.append(offset + np.roll(index, 1))
        offset += n
    place = picture.grid.sheet_mm(np.concatenate(points))
    return Walls(place, np.concatenate(following), np.concatenate(preceding), cKDTree(place))
