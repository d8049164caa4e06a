"""Level, fine grid and crumbs, against counts and areas known by construction."""

import math

import numpy as np
import pytest

from morph.core.errors import InputError, SettingError
from morph.layout.density import Density
from morph.layout.graph import DropReason
from morph.layout.level import (
    clean,
    count_at_levels,
    count_pieces_and_holes,
    find_level,
    make_picture,
    measure_width_px,
    refined,
    smoothed,
)
from morph.settings.job import LevelRule, Samples, Seam
from tests.layout.drawing import drawn, ring, settings

pytestmark = pytest.mark.quick

NONE = np.empty((0, 2))


def test_a_checkerboard_is_cancelled_exactly():
    sign = (-1.0) ** np.add.outer(np.arange(20), np.arange(30))
    inner = smoothed(0.5 + 0.3 * sign)[1:-1, 1:-1]
    np.testing.assert_allclose(inner, 0.5, atol=1e-15)


def test_smoothing_keeps_a_linear_ramp():
    ramp = np.add.outer(0.01 * np.arange(20), 0.02 * np.arange(30))
    np.testing.assert_allclose(smoothed(ramp)[1:-1, 1:-1], ramp[1:-1, 1:-1], atol=1e-15)


def test_pieces_are_8_connected_and_holes_4_connected():
    """Digital topology (Kong and Rosenfeld 1989): the two phases need different connectedness."""
    diagonal = np.eye(5, dtype=bool)
    assert count_pieces_and_holes(diagonal) == (1, 0)
    diamond = np.zeros((5, 5), dtype=bool)
    diamond[[1, 2, 2, 3], [2, 1, 3, 2]] = True
    assert count_pieces_and_holes(diamond) == (1, 1)


def test_euler_number_agrees_with_scikit_image():
    from skimage.measure import euler_number

    for seed in range(20):
        mask = smoothed(np.random.default_rng(seed).random((40, 60))) > 0.5
        pieces, holes = count_pieces_and_holes(mask)
        assert pieces - holes == euler_number(mask, connectivity=2)


@pytest.mark.parametrize("samples", list(Samples))
def test_the_fine_grid_is_exact_for_cubics(samples):
    """A cubic spline reproduces cubics; away from the repeated edge it must return x^3 itself."""
    n, factor = 40, 3
    x = np.arange(n) / n
    field = np.add.outer(x**3, x**2)
    fine = refined(field, factor, samples)
    if samples is Samples.CELLS:
        at = ((np.arange(n * factor) + 0.5) / factor - 0.5) / n
    else:
        at = np.arange((n - 1) * factor + 1) / factor / n
    inner = slice(14 * factor, -14 * factor)
    np.testing.assert_allclose(fine[inner, inner], np.add.outer(at**3, at**2)[inner, inner], atol=1e-6)


def test_width_of_a_straight_slanted_strip():
    """A long strip at 30 degrees is about its own width wide (Cauchy-Crofton holds on average over directions)."""
    y, x = np.mgrid[:300, :300]
    away = np.abs((x - 150) * np.sin(np.pi / 6) - (y - 150) * np.cos(np.pi / 6))
    assert measure_width_px(away < 6) == pytest.approx(12, rel=0.12)


def test_level_half_a_number_and_keep_area():
    density = drawn([([(-9, 20), (70, 20)], 8)], (60, 40), 0.5)
    assert find_level(density, settings(density)) == 0.5
    assert find_level(density, settings(density, level=0.3)) == 0.3
    grey = Density(np.add.outer(np.linspace(0, 1, 200), np.zeros(200)), (20, 20), Samples.CELLS, Seam.OPEN, "g", "0")
    level = find_level(grey, settings(grey, level=LevelRule.KEEP_AREA, area_ratio=0.3))
    assert level == pytest.approx(0.7, abs=0.006)  # density = y / height: the upper 30 % lie above 0.7
    assert find_level(grey, settings(grey, level=LevelRule.KEEP_AREA)) == pytest.approx(0.5, abs=0.006)


def test_keep_area_counts_edge_nodes_half():
    """On nodes 0..10 with values 0..1 along y, coolant above node 5.5 covers 4.5 of 10 pitches."""
    value = np.add.outer(np.linspace(0, 1, 11), np.zeros(11))
    nodes = Density(value, (10, 10), Samples.NODES, Seam.OPEN, "g", "0")
    level = find_level(nodes, settings(nodes, level=LevelRule.KEEP_AREA, area_ratio=0.45))
    assert 0.5 < level < 0.6


def test_an_area_that_no_level_gives_is_refused():
    value = np.zeros((40, 40))
    value[10:30] = 1.0
    flat = Density(value, (40, 40), Samples.CELLS, Seam.OPEN, "g", "0")
    with pytest.raises(SettingError) as caught:
        find_level(flat, settings(flat, level=LevelRule.KEEP_AREA, area_ratio=0.2))
    assert caught.value.code == "keep-area-missed"


@pytest.mark.parametrize(("level", "code"), [(0.9, "level-empty"), (0.1, "level-full")])
def test_a_level_without_both_phases_is_refused(level, code):
    value = np.full((40, 40), 0.4)
    value[:, 20] = 0.9
    grey = Density(value, (40, 40), Samples.CELLS, Seam.OPEN, "g", "0")
    with pytest.raises(InputError) as caught:
        make_picture(grey, level, NONE)
    assert caught.value.code == code


def test_crumbs_are_removed_listed_with_place_and_area_and_holes_kept():
    lines = [([(-9, 20), (70, 20)], 6), (ring((30, 20), 12), 6), ([(50, 34), (50.01, 34)], 2.4)]
    density = drawn(lines, (60, 40), 0.25)
    value = density.value.copy()
    y, x = np.mgrid[:160, :240] * 0.25 + 0.125
    value[np.hypot(x - 8, y - 20) < 0.7] = 0.0  # a pinhole of 1.5 mm2 against 0.2 discs = 5.7 mm2
    density = Density(value, density.size_mm, density.samples, density.seam, "d", "0")
    picture = make_picture(density, 0.5, NONE)
    assert picture.betti == (1, 2)
    assert count_pieces_and_holes(picture.mask) == picture.betti
    islands = [d for d in picture.dropped if d.reason is DropReason.ISLAND]
    pinholes = [d for d in picture.dropped if d.reason is DropReason.PINHOLE]
    assert len(islands) == len(pinholes) == 1
    assert islands[0].sheet_mm == pytest.approx((50, 34), abs=0.05)
    assert islands[0].area_mm2 == pytest.approx(math.pi * 1.2**2, rel=0.1)
    assert pinholes[0].sheet_mm == pytest.approx((8, 20), abs=0.05)


def test_a_small_piece_at_a_port_is_no_crumb():
    mask = np.zeros((60, 60), dtype=bool)
    mask[:, 40:50] = True
    mask[2:6, 2:6] = True
    assert clean(mask, 10.0, NONE).pieces == 1
    assert clean(mask, 10.0, np.array([[0.0, 0.0]])).pieces == 2


def test_counts_of_clean_agree_with_a_recount():
    for seed in range(10):
        mask = smoothed(smoothed(np.random.default_rng(seed).random((80, 90)))) > 0.5
        found = clean(mask, 4.0, NONE)
        assert (found.pieces, found.holes) == count_pieces_and_holes(found.mask)


def test_the_level_that_closes_a_hole_shows_in_the_counts():
    density = drawn([(ring((30, 20), 12), 4)], (60, 40), 0.25)
    value = np.maximum(density.value, 0.45 * (np.hypot(*(np.mgrid[:160, :240] * 0.25 - [[[20]], [[30]]])) < 12))
    density = Density(value, density.size_mm, density.samples, density.seam, "d", "0")
    counts = count_at_levels(density, make_picture(density, 0.5, NONE))
    assert [(c.level, c.pieces, c.holes) for c in counts] == [(0.4, 1, 0), (0.5, 1, 1), (0.6, 1, 1)]
