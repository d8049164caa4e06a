"""What a balance aims at, as one number and its slopes: how unequal the branches are, plus a little pressure.

The number is the length-weighted variance of ln y over the channels with through-flow, y being a branch's
velocity, its flow, or its flow over the heat it collects; and WEIGHT_OF_DROP times ln of the pressure drop, so
that of equal solutions the one that costs least is taken. Slopes are by the adjoint of the flow solution.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from morph.core.arrays import Bools, Floats
from morph.flow.bore_range import BoreRange, Sized
from morph.flow.network import FlowNetwork
from morph.flow.solve_network import Liquid, NetworkSolver, NetworkState
from morph.settings.job import Balance

WEIGHT_OF_DROP = 0.002

LEAST_Y = 0.02
"""A branch that stands still counts as this share of the others' root mean square, so that ln stays finite."""


@dataclass(slots=True, eq=False)
class Aim:
    """The number to lower.

    Every solution starts anew: junctions may allow two ways of flowing, and the one that counts is the one that the
    flow stage finds, not the one that a search carried along.

    Args:
        network: with the present bores.
        bores: their range.
        kind: what shall be equal.
        heat: (m,) heat each branch collects, any unit; only its ratios count, and only for by-heat.
        liquid: the coolant. flow_m3_s: (k,) given flow of each supply.
        reversible: both flow directions count alike.
        scatter: changes of ln bore (m,) of the branches; the number is the mean over them, so that bores which share
            well only when printed exactly do not win.
    """

    network: FlowNetwork
    bores: BoreRange
    kind: Balance
    heat: Floats
    liquid: Liquid
    flow_m3_s: Floats
    reversible: bool = False
    scatter: tuple[Floats, ...] = ()
    chosen: Bools = field(init=False)
    weight: Floats = field(init=False)
    _solvers: list[NetworkSolver] = field(init=False)
    _first_drop: list[float] = field(init=False)

    def __post_init__(self) -> None:
        part = self.network.segments
        self.chosen = self.network.is_channel & self.network.through & (self.heat > 0.0)
        length = np.where(self.chosen, part.summed(part.length_m), 0.0)
        self.weight = length / max(float(length.sum()), 1e-300)
        ways = (False, True) if self.reversible else (False,)
        self._solvers = [NetworkSolver(self.network, way) for way in ways]
        self._first_drop = []

    def value(self, log_factor: Floats, beyond: bool = False) -> tuple[float, Floats]:
        """Returns the number and its slopes (m,) in ln of the factors of the branches.

        Args:
            log_factor: (m,) where.
            beyond: slopes as if no sample were held by its range.
        """
        sized = self.bores.at(log_factor)
        if beyond:
            sized = sized._replace(share=np.ones(len(sized.share)))
        cases = self.scatter or (np.zeros(len(log_factor)),)
        total, slopes = 0.0, np.zeros(len(log_factor))
        for off in cases:
            network = self.network.scaled_along(sized.ratio * np.exp(off)[self.network.segments.pipe])
            for way, solver in enumerate(self._solvers):
                now = solver.with_network(network)
                part, slope = self._of_state(now, now.solve_flows(self.liquid, self.flow_m3_s), sized, way)
                total += part / (len(cases) * len(self._solvers))
                slopes += slope / (len(cases) * len(self._solvers))
        return total, np.where(self.bores.free, slopes, 0.0)

    def equal_of(self, network: FlowNetwork, state: NetworkState) -> tuple[Floats, Floats]:
        """Returns what shall be equal (m,), without sign, and its slope (m,) in each branch's own flow."""
        part = network.segments
        per_flow = np.ones(len(self.heat))
        if self.kind is Balance.BY_HEAT:  # a branch that collects nothing is not chosen
            per_flow = np.where(self.heat > 0.0, 1.0 / np.where(self.heat > 0.0, self.heat, 1.0), 0.0)
        if self.kind is Balance.EQUAL_VELOCITY:
            per_flow = part.summed(part.length_m / part.area_m2) / part.summed(part.length_m)
        return np.abs(state.flow_m3_s) * per_flow, per_flow

    def _of_state(self, solver: NetworkSolver, state: NetworkState, sized: Sized, way: int) -> tuple[float, Floats]:
        """Returns the number of one flow direction and its slopes (m,)."""
        network = solver.network
        y, per_flow = self.equal_of(network, state)
        weight = self.weight
        mean_square = float((weight * y**2).sum())
        z = np.sqrt(y**2 + LEAST_Y**2 * mean_square)
        part = np.where(self.chosen, np.log(np.maximum(z, 1e-300)), 0.0)
        left = np.where(self.chosen, part - float((weight * part).sum()), 0.0)
        by_z = 2.0 * weight * left / np.maximum(z, 1e-300)
        by_y = by_z * y / np.maximum(z, 1e-300)
        by_y += weight * y * LEAST_Y**2 * float((by_z / np.maximum(z, 1e-300)).sum())
        power = float(state.supply_flow_m3_s @ state.supply_drop_pa)
        if len(self._first_drop) <= way:
            self._first_drop.append(power)
        by_flow = by_y * per_flow * np.sign(state.flow_m3_s)
        by_drop = WEIGHT_OF_DROP * state.supply_flow_m3_s / power
        slopes = solver.slopes_by_log_bore(self.liquid, state, by_flow, by_drop, share=sized.share)
        if self.kind is Balance.EQUAL_VELOCITY:
            seg = network.segments
            own = seg.summed(sized.share * seg.length_m / seg.area_m2) / seg.summed(seg.length_m)
            slopes = slopes - 2.0 * by_y * np.abs(state.flow_m3_s) * own
        return float((weight * left**2).sum()) + WEIGHT_OF_DROP * float(np.log(power / self._first_drop[way])), slopes
