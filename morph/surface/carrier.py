"""The Carrier protocol: a guide surface the sheet is laid on, with its offset at a depth.

A sheet point (x, y) in mm maps to a point on the surface at any depth below it. All methods are
vectorised over sheet points and exact to rounding on analytic surfaces.
"""

from __future__ import annotations

from typing import Protocol

from morph.core.arrays import Floats


class Carrier(Protocol):
    """What every guide surface offers."""

    @property
    def turn_mm(self) -> float:
        """The sheet width after which the map repeats along x; infinite when it does not."""

    def point_mm(self, sheet_mm: Floats, depth_mm: float | Floats) -> Floats:
        """Returns the points (k, 3) that lie `depth_mm` (one or (k,)) into the metal below the sheet points (k, 2)."""

    def into_metal(self, sheet_mm: Floats) -> Floats:
        """Returns the unit vectors (k, 3) from the surface into the metal."""

    def jacobian(self, sheet_mm: Floats, depth_mm: float) -> Floats:
        """Returns d point / d (x, y) as (k, 3, 2), dimensionless, at `depth_mm`."""

    def shape_operator(self, sheet_mm: Floats) -> Floats:
        """Returns S as (k, 2, 2) in 1/mm with J_d = J (I - d S), J the Jacobian at the face.

        Positive principal values: the surface is convex seen from outside the metal, so that the
        offset into the metal shrinks and 1 / value is the focal depth.
        """

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the signed distance (k,) of points (k, 3) from the surface, positive in the metal."""

    def develop(self, xyz_mm: Floats) -> Floats:
        """Returns sheet x, sheet y and depth (k, 3) of points (k, 3): the inverse of `point_mm`."""
