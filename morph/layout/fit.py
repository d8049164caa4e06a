"""A penalised cubic B-spline through the samples of one chain.

Minimised over the control points is sum w |C(s_i) - p_i|^2 + lambda times the integral of the squared
second derivative (penalised B-splines: Eilers and Marx, 1996, Statistical Science 11:2). A ripple of wavelength W
is damped by 1 / (1 + (W_c / W)^4) where lambda = (W_c / 2 pi)^4 / ds, so the firmness is stated as the
wavelength W_c, span by span. It starts at 1.4 channel widths; around bends tighter than one width it is
raised, never beyond a deviation of 0.10 of the local width; where even the start exceeds that it is
lowered and knots are added. The matrix has four bands; they are summed directly.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.geometry.curve import DEGREE, Curve, curve_at

DEVIATION_SHARE = 0.10
GENTLE_WIDTHS = 1.4
TIGHTEST_BEND = 1.0
"""Curvature times width above which a chain is smoothed more firmly."""
ZONE_WEIGHT = 1e-3
END_WEIGHT = 50.0
SEAM_WEIGHT = 2.0
ROUNDS = 8
STEP = 1.4
"""The stated wavelength changes by this factor per round, only where it must."""


@dataclass(frozen=True, slots=True, eq=False)
class Samples:
    """What a chain is fitted to: parameter, place, half-width, free flag per sample, and where runs meet."""

    at: Floats
    place_mm: Floats
    half_mm: Floats
    free: Bools
    seams: tuple[int, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Basis:
    """The B-splines that are not zero at given parameters, by the Cox-de Boor recursion.

    Args:
        knots: (n + 4,) clamped knots.
        span: (k,) index of the knot at or before each parameter.
        linear, quadratic, cubic: (k, 2), (k, 3), (k, 4) values of the functions that end with number `span`.
    """

    knots: Floats
    span: Ints
    linear: Floats
    quadratic: Floats
    cubic: Floats

    def curvature_parts(self, control: Floats) -> tuple[Floats, Floats, Floats]:
        """Returns point, first and second derivative (k, 2) of the curve with `control (n, 2)`."""
        t, n = self.knots, len(control)
        speed = np.zeros_like(control)
        speed[1:] = DEGREE * np.diff(control, axis=0) / (t[DEGREE + 1 : n + DEGREE] - t[1:n])[:, None]
        turn = np.zeros_like(control)
        turn[2:] = 2.0 * np.diff(speed[1:], axis=0) / (t[4 : n + 2] - t[2:n])[:, None]
        return (
            _weighted(self.cubic, control, self.span - 3),
            _weighted(self.quadratic, speed, self.span - 2),
            _weighted(self.linear, turn, self.span - 1),
        )


def _weighted(value: Floats, control: Floats, first: Ints) -> Floats:
    total = value[:, :1] * control[first]
    for column in range(1, value.shape[1]):
        total += value[:, column : column + 1] * control[first + column]
    return total


def make_basis(knots: Floats, at: Floats) -> Basis:
    """Returns the basis of clamped cubic `knots (n + 4,)` at parameters `at (k,)` within them."""
    n = len(knots) - DEGREE - 1
    span = np.clip(np.searchsorted(knots, at, side="right") - 1, DEGREE, n - 1)
    values = [np.ones((len(at), 1))]
    for degree in range(1, DEGREE + 1):
        grown = np.zeros((len(at), degree + 1))
        for column in range(degree):
            right = knots[span + column + 1]
            left = knots[span + column + 1 - degree]
            share = values[-1][:, column] / (right - left)
            grown[:, column] += (right - at) * share
            grown[:, column + 1] += (at - left) * share
        values.append(grown)
    return Basis(knots, span, values[1], values[2], values[3])


class Fit:
    """One chain's least-squares problem, solved for any firmness."""

    def __init__(
        self,
        samples: Samples,
        knot_step_mm: float,
        seam_weight: float = SEAM_WEIGHT,
        share: float = DEVIATION_SHARE,
    ) -> None:
        self.samples = samples
        self.share = share
        self.origin_mm = samples.place_mm[0]  # solved about it: the result moves with the samples
        length = float(samples.at[-1])
        n_spans = int(min(max(2, math.ceil(length / knot_step_mm)), max(2, len(samples.at) - 2)))
        self.span_mm = length / n_spans
        self.span_at = (np.arange(n_spans) + 0.5) * self.span_mm
        self.knots = np.concatenate([[0.0] * DEGREE, np.linspace(0.0, length, n_spans + 1), [length] * DEGREE])
        self.basis = make_basis(self.knots, np.minimum(samples.at, length))
        weight = np.where(samples.free, 1.0, ZONE_WEIGHT)
        weight[list(samples.seams)] = seam_weight
        weight[[0, -1]] = END_WEIGHT
        self._sum_normal(weight, n_spans + DEGREE)
        self._set_turns(n_spans + DEGREE)

    def _sum_normal(self, weight: Floats, n: int) -> None:
        """Sets the bands of the normal matrix (upper form, diagonal last) and the right-hand side."""
        cubic, first = self.basis.cubic, self.basis.span - DEGREE
        self.normal = np.zeros((DEGREE + 1, n))
        self.right = np.zeros((n, 2))
        place = self.samples.place_mm - self.origin_mm
        for q in range(DEGREE + 1):
            for axis in (0, 1):
                self.right[:, axis] += np.bincount(first + q, weight * cubic[:, q] * place[:, axis], n)
            for p in range(q + 1):
                self.normal[DEGREE - (q - p)] += np.bincount(first + q, weight * cubic[:, p] * cubic[:, q], n)

    def _set_turns(self, n: int) -> None:
        """Sets the rows (n - 2, 3) that give the second derivative at each knot from three control points."""
        t = self.knots
        m = np.arange(2, n)
        outer = 2.0 / (t[m + 2] - t[m])
        here, before = 3.0 / (t[m + 3] - t[m]), 3.0 / (t[m + 2] - t[m - 1])
        self.turns = np.column_stack([outer * before, -outer * (here + before), outer * here])

    def _penalty(self, firmness: Floats) -> Floats:
        """Returns the bands of the integral of firmness (n_spans,) times the squared second derivative.

        On a span it is linear from one knot's value a to the next b, so the integral is h (a a + a b + b b) / 3.
        """
        turns, bands = self.turns, np.zeros_like(self.normal)
        share = firmness * self.span_mm / 3.0
        at_knot = np.concatenate([share, [0.0]]) + np.concatenate([[0.0], share])
        rows = np.arange(len(turns))
        for q in range(3):
            for p in range(q + 1):
                bands[DEGREE - (q - p), rows + q] += at_knot * turns[:, p] * turns[:, q]
            for p in range(3):
                value = share * turns[:-1, p] * turns[1:, q]
                offset = 1 + q - p
                if offset == 0:
                    bands[DEGREE, rows[:-1] + p] += value
                else:
                    bands[DEGREE - abs(offset), rows[:-1] + max(p, q + 1)] += 0.5 * value
        return bands

    def solve(self, wavelength_mm: Floats) -> Floats:
        """Returns the control points (n, 2) that damp ripples shorter than `wavelength_mm (n_spans,)` on each span."""
        from scipy.linalg import solveh_banded

        spacing = float(self.samples.at[-1]) / (len(self.samples.at) - 1)
        bands = self.normal + self._penalty((wavelength_mm / (2.0 * math.pi)) ** 4 / spacing)
        bands[DEGREE] += 1e-12 * bands[DEGREE].max()
        moved = solveh_banded(bands, self.right, check_finite=False)
        return np.asarray(moved + self.origin_mm, dtype=np.float64)

    def judge(self, control: Floats) -> tuple[Floats, Floats]:
        """Returns per sample deviation over what is allowed (0 where not free), and curvature times width."""
        point, first, second = self.basis.curvature_parts(control)
        speed = np.maximum(np.hypot(*first.T), 1e-9)
        away = self.samples.place_mm - point
        width = 2.0 * self.samples.half_mm
        deviation = np.abs(away[:, 0] * first[:, 1] - away[:, 1] * first[:, 0]) / speed
        bend = np.abs(first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]) / speed**3
        return np.where(self.samples.free, deviation / (self.share * width), 0.0), bend * width

    def near(self, bad: Bools, reach_mm: float) -> Bools:
        """Returns which spans (n_spans,) lie within `reach_mm` of a sample marked in `bad (k,)`."""
        at = self.samples.at[bad]
        right = np.searchsorted(at, self.span_at)
        after = np.abs(at[np.minimum(right, len(at) - 1)] - self.span_at)
        before = np.abs(at[np.maximum(right - 1, 0)] - self.span_at)
        return np.asarray(np.minimum(after, before) <= reach_mm + self.span_mm)


def curvature_per_mm(curve: Curve, at: Floats) -> Floats:
    """Returns (k,) curvature |x'y" - y'x"| / |C'|^3 of a plane curve at parameters `at`."""
    first, second = curve_at(curve, at, 1), curve_at(curve, at, 2)
    cross = first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]
    return np.asarray(np.abs(cross) / np.maximum(np.hypot(*first.T), 1e-9) ** 3, dtype=np.float64)


def fit_chain(samples: Samples, seam_weight: float = SEAM_WEIGHT, share: float = DEVIATION_SHARE) -> Curve:
    """Returns the curve through `samples`: gentle, softer where it would deviate, firmer where it bends tightly.

    Args:
        samples: of the chain.
        seam_weight: weight of the samples where runs meet.
        share: how far it may deviate, in local widths.
    """
    half = float(np.median(samples.half_mm))
    for knot_step in (half, 0.5 * half, 0.25 * half):
        fit = Fit(samples, knot_step, seam_weight, share)
        wavelength = np.full(len(fit.span_at), GENTLE_WIDTHS * 2.0 * half)
        control = fit.solve(wavelength)
        for _ in range(ROUNDS):
            excess, bend = fit.judge(control)
            if excess.max() <= 1.0:
                return Curve(fit.knots, _straightened(fit, wavelength, control, bend, 2.0 * half))
            wavelength = np.where(fit.near(excess > 1.0, half), wavelength / STEP, wavelength)
            control = fit.solve(wavelength)
    return Curve(fit.knots, control)


def _straightened(fit: Fit, wavelength: Floats, control: Floats, bend: Floats, width_mm: float) -> Floats:
    """Returns `control` made firmer around bends tighter than one width, as long as the deviation bound holds.

    A fit within a closer bound than usual uses it up in finer steps, so that its bends fold no sooner than they must.
    """
    step = STEP
    for _ in range(ROUNDS):
        if bend.max() <= TIGHTEST_BEND:
            break
        raised = np.where(fit.near(bend > TIGHTEST_BEND, width_mm), wavelength * step, wavelength)
        firmer = fit.solve(raised)
        excess, firmer_bend = fit.judge(firmer)
        if excess.max() <= 1.0:
            wavelength, control, bend = raised, firmer, firmer_bend
        elif fit.share < DEVIATION_SHARE:
            step = math.sqrt(step)
        else:
            break
    return control
