"""The fitted curves on shapes made at random: within a thousandth of the samples, ends exact, between them no ripples."""

import itertools

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from morph.export.spline_fit import FIT_MM, fit_curve
from morph.geometry.curve import curve_at, curve_length_mm

pytestmark = pytest.mark.quick


def smooth_path(seed: int, n: int) -> np.ndarray:
    """A random trigonometric path in space of about 60 mm with n samples at uneven steps."""
    rng = np.random.default_rng(seed)
    t = np.sort(np.concatenate([[0.0, 1.0], rng.uniform(0, 1, n - 2)]))
    t = 0.5 * t + 0.5 * np.linspace(0, 1, n)
    path = np.outer(t, rng.normal(size=3) * 40)
    for k in (1, 2, 3):
        path += np.outer(np.sin(np.pi * k * t + rng.uniform(0, 6)), rng.normal(size=3) * 8 / k**2)
    return path


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(2, 160))
@example(0, 2)
@example(1, 3)
@example(2, 4)
def test_any_smooth_path_is_met(seed, n):
    path = smooth_path(seed, n)
    fitted = fit_curve(path)
    assert fitted.error_mm <= FIT_MM
    assert np.array_equal(fitted.curve.control_mm[[0, -1]], path[[0, -1]])
    assert np.linalg.norm(curve_at(fitted.curve, fitted.parameter) - path, axis=1).max() <= FIT_MM


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 4))
def test_a_lead_of_straight_runs_has_no_ripples(seed, n_corners):
    rng = np.random.default_rng(seed)
    corner = np.cumsum(rng.uniform(6, 15, (n_corners + 2, 3)) * rng.choice([-1, 1], (n_corners + 2, 3)), axis=0)
    path = [corner[:1]]
    for a, b in itertools.pairwise(corner):
        path.append(a + (b - a) * np.linspace(0, 1, 25)[1:, None])
    fitted = fit_curve(np.concatenate(path))
    runs = float(np.linalg.norm(np.diff(corner, axis=0), axis=1).sum())
    # a ripple or a cut corner would change the length; Gauss quadrature of the written curve sees it
    assert curve_length_mm(fitted.curve) == pytest.approx(runs, abs=0.05 * (n_corners + 1) * FIT_MM + 1e-6)
    assert fitted.error_mm <= FIT_MM


def test_length_of_a_helix():
    # a helix of radius 20 and rise 2 pi 5 over one turn: length 2 pi sqrt(20^2 + 5^2)
    t = np.linspace(0, 2 * np.pi, 150)
    fitted = fit_curve(np.column_stack([20 * np.cos(t), 20 * np.sin(t), 5 * t]))
    assert curve_length_mm(fitted.curve) == pytest.approx(2 * np.pi * np.hypot(20, 5), abs=2e-3)


def test_repeated_samples_do_no_harm():
    path = smooth_path(7, 40)
    doubled = np.repeat(path, 2, axis=0)
    assert fit_curve(doubled).error_mm <= FIT_MM
    assert np.array_equal(fit_curve(doubled).curve.control_mm, fit_curve(path).curve.control_mm)


@pytest.mark.parametrize("radius_mm", [1.5, 3.0, 4.5])
def test_a_tight_bend_is_not_taken_for_a_corner(radius_mm):
    # a quarter bend between two straights at the sampling of a 3 mm bore: stays one smooth curve, no triple knot
    step = 0.75
    angle = np.linspace(0, np.pi / 2, int(np.ceil(radius_mm * np.pi / 2 / step)) + 1)
    bend = radius_mm * np.column_stack([np.sin(angle), 1 - np.cos(angle), 0 * angle])
    before = np.column_stack([np.arange(-12, 0, step), np.zeros(16), np.zeros(16)])
    after = bend[-1] + np.column_stack([np.zeros(16), np.arange(step, 12.1, step), np.zeros(16)])
    fitted = fit_curve(np.vstack([before, bend, after]))
    _, count = np.unique(fitted.curve.knots[4:-4], return_counts=True)
    assert count.max(initial=1) == 1 and fitted.error_mm <= FIT_MM
