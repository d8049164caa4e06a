"""A branch as one cubic B-spline that stays within a thousandth of a millimetre of its samples.

Method: the samples are first joined by a cubic spline through all of them (chord-length parameter,
not-a-knot ends); that is the reference. Then as few samples as possible are kept: a spline through
the kept ones, with the reference's end slopes, is compared with the reference at every sample and
half way between; every interval where it is off is split at its middle sample. With all samples
kept it is the reference itself, so the search always ends, and both ends are exact throughout.
A real corner of a lead (a sharp turn between two straight runs) becomes a triple knot instead of
being rounded off into ripples.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, unit_rows
from morph.core.tolerance import COINCIDE_MM
from morph.geometry.curve import DEGREE, Curve, curve_at

FIT_MM = 5e-4
"""Largest distance of the spline from its samples; half of what is promised, the rest is for rounding."""

CORNERS = ((0.5, 3.0), (0.005, 10.0))
"""A sample is a corner when the path turns there by more than the first number (rad) and by more than the
second number times what it turns at the samples beside it. A bend of one bore radius, sampled at a
quarter bore, turns by 0.25 at every sample, so it is no corner; a kink of 0.3 degrees between
straight runs is one, because a smooth curve would ripple by more than the fit allows."""


@dataclass(frozen=True, slots=True, eq=False)
class FittedCurve:
    """A fitted centreline: the curve (d = 3), the parameter (k,) of each sample, and the largest miss in mm."""

    curve: Curve
    parameter: Floats
    error_mm: float


def _apart(points: Floats) -> Floats:
    """Returns `points (k, 3)` without those that coincide with the one before; both ends stay."""
    step = np.linalg.norm(np.diff(points, axis=0), axis=1)
    kept = np.array(points[np.concatenate([[True], step > COINCIDE_MM])], dtype=np.float64)
    if len(kept) == 1:
        kept = points[[0, -1]]
    kept[-1] = points[-1]
    return kept


def _corners(points: Floats) -> list[int]:
    """Returns the indices of the samples at which the polyline `points (k, 3)` has a sharp corner."""
    heading = unit_rows(np.diff(points, axis=0))
    cosine = np.einsum("ij,ij->i", heading[1:], heading[:-1])
    turn = np.concatenate([[0.0], np.arccos(np.clip(cosine, -1.0, 1.0)), [0.0]])
    beside = np.maximum(np.roll(turn, 1), np.roll(turn, -1))
    sharp = np.any([(turn > least) & (turn > times * beside) for least, times in CORNERS], axis=0)
    return [int(i) for i in np.flatnonzero(sharp)]


def _reference(parameter: Floats, points: Floats) -> tuple[Floats, Curve]:
    """Returns the parameters in use and the cubic spline through all `points`; two or three are filled up to four."""
    from scipy.interpolate import make_interp_spline

    if len(points) <= DEGREE:
        few = make_interp_spline(parameter, points, k=len(points) - 1)
        parameter = np.linspace(parameter[0], parameter[-1], DEGREE + 1)
        points = np.asarray(few(parameter), dtype=np.float64)
    spline = make_interp_spline(parameter, points, k=DEGREE)
    return parameter, Curve(spline.t, spline.c)


def _through(parameter: Floats, reference: Curve) -> Curve:
    """Returns the cubic spline with knots `parameter` that meets `reference` there and in its end slopes."""
    from scipy.interpolate import make_interp_spline

    slope = curve_at(reference, parameter[[0, -1]], 1)
    ends = ([(1, slope[0])], [(1, slope[1])])
    spline = make_interp_spline(parameter, curve_at(reference, parameter), k=DEGREE, bc_type=ends)  # type: ignore[arg-type]
    return Curve(spline.t, spline.c)


def _fit_smooth(parameter: Floats, points: Floats) -> Curve:
    """Returns the spline with few knots through the smooth run `points (k, 3)` at `parameter (k,)`."""
    parameter, reference = _reference(parameter, points)
    between = 0.5 * (parameter[1:] + parameter[:-1])
    at_samples, at_middles = curve_at(reference, parameter), curve_at(reference, between)
    kept = np.array([0, len(parameter) - 1])
    while True:
        curve = _through(parameter[kept], reference)
        miss = np.linalg.norm(curve_at(curve, parameter) - at_samples, axis=1)
        middle_miss = np.linalg.norm(curve_at(curve, between) - at_middles, axis=1)
        off = np.flatnonzero(np.maximum(miss[1:], middle_miss) > FIT_MM)
        interval = np.unique(np.searchsorted(kept, off, side="right") - 1)
        middle = (kept[interval] + kept[interval + 1]) // 2
        grown = np.union1d(kept, middle)
        if len(grown) == len(kept):
            return curve
        kept = grown


def _joined(pieces: list[Curve]) -> Curve:
    """Returns the pieces as one curve; at each joint the knot is triple, so the heading may turn there."""
    knots, control = pieces[0].knots, pieces[0].control_mm
    for piece in pieces[1:]:
        knots = np.concatenate([knots[:-1], piece.knots[DEGREE + 1 :]])
        control = np.concatenate([control, piece.control_mm[1:]])
    return Curve(knots, control)


def fit_curve(xyz_mm: Floats) -> FittedCurve:
    """Returns one cubic B-spline within FIT_MM of the samples `xyz_mm (k, 3)`, its ends exact.

    Args:
        xyz_mm: centreline samples in mm, two or more, in order, with a length.
    """
    points = _apart(xyz_mm)
    parameter = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))])
    cut = [0, *_corners(points), len(points) - 1]
    pieces = [_fit_smooth(parameter[a : b + 1], points[a : b + 1]) for a, b in itertools.pairwise(cut)]
    curve = _joined(pieces)
    control = curve.control_mm.copy()
    control[0], control[-1] = points[0], points[-1]
    curve = Curve(curve.knots, control)
    miss = np.linalg.norm(curve_at(curve, parameter) - points, axis=1)
    return FittedCurve(curve, parameter, float(miss.max()))
