"""The design problems behind the sample images: a workshop that moulds garden lanterns and kitchenware.

Heat loads are shares of a mean load; hot spots stand for thick ribs and for places far from the gate.
"""

from __future__ import annotations

from typing import Any

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


MUG_TURN = 176 / 56
"""Width of the mug's sheet in heights: one turn, so that whatever is drawn on it must repeat after it."""


def _mug_start(x: Floats, y: Floats) -> Floats:
    """The waffle, with a whole number of squares round the mug."""
    return 0.3 + 0.2 * np.cos(2.0 * np.pi * 20 * x / MUG_TURN) * np.cos(2.0 * np.pi * y / 0.16)


def _mug_heat(x: Floats, y: Floats) -> Floats:
    """Both roots of the mug's handle, a fifth of a turn left of the middle, are hot; so is the thick rim at the top."""
    upper, lower = _spot(x, y, (0.3 * MUG_TURN, 0.72), 0.2), _spot(x, y, (0.3 * MUG_TURN, 0.28), 0.2)
    return 0.6 + 0.8 * (upper + lower) + 0.3 * np.exp(-(((y - 0.9) / 0.2) ** 2))


TRAY_WIDTH = 120 / 72
"""Width of the tray's sheet in heights."""


def _tray_heat(x: Floats, y: Floats) -> Floats:
    """The tray's gate lies on its left half, a thick carrying rib on its right one."""
    return 0.5 + _spot(x, y, (0.35, 0.5), 0.25) + 0.5 * np.exp(-(((x - 1.35) / 0.12) ** 2))


def _tray_divide(x: Floats, _y: Floats) -> Any:
    """A strip of metal down the middle, 8 mm of 120, keeps the two circuits apart."""
    return np.abs(x - 0.5 * TRAY_WIDTH) < 4.0 / 72


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
    "mug-jacket": Scenario(
        name="mug-jacket",
        grid=Grid(56, 176, joined=True),
        openings=(Opening("bottom", 34 / 176, 39 / 176, 1.0), Opening("bottom", 122 / 176, 127 / 176, 0.0)),
        heat=_mug_heat,
        start=_mug_start,
        solid=None,
        rim=4,
        capacity=2e6,
        filter_radius=3.2,
        disc_radius=8.0,
        coolant_share=0.29,
        local_share=0.42,
        steps=150,
        top_down=True,
        power=6.0,
    ),
    "tray-insert": Scenario(
        name="tray-insert",
        grid=Grid(72, 120),
        openings=(
            Opening("left", 12 / 72, 18 / 72, 1.0),
            Opening("left", 54 / 72, 60 / 72, 0.0),
            Opening("right", 54 / 72, 60 / 72, 1.0),
            Opening("right", 12 / 72, 18 / 72, 0.0),
        ),
        heat=_tray_heat,
        start=_sleeve_start,
        solid=_tray_divide,
        rim=4,
        capacity=2e6,
        filter_radius=3.8,
        disc_radius=9.5,
        coolant_share=0.32,
        local_share=0.44,
        steps=200,
        top_down=False,
        power=6.0,
    ),
}
