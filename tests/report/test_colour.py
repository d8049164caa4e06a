"""The colours against published definitions: Oklab, sRGB, WCAG contrast, and a model of red-green blindness."""

import numpy as np
import pytest

from morph.core.verdict import Outcome
from morph.report.colour import OUTCOME_COLOUR, OUTCOME_SIGN, map_colours, map_hex, map_scale, round_scale, round_ticks

pytestmark = pytest.mark.quick

# Machado, Oliveira and Fernandes, "A physiologically-based model for simulation of color vision
# deficiency", 2009, table for severity 1.0, on linear red, green and blue (from memory)
DEUTERANOPIA = np.array(
    [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
)
PROTANOPIA = np.array(
    [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
)


def linear(screen):
    screen = np.asarray(screen, float)
    return np.where(screen <= 0.04045, screen / 12.92, ((screen + 0.055) / 1.055) ** 2.4)


def oklab(line):
    """Oklab from linear red, green and blue: the forward matrices of the published definition (from memory)."""
    cone = np.cbrt(
        line
        @ np.array(
            [
                [0.4122214708, 0.5363325363, 0.0514459929],
                [0.2119034982, 0.6806995451, 0.1073969566],
                [0.0883024619, 0.2817188376, 0.6299787005],
            ]
        ).T
    )
    return (
        cone
        @ np.array(
            [
                [0.2104542553, 0.7936177850, -0.0040720468],
                [1.9779984951, -2.4285922050, 0.4505937099],
                [0.0259040371, 0.7827717662, -0.8086757660],
            ]
        ).T
    )


def luminance(hex_colour):
    rgb = [int(hex_colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    return linear(rgb) @ np.array([0.2126, 0.7152, 0.0722])  # WCAG 2.1, relative luminance


def test_steps_are_even_to_the_eye():
    lab = oklab(linear(map_colours(np.linspace(0, 1, 33))))
    step = np.linalg.norm(np.diff(lab, axis=0), axis=1)
    assert step.max() / step.min() < 1.02


@pytest.mark.parametrize("blindness", [np.eye(3), DEUTERANOPIA, PROTANOPIA], ids=["full", "deutan", "protan"])
def test_map_keeps_its_order_for_red_green_blind_readers(blindness):
    lab = oklab(np.clip(linear(map_colours(np.linspace(0, 1, 12))) @ blindness.T, 0, 1))
    assert (np.diff(lab[:, 0]) > 0.02).all()  # lightness rises at every step
    apart = np.linalg.norm(lab[:, None] - lab[None], axis=2) + np.eye(12)
    assert apart.min() > 0.04  # twice what is just seen


def test_colours_lie_inside_what_a_screen_shows():
    # a colour that had been clipped would not come back to its own place in Oklab
    ends = oklab(linear(map_colours(np.array([0.0, 1.0]))))
    assert ends[0] == pytest.approx((0.31, -0.010, -0.115), abs=1e-4)
    assert ends[1] == pytest.approx((0.93, -0.045, 0.165), abs=1e-4)


def test_outcome_colours_read_on_white_and_have_their_own_sign():
    # WCAG 2.1, 1.4.3: contrast of at least 4.5 to 1 for text
    for colour in OUTCOME_COLOUR.values():
        assert 1.05 / (luminance(colour) + 0.05) >= 4.5
    assert len(set(OUTCOME_SIGN.values())) == len(set(OUTCOME_COLOUR.values())) == len(Outcome)


def test_out_of_range_is_clipped_and_the_scale_has_its_ends():
    assert map_hex(np.array([-1.0, 2.0])) == [map_scale()[0][1], map_scale()[-1][1]]
    assert [map_scale()[0][0], map_scale()[-1][0]] == [0.0, 1.0]


@pytest.mark.parametrize(("low", "high"), [(6.0, 7.5), (5.0, 6.5), (0.0, 0.5), (3.5, 21.0), (-2.5, 13.0), (10.0, 11.5)])
def test_ticks_are_round_true_and_inside(low, high):
    ticks = round_ticks(low, high)
    assert 2 <= len(ticks) <= 6 and low <= ticks[0] and ticks[-1] <= high
    assert all(float(f"{tick:g}") == tick for tick in ticks) and np.ptp(np.diff(ticks)) < 1e-9


def test_scale_ends_hold_the_figures():
    assert round_scale(5.4, 6.5) == (5.0, 6.5) and round_scale(4.0, 4.0) == (4.0, 4.5)
    assert round_scale(-0.1, 0.0) == (-0.5, 0.0)
