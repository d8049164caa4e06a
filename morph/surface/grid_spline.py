"""A bicubic spline through the laid grid: point, first and second derivatives that belong together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, frozen_floats

DEGREE = 3


@dataclass(frozen=True, slots=True, eq=False)
class GridSpline:
    """A tensor-product cubic B-spline surface over a rectangle of the sheet.

    Args:
        x_knots_mm: knots along x.
        y_knots_mm: knots along y.
        control_mm: (n, m, 3) control points.
    """

    x_knots_mm: Floats
    y_knots_mm: Floats
    control_mm: Floats

    def __post_init__(self) -> None:
        control = frozen_floats("control_mm", self.control_mm, (None, None, 3))
        n, m = control.shape[:2]
        object.__setattr__(self, "control_mm", control)
        object.__setattr__(self, "x_knots_mm", frozen_floats("x_knots_mm", self.x_knots_mm, (n + DEGREE + 1,)))
        object.__setattr__(self, "y_knots_mm", frozen_floats("y_knots_mm", self.y_knots_mm, (m + DEGREE + 1,)))

    def at(self, sheet_mm: Floats, along_x: int = 0, along_y: int = 0) -> Floats:
        """Returns the points (k, 3) at sheet points (k, 2), or their derivative of the given orders.

        Points off the rectangle take the value at its edge.
        """
        from scipy.interpolate import NdBSpline

        low = (self.x_knots_mm[0], self.y_knots_mm[0])
        high = (self.x_knots_mm[-1], self.y_knots_mm[-1])
        spline = NdBSpline((self.x_knots_mm, self.y_knots_mm), self.control_mm, DEGREE)
        return np.asarray(spline(np.clip(sheet_mm, low, high), nu=(along_x, along_y)), dtype=np.float64)


def spline_through(x_mm: Floats, y_mm: Floats, points_mm: Floats) -> GridSpline:
    """Returns the spline through `points_mm (n, m, 3)` at the grid of `x_mm (n,)` and `y_mm (m,)`, not-a-knot ends."""
    from scipy.interpolate import make_interp_spline

    first = make_interp_spline(x_mm, points_mm, DEGREE, axis=0)
    second = make_interp_spline(y_mm, np.asarray(first.c), DEGREE, axis=1)  # its coefficients have y first
    return GridSpline(first.t, second.t, np.moveaxis(np.asarray(second.c), 0, 1))
