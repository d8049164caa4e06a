"""The descent: moving asymptotes on the filtered, projected density, sharpened in stages.

The drag law and the projection start soft, so that the layout finds its topology, and end steep,
so that the density ends nearly black and white.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from optimiser.grid import Floats
from optimiser.moving_asymptotes import MovingAsymptotes
from optimiser.problem import DesignProblem

# (share of the descent, convexity of the drag law, sharpness of the projection)
STAGES = ((0.25, 0.02, 1.0), (0.50, 0.05, 2.0), (0.75, 0.10, 4.0), (1.00, 0.10, 8.0))
MOVE_LIMIT = 0.15


@dataclass(frozen=True)
class Descent:
    """What a descent ends with.

    Args:
        density: (rows, columns), row 0 at the bottom.
        first, last: objective of the first and the last design, both under the laws of the last stage.
        course: objective at each step, under the laws of its own stage.
        limits: values of the two limits at the end, feasible where <= 0.
    """

    density: Floats
    first: float
    last: float
    course: tuple[float, ...]
    limits: tuple[float, ...]


def descend(problem: DesignProblem, tell: Callable[[str], None] = lambda _line: None) -> Descent:
    """Returns the layout found in `scenario.steps` steps; `tell` gets a line per step."""
    scenario, grid = problem.scenario, problem.scenario.grid
    design = problem.first_design()
    asymptotes = MovingAsymptotes(MOVE_LIMIT)
    course: list[float] = []
    for step in range(scenario.steps):
        convexity, sharpness = _laws(step / scenario.steps)
        density, slope = problem.density(design, sharpness)
        found = problem.evaluate(density, convexity)
        course.append(found.objective)
        tell(f"step {step}: objective {found.objective:.6g}, limits {np.round(found.limits, 3)}")
        by_design = problem.by_design(found.slope, slope)
        limit_slopes = np.vstack([problem.by_design(row, slope) for row in found.limit_slopes])
        scale = np.abs(by_design).sum()
        design = asymptotes.step(design, by_design / scale, found.limits, limit_slopes)
    convexity, sharpness = STAGES[-1][1:]
    first = problem.evaluate(problem.density(problem.first_design(), sharpness)[0], convexity)
    density = problem.density(design, sharpness)[0]
    last = problem.evaluate(density, convexity)
    picture = density.reshape(grid.rows, grid.columns)
    return Descent(picture, first.objective, last.objective, tuple(course), tuple(last.limits))


def _laws(done: float) -> tuple[float, float]:
    return next((convexity, sharpness) for share, convexity, sharpness in STAGES if done < share)
