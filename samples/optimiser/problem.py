"""The design problem: how hot the loaded metal gets for a given coolant layout, and its gradient.

The objective is the power mean of the temperature, weighted with the heat load, while the ports are
held at given pressures: more flow cools better, and only channels let coolant flow. Two limits: the
coolant share of the whole sheet, and the coolant share in a disc about any cell.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from optimiser.flow import StokesFlow, measure_drag
from optimiser.grid import Floats, Grid, Ints, Opening
from optimiser.heat import HeatTransport
from optimiser.length_scale import make_filter, measure_local_share, project


@dataclass(frozen=True)
class Scenario:
    """One design problem, lengths in cells where said so and in sheet heights elsewhere.

    Args:
        name: of the sample folder.
        grid: the cells.
        openings: feeds and returns on the sheet's edge.
        heat: heat load at x, y (rows, columns).
        start: starting density at x, y.
        solid: cells that must stay metal, or None.
        rim: width in cells of the metal kept along the edges the sheet has, openings excepted.
        capacity: heat carried by the coolant, against a conductivity of the metal of 1.
        filter_radius: of the cone filter, in cells.
        disc_radius: of the disc for the local coolant share, in cells.
        coolant_share, local_share: the two limits, 0..1.
        steps: length of the descent.
        top_down: whether the image is written with its first row at the top.
    """

    name: str
    grid: Grid
    openings: tuple[Opening, ...]
    heat: Callable[[Floats, Floats], Floats]
    start: Callable[[Floats, Floats], Floats]
    solid: Callable[[Floats, Floats], Any] | None
    rim: int
    capacity: float
    filter_radius: float
    disc_radius: float
    coolant_share: float
    local_share: float
    steps: int
    top_down: bool
    greatest_drag: float = 1e6
    coolant_conductivity: float = 0.1
    power: float = 4.0
    local_power: float = 16.0


@dataclass(frozen=True)
class Evaluation:
    """The objective and the two limits (feasible where <= 0) with their gradients on the density."""

    objective: float
    slope: Floats
    limits: Floats
    limit_slopes: Floats
    temperature: Floats
    velocity: Floats


class DesignProblem:
    """Evaluates densities of one scenario."""

    def __init__(self, scenario: Scenario) -> None:
        self.scenario = scenario
        grid = scenario.grid
        x, y = grid.centres()
        load = scenario.heat(x, y).ravel()
        self.weight = load / load.sum()
        self.flow = StokesFlow(grid, scenario.openings)
        self.heat = HeatTransport(grid, load / load.mean() * grid.step**2, scenario.capacity)
        self.cone = make_filter(grid, scenario.filter_radius)
        self.disc = make_filter(grid, scenario.disc_radius, flat=True)
        self.metal, self.coolant = _fixed_cells(scenario)

    def first_design(self) -> Floats:
        """Returns the starting design variables (n_cells,)."""
        return np.clip(self.scenario.start(*self.scenario.grid.centres()), 0.0, 1.0).ravel()

    def density(self, design: Floats, sharpness: float) -> tuple[Floats, Floats]:
        """Returns the density (n_cells,) a design stands for, and its derivative by the filtered design."""
        fixed = design.copy()
        fixed[self.metal], fixed[self.coolant] = 0.0, 1.0
        return project(self.cone @ fixed, sharpness)

    def by_design(self, by_density: Floats, slope: Floats) -> Floats:
        """Returns the gradient on the design (n_cells,) for one on the density, `slope` from `density`."""
        gradient = np.asarray(self.cone.T @ (by_density * slope))
        gradient[self.metal] = gradient[self.coolant] = 0.0
        return gradient

    def evaluate(self, density: Floats, convexity: float) -> Evaluation:
        """Returns objective, limits and gradients for a density (n_cells,)."""
        scenario = self.scenario
        drag, drag_slope = measure_drag(density, scenario.greatest_drag, convexity)
        flow = self.flow.solve(drag)
        gap = 1.0 - scenario.coolant_conductivity
        conductivity = scenario.coolant_conductivity + gap * (1.0 - density) ** 3
        heat = self.heat.solve(conductivity, flow.velocity)
        mean, by_temperature = _power_mean(heat.temperature, self.weight, scenario.power)
        adjoint = heat.adjoint(by_temperature)
        by_conductivity, by_velocity = self.heat.gradients(heat.temperature, adjoint, flow.velocity)
        by_drag = self.flow.drag_gradient(flow.velocity, flow.adjoint(by_velocity))
        slope = by_drag * drag_slope - by_conductivity * 3.0 * gap * (1.0 - density) ** 2
        limits, limit_slopes = self._limits(density)
        return Evaluation(mean, slope, limits, limit_slopes, heat.temperature, flow.velocity)

    def _limits(self, density: Floats) -> tuple[Floats, Floats]:
        scenario = self.scenario
        local, by_local = measure_local_share(density, self.disc, scenario.local_power)
        limits = np.array([density.mean() / scenario.coolant_share, local / scenario.local_share]) - 1.0
        whole = np.full(density.size, 1.0 / density.size)
        return limits, np.vstack([whole / scenario.coolant_share, by_local / scenario.local_share])


def _power_mean(value: Floats, weight: Floats, power: float) -> tuple[float, Floats]:
    mean = float((weight @ np.abs(value) ** power) ** (1.0 / power))
    return mean, mean ** (1.0 - power) * weight * np.abs(value) ** (power - 1.0) * np.sign(value)


def _fixed_cells(scenario: Scenario) -> tuple[Ints, Ints]:
    """Returns the numbers of the cells that stay metal, and of those that stay coolant."""
    grid, rim = scenario.grid, scenario.rim
    edge = np.ones((grid.rows, grid.columns), dtype=bool)
    edge[rim : grid.rows - rim, slice(None) if grid.joined else slice(rim, grid.columns - rim)] = False
    if scenario.solid is not None:
        edge |= scenario.solid(*grid.centres())
    coolant = np.concatenate([opening.cells(grid, rim + 2) for opening in scenario.openings])
    edge.ravel()[coolant] = False
    return np.flatnonzero(edge.ravel()), np.unique(coolant)
