"""How the pressure drops along pipes whose bore, roughness and bend change on the way.

A pipe is a row of short segments; the drop of total pressure is the sum over them of

    friction   f(Re, e/D, bend) (length / D) rho V^2 / 2
    bend       what a turbulent bend costs beyond straight friction, by the angle it turns
    minor      K rho V^2 / 2 at one place: entry, exit, steps of the bore; by the way of flow

Total pressure is kept where a bore changes gently, so a taper costs only its friction. All slopes are
closed forms; see friction.py for the laws. The laminar law is exact at rest: the slope stays finite.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints
from morph.flow.friction import (
    LEAST_REYNOLDS,
    bend_90,
    churchill,
    critical_reynolds,
    turbulent_only,
    white_ratio,
)

STRAIGHT_RATIO = 1e6
"""A bend radius over bore that is straight."""

TYPICAL_M_S = 1.0
"""Velocity of the first round of a solve."""

ONSET_POWER = 8.0
"""How sharply the turbulent cost of a bend sets in at the critical Reynolds number."""


@dataclass(frozen=True, slots=True, eq=False)
class Segments:
    """Short pieces of pipes, in SI units, pipe after pipe from its start.

    Args:
        first: (m + 1,) segments first[e] to first[e + 1] belong to pipe e; each pipe has one or more.
        length_m, area_m2, diameter_m: (s,) length, area and hydraulic diameter.
        friction_re: (s,) laminar Darcy factor times Reynolds number of the section.
        roughness_m: (s,) sand-grain roughness.
        curvature_1_m: (s,) of the centreline.
        minor_forward, minor_backward: (s,) coefficients on the segment's own velocity head, flow from start to
            end and back.
    """

    first: Ints
    length_m: Floats
    area_m2: Floats
    diameter_m: Floats
    friction_re: Floats
    roughness_m: Floats
    curvature_1_m: Floats
    minor_forward: Floats
    minor_backward: Floats

    def __post_init__(self) -> None:
        first = frozen_ints("first", self.first, (None,))
        object.__setattr__(self, "first", first)
        for name in self.__slots__:
            if name != "first":
                object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (int(first[-1]),)))
        if first[0] != 0 or (np.diff(first) < 1).any():
            raise ValueError("first: expected every pipe to have a segment")
        for name in ("area_m2", "diameter_m", "friction_re"):
            if getattr(self, name).min(initial=1.0) <= 0.0:
                raise ValueError(f"{name}: expected positive numbers")

    @property
    def n_pipes(self) -> int:
        """Number of pipes."""
        return len(self.first) - 1

    @property
    def pipe(self) -> Ints:
        """The pipe (s,) each segment belongs to."""
        return np.repeat(np.arange(self.n_pipes, dtype=np.int64), np.diff(self.first))

    def summed(self, value: Floats) -> Floats:
        """Returns the sum (m,) over each pipe of values (s,)."""
        return np.asarray(np.add.reduceat(value, self.first[:-1]), dtype=np.float64)


def straight_pipes(
    length_m: Floats, bore_m: Floats, roughness_m: Floats | float = 0.0, minor: Floats | float = 0.0
) -> Segments:
    """Returns straight round pipes of one bore each (m,), with a sum of minor coefficients."""
    length = np.asarray(length_m, dtype=np.float64)
    bore = np.broadcast_to(np.asarray(bore_m, dtype=np.float64), length.shape)
    one = np.ones(len(length))
    return Segments(
        first=np.arange(len(length) + 1),
        length_m=length,
        area_m2=0.25 * np.pi * bore**2,
        diameter_m=bore,
        friction_re=64.0 * one,
        roughness_m=roughness_m * one,
        curvature_1_m=0.0 * one,
        minor_forward=minor * one,
        minor_backward=minor * one,
    )


class SegmentDrop(NamedTuple):
    """What a flow costs in each segment, all (s,) in Pa and >= 0, and how it changes.

    `by_log_flow`, `by_log_area`, `by_log_diameter` are slopes of the whole cost, each with the other two held.
    """

    friction: Floats
    bend: Floats
    minor: Floats
    by_log_flow: Floats
    by_log_area: Floats
    by_log_diameter: Floats


@dataclass(frozen=True, slots=True, eq=False)
class PipeLaw:
    """The law of loss of pipes made of segments.

    Args:
        segments: the pipes.
        density_kg_m3, viscosity_pa_s: (s,) of the coolant in each segment, or one number for all.
    """

    segments: Segments
    density_kg_m3: Floats | float
    viscosity_pa_s: Floats | float

    def typical_flow(self) -> Floats:
        """Returns the flows (m,) in m3/s at 1 m/s in the narrowest segment of each pipe."""
        return np.asarray(np.minimum.reduceat(self.segments.area_m2, self.segments.first[:-1]) * TYPICAL_M_S)

    def drop(self, flow: Floats) -> tuple[Floats, Floats]:
        """Returns the drop (m,) in Pa from start to end at flows (m,) in m3/s, and its slope (m,) in Pa s/m3."""
        size, cost = self.cost(flow)
        total = self.segments.summed(cost.friction + cost.bend + cost.minor) / size
        slope = self.segments.summed(cost.by_log_flow) / size
        return total * flow, np.where(np.abs(flow) < size, total, slope)

    def cost(self, flow: Floats) -> tuple[Floats, SegmentDrop]:
        """Returns the sizes (m,) of flows (m,), held above rest, and what each segment costs at them."""
        part = self.segments
        least = part.area_m2 / part.diameter_m * LEAST_REYNOLDS * self.viscosity_pa_s / self.density_kg_m3
        size = np.maximum(np.abs(flow), np.maximum.reduceat(least, part.first[:-1]))
        forward = np.repeat(np.asarray(flow) >= 0.0, np.diff(part.first))
        minor = np.where(forward, part.minor_forward, part.minor_backward)
        return size, self.segment_drop(np.repeat(size, np.diff(part.first)), minor)

    def reynolds(self, flow: Floats) -> Floats:
        """Returns the Reynolds number (s,) of each segment at flows (m,)."""
        part = self.segments
        velocity = np.repeat(np.abs(flow), np.diff(part.first)) / part.area_m2
        return np.asarray(self.density_kg_m3 * velocity * part.diameter_m / self.viscosity_pa_s)

    def segment_drop(self, size: Floats, minor: Floats) -> SegmentDrop:
        """Returns what flows of size (s,) > 0 cost with minor coefficients (s,)."""
        part = self.segments
        head = 0.5 * self.density_kg_m3 * (size / part.area_m2) ** 2
        re = self.density_kg_m3 * size / part.area_m2 * part.diameter_m / self.viscosity_pa_s
        ratio, ratio_slope = white_ratio(re * np.sqrt(0.5 * part.diameter_m * part.curvature_1_m))
        factor = churchill(re, part.roughness_m / part.diameter_m, part.friction_re * ratio, ratio_slope)
        gauge = part.length_m / part.diameter_m * head
        friction = factor.value * gauge
        bend, bend_re, bend_ratio = _bend_excess(re, part)
        bend, bend_re, bend_ratio = bend * head, bend_re * head, bend_ratio * head
        at_place = minor * head
        squared = 2.0 * (friction + bend + at_place)
        by_re = factor.by_log_re * gauge + bend_re
        by_diameter = (0.5 * ratio_slope * factor.by_log_laminar - factor.by_log_ratio - factor.value) * gauge
        return SegmentDrop(
            friction, bend, at_place, squared + by_re, -squared - by_re, by_re + by_diameter - bend_ratio
        )


def _bend_excess(re: Floats, part: Segments) -> tuple[Floats, Floats, Floats]:
    """Returns what bends cost beyond straight smooth friction, in velocity heads, and its slopes in ln Re and ln R/d.

    By the angle turned: 2 / pi of the 90 degree coefficient less the friction of its length, never below 0 (with a
    rounded corner), and only as far as the flow is turbulent.
    """
    turn = part.curvature_1_m * part.length_m
    bent = np.flatnonzero(turn > 0.0)
    value, by_re, by_ratio = np.zeros(len(re)), np.zeros(len(re)), np.zeros(len(re))
    if not len(bent):
        return value, by_re, by_ratio
    re, per_bend = np.maximum(re[bent], 1.0), 2.0 / np.pi * turn[bent]
    ratio = np.minimum(1.0 / (part.curvature_1_m[bent] * part.diameter_m[bent]), STRAIGHT_RATIO)
    whole = bend_90(re, ratio)
    held = np.maximum(re, 100.0)
    smooth = turbulent_only(held, np.zeros(len(re)))
    own = 0.5 * np.pi * ratio * smooth
    own_re = np.where(re > 100.0, -1.8 * own / (0.9 * np.log(held / 7.0)), 0.0)
    over = whole.value - own
    root = np.sqrt(over * over + 1e-6)
    excess, slope = 0.5 * (over + root), 0.5 * (1.0 + over / root)
    critical = critical_reynolds(ratio)
    onset = 1.0 / (1.0 + (critical / re) ** ONSET_POWER)
    rise = ONSET_POWER * onset * (1.0 - onset)
    value[bent] = per_bend * excess * onset
    by_re[bent] = per_bend * (slope * (whole.by_log_re - own_re) * onset + excess * rise)
    earlier = np.where(critical > 2300.0, 0.32 * rise, 0.0)
    by_ratio[bent] = per_bend * (slope * (whole.by_log_ratio - own) * onset + excess * earlier)
    return value, by_re, by_ratio
