"""Laminar factors of morph's sections, looked up: tables over two shape parameters, smooth in between.

The tables hold finite-element solutions (duct.py) on the knots below; `make_duct_tables` makes them anew, a test
compares them with the numbers kept in duct_constants.py. Between the knots runs a bicubic spline, twice
continuously differentiable, so that sizing may differentiate through it. Off the knots it lies within 0.01 % (roofed)
and 0.05 % (arched) of a solution of its own up to a roof angle of 70 degrees, and within 0.3 % and 0.6 % up to 89
(own measurement, f Re).

Roofed and auto sections: lean of the roof line (deg; cos lean = cos b / s) and ridge = ln(apex) / ln(highest apex),
apex the height of the ridge over the radius: 0 round, 1 a full roof. Arched: roof angle b (deg) and sine s of the
angle between centreline and up.
"""

from __future__ import annotations

import math
from enum import IntEnum
from functools import cache
from typing import Any

import numpy as np

from morph.body.section import SectionRule, climb_sine, roof_radius_ratio, roof_share
from morph.core.arrays import Floats
from morph.flow.duct import solve_duct
from morph.flow.duct_constants import ARCHED, ROOFED
from morph.flow.duct_outline import arched_outline, roofed_outline
from morph.settings.job import SectionShape

ANGLES_DEG: tuple[float, ...] = (0, 8, 16, 24, 32, 40, 48, 56, 62, 68, 72, 75, 78, 80, 82, 84, 85.5, 87, 88, 89)
"""Knots in the lean of the roof line and in the roof angle; steeper ones are read at the last."""

RIDGES = tuple(i / 12.0 for i in range(13))
"""Knots in the ridge of roofed sections."""

SINES = tuple(i / 16.0 for i in range(17))
"""Knots in the sine of arched sections."""

ROOFED_ELEMENTS, ARCHED_ELEMENTS, RINGS = 8, 5, 12
"""Elements on each side of the outline, and rings: f Re is then within 0.01 % of twice as many up to 75 degrees."""

DECIMALS = 4
"""Digits kept in the tables."""


class DuctFactor(IntEnum):
    """What a table holds, by its place on the tables' last axis."""

    FRICTION_RE = 0
    NUSSELT_H1 = 1
    NUSSELT_T = 2


ROUND = (64.0, 48.0 / 11.0, 3.6568)
"""The three factors of a circle, exact (the last to its digits)."""


def solve_roofed(lean_deg: float, ridge: float) -> tuple[float, float, float]:
    """Returns f Re, Nu_H1 and Nu_T of a roofed section by finite elements.

    Args:
        lean_deg: angle from up to the normal of the roof line, 0 to 89.
        ridge: ln(apex) / ln(highest apex), 0 round to 1 full.
    """
    lean = math.radians(lean_deg)
    cut = min(math.acos(min(math.cos(lean) ** (1.0 - ridge), 1.0)), lean)
    return _solve(roofed_outline(lean, cut, ROOFED_ELEMENTS))


def solve_arched(angle_deg: float, sine: float) -> tuple[float, float, float]:
    """Returns f Re, Nu_H1 and Nu_T of an arched section by finite elements.

    Args:
        angle_deg: roof angle, 0 to 89.
        sine: of the angle between centreline and up, 0 to 1.
    """
    return _solve(arched_outline(math.radians(angle_deg), sine, ARCHED_ELEMENTS))


def _solve(outline: Floats) -> tuple[float, float, float]:
    found = solve_duct(outline, np.zeros(2), RINGS)
    return found.friction_re, found.nusselt_h1, found.nusselt_t


def make_duct_tables() -> tuple[Floats, Floats]:
    """Returns the tables (angles, ridges, 3) of roofed and (angles, sines, 3) of arched sections, solved anew."""
    roofed = np.array([[solve_roofed(angle, ridge) for ridge in RIDGES] for angle in ANGLES_DEG])
    arched = np.array([[solve_arched(angle, sine) for sine in SINES] for angle in ANGLES_DEG])
    return roofed.round(DECIMALS), arched.round(DECIMALS)


def kept_tables() -> tuple[Floats, Floats]:
    """Returns the tables as kept in duct_constants.py, shapes as of `make_duct_tables`."""
    roofed = np.array(ROOFED.split(), dtype=np.float64).reshape(len(ANGLES_DEG), len(RIDGES), 3)
    arched = np.array(ARCHED.split(), dtype=np.float64).reshape(len(ANGLES_DEG), len(SINES), 3)
    return roofed, arched


@cache
def _spline(shape_is_arched: bool, factor: DuctFactor) -> Any:
    from scipy.interpolate import RectBivariateSpline

    second = SINES if shape_is_arched else RIDGES
    return RectBivariateSpline(ANGLES_DEG, second, kept_tables()[int(shape_is_arched)][:, :, factor], kx=3, ky=3)


def duct_factor(factor: DuctFactor, bore_mm: Floats, tangent: Floats, rule: SectionRule) -> Floats:
    """Returns a laminar factor (k,) of channels of bore (k,) along tangents (k, 3), on the hydraulic diameter.

    Args:
        factor: f Re (Darcy), Nu_H1 or Nu_T.
        bore_mm: (k,) > 0; matters only where the roof of an auto section fades.
        tangent: (k, 3) along the centreline, any length.
        rule: the section.
    """
    bore = np.asarray(bore_mm, dtype=np.float64)
    if rule.shape is SectionShape.ROUND:
        return np.full(bore.shape, ROUND[factor])
    sine = np.broadcast_to(climb_sine(tangent, rule), bore.shape)
    steepest = ANGLES_DEG[-1]
    if rule.shape is SectionShape.ARCHED:
        angle = np.full(bore.shape, min(rule.roof_angle_deg, steepest))
        return np.asarray(_spline(True, factor).ev(angle, np.minimum(sine, 1.0)))
    cosine = rule.roof_cosine
    highest = np.maximum(sine / cosine, 1.0)
    apex = np.maximum(roof_radius_ratio(roof_share(bore, rule), rule) * sine / cosine, 1.0)
    ridge = np.log(apex) / np.maximum(np.log(highest), 1e-12)
    lean = np.degrees(np.arccos(1.0 / highest))
    return np.asarray(_spline(False, factor).ev(np.minimum(lean, steepest), np.minimum(ridge, 1.0)))


def friction_factor_re(bore_mm: Floats, tangent: Floats, rule: SectionRule) -> Floats:
    """Returns the laminar Darcy friction factor times Reynolds number (k,), both on the hydraulic diameter.

    Use it with `section_area_mm2` and `hydraulic_diameter_mm` of body/section.py: with mean velocity V the pressure
    falls by (f Re) viscosity V / (2 D^2) per length.

    >>> flat = np.array([[1.0, 0.0, 0.0]])
    >>> round(float(friction_factor_re(np.array([4.0]), flat, SectionRule(SectionShape.ROOFED, 45.0))[0]), 2)
    62.02
    """
    return duct_factor(DuctFactor.FRICTION_RE, bore_mm, tangent, rule)


def laminar_nusselt(bore_mm: Floats, tangent: Floats, rule: SectionRule, *, uniform_wall: bool = False) -> Floats:
    """Returns the laminar, fully developed Nusselt number (k,) on the hydraulic diameter.

    Args:
        bore_mm: (k,) bores.
        tangent: (k, 3) along the centreline.
        rule: the section.
        uniform_wall: True for one wall temperature everywhere (T); else uniform heat per length (H1).

    >>> flat = np.array([[1.0, 0.0, 0.0]])
    >>> round(float(laminar_nusselt(np.array([4.0]), flat, SectionRule(SectionShape.ROOFED, 45.0))[0]), 2)
    4.15
    """
    factor = DuctFactor.NUSSELT_T if uniform_wall else DuctFactor.NUSSELT_H1
    return duct_factor(factor, bore_mm, tangent, rule)
