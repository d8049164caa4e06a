"""The method of moving asymptotes: a convex, separable stand-in for the problem, solved by its dual.

After K. Svanberg, "The method of moving asymptotes: a new method for structural optimization",
Int. J. Numer. Meth. Eng. 24 (1987). Every function is replaced about the present design by a sum of
p / (U - x) + q / (x - L); the asymptotes L and U close in where a variable oscillates and open where
it keeps its way. The dual in the few constraint multipliers is maximised by L-BFGS-B.
"""

from __future__ import annotations

import numpy as np

from optimiser.grid import Floats

FIRST_SPAN, NARROWER, WIDER = 0.4, 0.7, 1.2
LEAST_SPAN, LARGEST_SPAN = 0.01, 10.0
LARGEST_MULTIPLIER = 1e3


class MovingAsymptotes:
    """Steps a design of variables in 0..1; keeps the last two designs and the asymptotes.

    Args:
        move_limit: largest change of one variable in one step.
    """

    def __init__(self, move_limit: float) -> None:
        self.move_limit = move_limit
        self.history: list[Floats] = []
        self.lower = self.upper = np.zeros(0)

    def step(self, design: Floats, slope: Floats, limits: Floats, limit_slopes: Floats) -> Floats:
        """Returns the next design.

        Args:
            design: (n,) present variables.
            slope: (n,) gradient of the objective, scaled to about 1.
            limits: (m,) constraint values, feasible where <= 0.
            limit_slopes: (m, n) their gradients.
        """
        self._place_asymptotes(design)
        above, below = self.upper - design, design - self.lower
        least = np.maximum.reduce([np.zeros_like(design), design - 0.9 * below, design - self.move_limit])
        most = np.minimum.reduce([np.ones_like(design), design + 0.9 * above, design + self.move_limit])
        slopes = np.vstack([slope, limit_slopes])
        rising, falling = np.maximum(slopes, 0.0), np.maximum(-slopes, 0.0)
        p = above**2 * (1.001 * rising + 0.001 * falling + 1e-5)
        q = below**2 * (0.001 * rising + 1.001 * falling + 1e-5)
        room = -limits + (p[1:] / above + q[1:] / below).sum(axis=1)
        self.history = [design.copy(), *self.history[:1]]
        return self._solve_dual(p, q, room, least, most)

    def _place_asymptotes(self, design: Floats) -> None:
        if len(self.history) < 2:
            self.lower, self.upper = design - FIRST_SPAN, design + FIRST_SPAN
            return
        last, before = self.history
        trend = (design - last) * (last - before)
        factor = np.where(trend > 0.0, WIDER, np.where(trend < 0.0, NARROWER, 1.0))
        self.lower = design - np.clip(factor * (last - self.lower), LEAST_SPAN, LARGEST_SPAN)
        self.upper = design + np.clip(factor * (self.upper - last), LEAST_SPAN, LARGEST_SPAN)

    def _solve_dual(self, p: Floats, q: Floats, room: Floats, least: Floats, most: Floats) -> Floats:
        from scipy.optimize import minimize

        def best(multiplier: Floats) -> Floats:
            towards_upper = np.sqrt(p[0] + multiplier @ p[1:])
            towards_lower = np.sqrt(q[0] + multiplier @ q[1:])
            weighted = towards_upper * self.lower + towards_lower * self.upper
            return np.clip(weighted / (towards_upper + towards_lower), least, most)

        def dual(multiplier: Floats) -> tuple[float, Floats]:
            design = best(multiplier)
            value = p / (self.upper - design) + q / (design - self.lower)
            excess = value[1:].sum(axis=1) - room
            return -float(value[0].sum() + multiplier @ excess), -excess

        bounds = [(0.0, LARGEST_MULTIPLIER)] * len(room)
        found = minimize(dual, np.ones(len(room)), jac=True, bounds=bounds, method="L-BFGS-B", options={"maxiter": 60})
        return best(found.x)
