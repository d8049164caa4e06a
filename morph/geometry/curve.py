"""Cubic B-spline curves in the plane or in space, and their exact measures.

A Curve is what layout fits to a centreline and what the STEP file holds. Lengths are integrals of
the speed by Gauss quadrature on each knot span, never sums of chords.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, frozen_floats

DEGREE = 3


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """A clamped cubic B-spline.

    Args:
        knots: (n + 4,) non-decreasing, the first and last four equal.
        control_mm: (n, d) control points, d = 2 on the sheet or 3 in the part frame.
    """

    knots: Floats
    control_mm: Floats

    def __post_init__(self) -> None:
        control = frozen_floats("control_mm", self.control_mm, (None, None))
        object.__setattr__(self, "control_mm", control)
        object.__setattr__(self, "knots", frozen_floats("knots", self.knots, (len(control) + DEGREE + 1,)))


def curve_at(curve: Curve, parameter: Floats, derivative: int = 0) -> Floats:
    """Returns the point (k, d) in mm, or the derivative with respect to the parameter, at each `parameter (k,)`."""
    from scipy.interpolate import BSpline

    spline = BSpline(curve.knots, curve.control_mm, DEGREE)
    return np.asarray(spline(np.asarray(parameter, dtype=np.float64), nu=derivative), dtype=np.float64)


def gauss_on_spans(curve: Curve, order: int = 8) -> tuple[Floats, Floats]:
    """Returns parameters and weights of Gauss-Legendre quadrature of `order` points on every knot span."""
    breaks = np.unique(curve.knots)
    node, weight = np.polynomial.legendre.leggauss(order)
    half = 0.5 * np.diff(breaks)
    middle = 0.5 * (breaks[:-1] + breaks[1:])
    return (middle[:, None] + half[:, None] * node).ravel(), (half[:, None] * weight).ravel()


def curve_length_mm(curve: Curve) -> float:
    """Returns the arc length of `curve` in mm, by quadrature of its speed."""
    parameter, weight = gauss_on_spans(curve)
    return float(weight @ np.linalg.norm(curve_at(curve, parameter, 1), axis=1))
