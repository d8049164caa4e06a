"""The design problems behind the sample images: a workshop that moulds garden lanterns and kitchenware.

Heat loads are shares of a mean load; hot spots stand for thick ribs and for places far from the gate.
"""

from __future__ import annotations

import numpy as np
from optimiser.grid import Floats, Grid, Opening
from optimiser.problem import Scenario


def _spot(x: Floats, y: Floats, at: tuple[float, float], reach: float) -> Floats:
    return np.exp(-((x - at[0]) ** 2 + (y - at[1]) ** 2) / reach**2)


def _cup_heat(x: Floats, y: Floats) -> Floats:
    """The cup's foot gives a hot spot in the middle, its handle one at the upper left."""
    return 0.4 + _spot(x, y, (0.75, 0.4), 0.25) + 0.8 * _spot(x, y, (0.4, 0.75), 0.25)


def _even_start(x: Floats, _y: Floats) -> Floats:
    return np.full(x.shape, 0.3)


def _sleeve_start(x: Floats, y: Floats) -> Floats:
    """A waffle of grey, so that the first flow finds many ways at once."""
    return 0.3 + 0.2 * np.cos(2.0 * np.pi * x / 0.16) * np.cos(2.0 * np.pi * y / 0.16)


def _sleeve_heat(_x: Floats, y: Floats) -> Floats:
    """The lantern's thick upper rim takes half as much again as the rest."""
    return 1.0 + 0.5 * np.exp(-(((y - 0.9) / 0.2) ** 2))


def _funnel_heat(x: Floats, y: Floats) -> Floats:
    """The funnel's thick upper rim and the root of its hanging lug, at the right, take more heat than the wall."""
    return 0.5 + 0.5 * np.exp(-(((y - 0.85) / 0.2) ** 2)) + 0.6 * _spot(x, y, (1.15, 0.5), 0.22)


SCENARIOS = {
    "tealight-cup": Scenario(
        name="tealight-cup",
        grid=Grid(50, 75),
        openings=(Opening("bottom", 0.20, 0.28, 1.0), Opening("bottom", 0.72, 0.80, 0.0)),
        heat=_cup_heat,
        start=_even_start,
        solid=None,
        rim=4,
        capacity=2e6,
        filter_radius=4.0,
        disc_radius=12.0,
        coolant_share=0.28,
        local_share=0.50,
        steps=70,
        top_down=True,
    ),
    "lantern-sleeve": Scenario(
        name="lantern-sleeve",
        grid=Grid(125, 200),
        openings=(Opening("bottom", 0.05, 0.08, 1.0), Opening("bottom", 0.92, 0.95, 0.0)),
        heat=_sleeve_heat,
        start=_sleeve_start,
        solid=None,
        rim=4,
        capacity=1e6,
        filter_radius=3.0,
        disc_radius=7.5,
        coolant_share=0.32,
        local_share=0.42,
        steps=120,
        top_down=False,
        power=6.0,
    ),
    "funnel-core": Scenario(
        name="funnel-core",
        grid=Grid(56, 84),
        openings=(Opening("bottom", 0.14, 0.21, 1.0), Opening("bottom", 0.79, 0.86, 0.0)),
        heat=_funnel_heat,
        start=_sleeve_start,
        solid=None,
        rim=4,
        capacity=2e6,
        filter_radius=3.8,
        disc_radius=9.0,
        coolant_share=0.29,
        local_share=0.46,
        steps=100,
        top_down=True,
    ),
}
