"""Friction factors of straight and bent channels, each with its slope in ln Re and ln (roughness / diameter).

Darcy factors f: drop = f (length / diameter) rho V^2 / 2, on the hydraulic diameter.

Straight, laminar to turbulent in one smooth curve: S. W. Churchill, Friction-factor equation spans all
fluid-flow regimes, Chemical Engineering 84 (1977) 91-92,

    f = 8 [(8 / Re)^12 + (A + B)^-1.5]^(1/12)
    A = [2.457 ln(1 / ((7 / Re)^0.9 + 0.27 e / D))]^16        B = (37530 / Re)^16

Sections that are not round: 8 / Re becomes (f Re / 64) 8 / Re with the section's own laminar f Re; the
turbulent part stays, on the hydraulic diameter. Bent, laminar: the ratio to straight of C. M. White,
Streamline flow through curved pipes, Proc. Royal Society A 123 (1929) 645-663, for De = Re sqrt(d / D)
from 11.6 up, D the diameter of the bend. Bent, turbulent: H. Ito, Pressure losses in smooth pipe bends,
J. Basic Engineering 82 (1960) 131-143: total coefficient of a 90 degree bend 0.388 a (R/d)^0.84 Re^-0.17,
a = max(1, 0.95 + 4.42 (R/d)^-1.96) (fit as in F. M. White, Fluid Mechanics, chapter 6).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats

ROUND_FRICTION_RE = 64.0
LEAST_REYNOLDS = 1e-9
DEAN_ONSET = 11.6
TIGHTEST_BEND_BORES = 0.7
"""A centreline bends no tighter than this for the turbulent coefficient: beyond, its fit leaves the measurements."""

DEAN_RANGE = 2000.0
"""White's ratio is held beyond this Dean number: his measurements and the laminar range end near it."""


@dataclass(frozen=True, slots=True, eq=False)
class Factor:
    """A coefficient (k,) with its slopes (k,).

    Args:
        value: the coefficient.
        by_log_re: slope in ln Re. by_log_ratio: slope in ln of roughness over diameter, or of bend radius over bore.
        by_log_laminar: slope in ln of the laminar f Re; 0 where it plays no part.
    """

    value: Floats
    by_log_re: Floats
    by_log_ratio: Floats
    by_log_laminar: Floats


def churchill(
    reynolds: Floats, roughness_ratio: Floats, laminar: Floats, laminar_slope: Floats | float = 0.0
) -> Factor:
    """Returns the Darcy friction factor over all regimes.

    Args:
        reynolds: (k,) on the hydraulic diameter, > 0.
        roughness_ratio: (k,) sand-grain roughness over hydraulic diameter, >= 0.
        laminar: (k,) f Re of the laminar section, 64 for round; times White's ratio in a bend.
        laminar_slope: (k,) slope of ln laminar in ln Re; 0 in a straight pipe.

    >>> one = np.ones(1)
    >>> round(float(churchill(1e5 * one, 0.0 * one, 64.0 * one).value[0]), 5)
    0.01799
    """
    re = np.maximum(reynolds, LEAST_REYNOLDS)
    log_laminar = 12.0 * np.log(laminar / (8.0 * re))
    smooth = np.exp(0.9 * np.log(7.0 / np.maximum(re, 1.0)))
    rough = 0.27 * roughness_ratio
    log_ratio = np.log(1.0 / np.minimum(smooth + rough, 0.999))
    a = 16.0 * np.log(2.457 * log_ratio)
    b = 16.0 * np.log(37530.0 / re)
    log_sum = np.logaddexp(a, b)
    share_a = np.exp(a - log_sum)
    log_turbulent = -1.5 * log_sum
    log_total = np.logaddexp(log_laminar, log_turbulent)
    turbulent = np.exp(log_turbulent - log_total)
    a_by_re = np.where(smooth + rough < 0.999, 16.0 * 0.9 * smooth / ((smooth + rough) * log_ratio), 0.0)
    a_by_re = np.where(re > 1.0, a_by_re, 0.0)
    a_by_ratio = np.where(smooth + rough < 0.999, -16.0 * rough / ((smooth + rough) * log_ratio), 0.0)
    slope_turbulent = -1.5 * (share_a * a_by_re - 16.0 * (1.0 - share_a))
    by_re = (turbulent * slope_turbulent + (1.0 - turbulent) * 12.0 * (laminar_slope - 1.0)) / 12.0
    value = 8.0 * np.exp(log_total / 12.0)
    by_ratio = value * turbulent * -1.5 * share_a * a_by_ratio / 12.0
    return Factor(value, value * by_re, by_ratio, value * (1.0 - turbulent))


def turbulent_only(reynolds: Floats, roughness_ratio: Floats) -> Floats:
    """Returns the turbulent part (k,) of Churchill's factor alone, for the spread between the laws in transition."""
    smooth = (7.0 / np.maximum(reynolds, 100.0)) ** 0.9 + 0.27 * roughness_ratio
    factor: Floats = 8.0 / (2.457 * np.log(1.0 / np.minimum(smooth, 0.999))) ** 2
    return factor


def white_ratio(dean: Floats) -> tuple[Floats, Floats]:
    """Returns laminar bent over straight friction (k,) and its slope d ln ratio / d ln De, for De >= 0.

    1 / (1 - (1 - (11.6 / De)^0.45)^(1 / 0.45)) above De = 11.6, else 1; the curve leaves 1 smoothly.

    >>> white_ratio(np.array([5.0, 100.0]))[0].round(4).tolist()
    [1.0, 1.5302]
    """
    de = np.clip(dean, DEAN_ONSET, DEAN_RANGE)
    x = np.exp(0.45 * np.log(DEAN_ONSET / de))
    y = np.maximum(1.0 - x, 0.0)
    power = y ** (1.0 / 0.45)
    ratio = 1.0 / (1.0 - power)
    slope = ratio * y ** (1.0 / 0.45 - 1.0) * x
    inside = (dean > DEAN_ONSET) & (dean < DEAN_RANGE)
    return ratio, np.where(inside, slope, 0.0)


def critical_reynolds(bend_ratio: Floats) -> Floats:
    """Returns the Reynolds number (k,) at which flow in a bend turns turbulent, at least 2300.

    2e4 (d / D)^0.32 (H. Ito, Friction factors for turbulent flow in curved pipes, J. Basic Engineering 81 (1959)
    123-134); `bend_ratio` is bend radius over bore, so d / D = 1 / (2 ratio).

    >>> round(float(critical_reynolds(np.array([5.0]))[0]))
    9573
    """
    found: Floats = np.maximum(2.0e4 * (0.5 / bend_ratio) ** 0.32, 2300.0)
    return found


def bend_90(reynolds: Floats, bend_ratio: Floats) -> Factor:
    """Returns the total coefficient (k,) of a turbulent 90 degree bend, its own friction included (Ito).

    Args:
        reynolds: (k,) > 0.
        bend_ratio: (k,) centreline bend radius over bore; held at 0.7 below that.

    >>> round(float(bend_90(np.array([1e5]), np.array([2.0])).value[0]), 3)
    0.204
    """
    ratio = np.maximum(bend_ratio, TIGHTEST_BEND_BORES)
    tight = 4.42 * ratio**-1.96
    alpha = np.maximum(0.95 + tight, 1.0)
    value = 0.388 * alpha * ratio**0.84 * np.maximum(reynolds, 1.0) ** -0.17
    alpha_slope = np.where(0.95 + tight > 1.0, -1.96 * tight / alpha, 0.0)
    slope = np.where(bend_ratio > TIGHTEST_BEND_BORES, 0.84 + alpha_slope, 0.0)
    return Factor(value, np.where(reynolds > 1.0, -0.17 * value, 0.0), value * slope, np.zeros(np.shape(value)))
