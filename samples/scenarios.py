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


def _lattice(x: Floats, y: Floats, pitch: float) -> Floats:
    return 0.3 + 0.12 * np.cos(2.0 * np.pi * x / pitch) * np.cos(2.0 * np.pi * y / pitch)


def _sleeve_heat(x: Floats, y: Floats) -> Floats:
    """Six ribs of the lantern's shade give six hot bands, the rim at the top one along the upper edge."""
    ribs = 0.5 + 0.5 * np.cos(2.0 * np.pi * x / 0.267)
    rim = np.exp(-(((y - 0.85) / 0.15) ** 2))
    return 0.5 + 0.5 * ribs + 0.8 * rim


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
        openings=(
            Opening("bottom", 0.06, 0.09, 1.0),
            Opening("bottom", 0.91, 0.94, 1.0),
            Opening("bottom", 0.48, 0.52, 0.0),
        ),
        heat=_sleeve_heat,
        start=lambda x, y: _lattice(x, y, 0.16),
        solid=None,
        rim=4,
        capacity=5e6,
        filter_radius=4.0,
        disc_radius=10.0,
        coolant_share=0.34,
        local_share=0.42,
        steps=80,
        top_down=False,
    ),
}
