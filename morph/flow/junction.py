"""What a junction costs: the total pressure of every leg against the node, by flow shares, angles and areas.

A node is seen as a common leg into which the inflows join and from which the outflows part: the mean of
the inflows or that of the outflows, whichever is the less divided. With one inflow it is that leg, with
one outflow that leg; between, both counts are weighed, so that nothing jumps when a leg turns its flow
round. All coefficients are on the velocity head of the common leg; q is a leg's share of the flow, r the
common area over the leg's, t the angle of a leg's flow to the common one.

    parting   K = 1 + (q r)^2 - 2 q r cos(3 t / 4)    W. H. Hager, An approximate treatment of flow in branches
        and bends, Proc. IMechE 198C (1984) 63-69; straight on less (1 - q) / 2, which is
        q^2 - 3/2 q + 1/2 at equal areas (M. D. Bassett, D. E. Winterbone, R. J. Pearson, Calculation of
        steady flow pressure loss coefficients for pipe junctions, Proc. IMechE 215C (2001) 861-881)
    joining   K = C [1 + (q r)^2 - 2 sum q_j^2 r_j cos t_j]    momentum along the common leg, with C of I. E.
        Idelchik, Handbook of Hydraulic Resistance, and Crane TP-410: 1 straight on and for small legs, else
        from 1 at rest to 0.55 (here a parabola through the handbooks' 0.9 (1 - q)); straight on past a
        square leg less 0.45 of that leg's share (their 1.55 q - q^2)

The coefficients are those of turbulent flow in sharp-edged junctions: rounding takes 10 to 20 % off the
branch (R. Costa, R. Maia, M. Proenca, F. Pinho 2006), laminar flow adds to them. Everything is smooth in
the flows; slopes come from complex steps, which are exact to rounding.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.core.arrays import Bools, Floats, Ints, frozen_bools, frozen_floats, frozen_ints

SOFT_SHARE = 0.01
"""Flows below about this share of the node's turn from inflow to outflow smoothly."""

SOFT_SIDE = 1e-4
"""How sharply the common leg changes sides when a leg turns its flow round."""

COMPLEX_STEP = 1e-30
LEAST_HEADING = 1e-6
LEAST_FACTOR, FACTOR_ENDS = 0.55, 0.53
"""C falls from 1 at rest to 0.55 at a share of 0.53; 0.675 at a quarter, 0.60 at 0.35."""

STRAIGHT_FROM, SQUARE_FROM, RUN_FROM = 0.87, 0.5, 0.7
"""Cosines: legs within 30 degrees count as straight on when joining, legs beyond 60 degrees as square, and the
straight-on gain of parting fades out at 45 degrees."""

SMALL_LEG, LARGE_LEG = 0.25, 0.45
"""A leg of less than this share of the common area joins with C = 1; handbooks switch at 0.35."""


@dataclass(frozen=True, slots=True, eq=False)
class Junctions:
    """The nodes where two or more pipes meet, padded to the largest number of legs.

    Args:
        node: (j,) node of each.
        pipe: (j, k) pipe of each leg; anything where `used` is False.
        sign: (j, k) +1 where the pipe's flow enters the node at this leg (its end lies here), -1 where it leaves.
        direction: (j, k, 3) unit, from the node outwards along the leg.
        area_m2: (j, k) section of the leg at the node, > 0 also where unused.
        segment: (j, k) the segment whose area that is.
        used: (j, k) which legs exist.
    """

    node: Ints
    pipe: Ints
    sign: Floats
    direction: Floats
    area_m2: Floats
    segment: Ints
    used: Bools

    def __post_init__(self) -> None:
        node = frozen_ints("node", self.node, (None,))
        used = frozen_bools("used", self.used, (len(node), None))
        object.__setattr__(self, "node", node)
        object.__setattr__(self, "used", used)
        for name in ("pipe", "segment"):
            object.__setattr__(self, name, frozen_ints(name, getattr(self, name), used.shape))
        for name in ("sign", "area_m2"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), used.shape))
        object.__setattr__(self, "direction", frozen_floats("direction", self.direction, (*used.shape, 3)))

    def inflow(self, flow: Floats) -> Floats:
        """Returns what enters each node by each leg (j, k) at pipe flows (m,); 0 for legs that do not exist."""
        return np.where(self.used, self.sign * np.asarray(flow)[self.pipe], 0.0)


def leg_pressure(legs: Junctions, inflow: Any, area_m2: Any, density_kg_m3: float) -> Any:
    """Returns the total pressure of each leg above its node (..., j, k) in Pa: > 0 where a joining flow pays.

    Args:
        legs: angles and which legs exist.
        inflow: (..., j, k) in m3/s, positive into the node, 0 where unused; may be complex.
        area_m2: (..., j, k) of the legs; may be complex.
        density_kg_m3: of the coolant.
    """
    scale = np.sqrt((inflow * inflow).sum(axis=-1, keepdims=True) + 1e-40)
    size = np.sqrt(inflow * inflow + (SOFT_SHARE * scale) ** 2)
    into = np.where(legs.used, 0.5 * (size + inflow), 0.0)
    out = np.where(legs.used, 0.5 * (size - inflow), 0.0)
    whole = into.sum(axis=-1, keepdims=True)
    u, v = into / whole, out / whole
    join, part = 1.0 - (u * u).sum(axis=-1, keepdims=True), 1.0 - (v * v).sum(axis=-1, keepdims=True)
    side = (part * part + SOFT_SIDE) / (join * join + part * part + 2.0 * SOFT_SIDE)
    entering = into / np.where(legs.used, size, 1.0)
    paid = side * _paid(legs, u, v, entering, (u * area_m2).sum(axis=-1, keepdims=True), area_m2, -u, whole)
    paid = paid + (1.0 - side) * _paid(
        legs, u, v, entering, (v * area_m2).sum(axis=-1, keepdims=True), area_m2, v, whole
    )
    return np.where(legs.used, 0.5 * density_kg_m3 * paid, 0.0)


def _paid(
    legs: Junctions, u: Any, v: Any, entering: Any, common_m2: Any, area_m2: Any, heading_share: Any, whole: Any
) -> Any:
    """Returns twice the pressure over density (j, k) of the legs against a common leg.

    Args:
        legs: the junctions.
        u: (j, k) shares of the inflow.
        v: (j, k) shares of the outflow.
        entering: (j, k) 1 for an inflow, 0 for an outflow.
        common_m2: (j, 1) area of the common leg.
        area_m2: (j, k) of the legs.
        heading_share: (j, k) how much each leg's direction counts in the heading of the common flow.
        whole: (j, 1) flow through the node.
    """
    heading = (heading_share[..., None] * legs.direction).sum(axis=-2)
    length = np.sqrt((heading * heading).sum(axis=-1, keepdims=True) + LEAST_HEADING)
    cosine = np.einsum("jkd,...jd->...jk", legs.direction, heading / length)
    ratio = common_m2 / area_m2
    coefficient = entering * _joining(u, ratio, -cosine, legs.used) - (1.0 - entering) * _parting(v, ratio, cosine)
    return coefficient * (whole / common_m2) ** 2


def _parting(share: Any, ratio: Any, cosine: Any) -> Any:
    """Returns the coefficients (j, k) of outflows with shares, area ratios and cosines to the common flow (j, k)."""
    held = _clip(cosine, -0.999, 0.999999)
    speed = share * ratio
    straight = _step((cosine - RUN_FROM) / (1.0 - RUN_FROM))
    return 1.0 + speed * speed - 2.0 * speed * np.cos(0.75 * np.arccos(held)) - 0.5 * (1.0 - share) * straight


def _joining(share: Any, ratio: Any, cosine: Any, used: Bools) -> Any:
    """Returns the coefficients (j, k) of inflows with shares, area ratios and cosines to the common flow (j, k)."""
    momentum = np.where(used, share * share * ratio * cosine, 0.0).sum(axis=-1, keepdims=True)
    turned = _step((1.0 - cosine) / (1.0 - STRAIGHT_FROM))
    large = _step((1.0 / ratio - SMALL_LEG) / (LARGE_LEG - SMALL_LEG))
    short = _clip(1.0 - share / FACTOR_ENDS, 0.0, 2.0)
    factor = 1.0 - (1.0 - LEAST_FACTOR) * (1.0 - short * short) * turned * large
    square = _step((SQUARE_FROM - cosine) / SQUARE_FROM)
    past = np.where(used, share * square, 0.0).sum(axis=-1, keepdims=True)
    gain = 2.0 * (1.0 - LEAST_FACTOR) * 0.5 * past * (1.0 - turned)
    return factor * (1.0 + (share * ratio) ** 2 - 2.0 * momentum) - gain


def _clip(value: Any, low: float, high: float) -> Any:
    """Returns values held between limits, by their real part."""
    if not np.iscomplexobj(value):
        return np.minimum(np.maximum(value, low), high)
    real = value.real
    return np.where(real < low, low, np.where(real > high, high, value))


def _step(value: Any) -> Any:
    """Returns a smooth step from 0 at 0 to 1 at 1."""
    x = _clip(value, 0.0, 1.0)
    return x * x * (3.0 - 2.0 * x)


@dataclass(frozen=True, slots=True, eq=False)
class JunctionLaw:
    """The cost of junctions as a part of the drop of pipes.

    Args:
        legs: the junctions. density_kg_m3: of the coolant. n_pipes: number of pipes.
    """

    legs: Junctions
    density_kg_m3: float
    n_pipes: int

    def drop(self, flow: Floats) -> Floats:
        """Returns what junctions add to the drop of each pipe (m,) from start to end, in Pa."""
        paid = leg_pressure(self.legs, self.legs.inflow(flow), self.legs.area_m2, self.density_kg_m3)
        return self._to_pipes(paid)

    def ends(self, flow: Floats) -> Floats:
        """Returns the total pressure (j, k) of each leg above its node."""
        return np.asarray(
            leg_pressure(self.legs, self.legs.inflow(flow), self.legs.area_m2, self.density_kg_m3), dtype=np.float64
        )

    def _to_pipes(self, paid: Floats) -> Floats:
        weight = np.where(self.legs.used, self.legs.sign * paid, 0.0)
        return np.asarray(np.bincount(self.legs.pipe.ravel(), weight.ravel(), self.n_pipes), dtype=np.float64)

    def pattern(self) -> tuple[Ints, Ints]:
        """Returns rows and columns (z,) of `slopes`, for all pairs of legs of a node."""
        k = self.legs.used.shape[1]
        row = np.repeat(self.legs.pipe[:, :, None], k, axis=2)
        column = np.repeat(self.legs.pipe[:, None, :], k, axis=1)
        both = self.legs.used[:, :, None] & self.legs.used[:, None, :]
        return row[both], column[both]

    def slopes(self, flow: Floats) -> Floats:
        """Returns the slopes (z,) of each pipe's junction drop in the flows that meet it, as in `pattern`."""
        legs, inflow = self.legs, self.legs.inflow(flow)
        one_by_one = 1j * COMPLEX_STEP * np.eye(legs.used.shape[1])[:, None, :]
        paid = leg_pressure(legs, inflow + one_by_one, legs.area_m2, self.density_kg_m3)
        slope = np.moveaxis(paid.imag, 0, -1) / COMPLEX_STEP * legs.sign[:, :, None] * legs.sign[:, None, :]
        return np.asarray(slope[legs.used[:, :, None] & legs.used[:, None, :]], dtype=np.float64)

    def by_log_area(self, flow: Floats) -> tuple[Ints, Ints, Floats]:
        """Returns pipe rows, segment columns and slopes (z,) of the junction drop in ln of the areas of the legs."""
        legs, inflow = self.legs, self.legs.inflow(flow)
        k = legs.used.shape[1]
        area = legs.area_m2 * (1.0 + 1j * COMPLEX_STEP * np.eye(k)[:, None, :])
        paid = leg_pressure(legs, inflow, area, self.density_kg_m3)
        slope = np.moveaxis(paid.imag, 0, -1) / COMPLEX_STEP * legs.sign[:, :, None]
        both = legs.used[:, :, None] & legs.used[:, None, :]
        row = np.repeat(legs.pipe[:, :, None], k, axis=2)
        column = np.repeat(legs.segment[:, None, :], k, axis=1)
        return row[both], column[both], slope[both]
