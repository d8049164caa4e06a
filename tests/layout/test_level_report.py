"""The layout over the level, against drawings whose changes are known by construction."""

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest

from morph.core.errors import SettingError
from morph.layout.density import Density
from morph.layout.level import smoothed
from morph.layout.level_report import SHARP, make_level_report
from morph.settings.job import LevelRule, Samples, Seam
from tests.layout.drawing import drawn, ports, ring, settings
from tests.layout.test_real_layouts import load

pytestmark = pytest.mark.quick

SIZE_MM, PITCH_MM = (80.0, 40.0), 0.5
BOTH = ports(("a", "in", 0, 20), ("b", "out", 80, 20))
OPEN = [([(-9, 20), (30, 20)], 5.0), ([(50, 20), (90, 20)], 5.0)]
GAP = [([(20, 20), (60, 20)], 5.0)]
HOLE = (16.0, 20.0)


def layered(gap_density, pool_density=0.0):
    """A channel with a gap at `gap_density`, and a ring around (16, 20) filled with `pool_density`."""
    full, gap = drawn([*OPEN, (ring(HOLE, 10.0), 4.0)], SIZE_MM, PITCH_MM), drawn(GAP, SIZE_MM, PITCH_MM)
    y, x = np.mgrid[: full.value.shape[0], : full.value.shape[1]] * PITCH_MM + 0.5 * PITCH_MM
    pool = pool_density * (np.hypot(x - HOLE[0], y - HOLE[1]) < 10.0)
    value = np.maximum(full.value, np.maximum(gap_density * gap.value, pool))
    return Density(value, SIZE_MM, full.samples, full.seam, "layers.npy", "0" * 16)


def test_the_gap_closes_at_its_density():
    density = layered(0.44)
    report = make_level_report(density, settings(density), BOTH)
    here = next(row for row in report.rows if row.level == report.level)
    assert (here.components, here.loops, here.joined) == (2, 2, (("a",), ("b",)))
    assert report.low == pytest.approx(0.44, abs=0.01) and report.below.components == 1
    assert report.below.joined == (("a", "b"),)
    (notice,) = report.notices
    assert notice.code == "level-near-change" and "a-b" in notice.text


def test_two_pools_fill_at_their_density_and_a_far_change_is_not_told():
    """Half rings on both sides of the channel enclose two fields of metal; they fill at 0.3."""
    density = layered(1.0, 0.3)
    report = make_level_report(density, settings(density), BOTH)
    assert report.low == pytest.approx(0.3, abs=0.01)
    assert report.below.loops == 0 and report.below.components == 1
    assert not report.notices
    at = {round(row.level, 2): row for row in report.rows}
    assert (at[0.25].loops, at[0.35].loops) == (0, 2)


def test_the_interval_ends_where_the_next_design_begins():
    density = layered(0.44, 0.3)
    report = make_level_report(density, settings(density), BOTH)
    assert 0.0 < report.low - report.below.level <= SHARP
    levels = [row.level for row in report.rows]
    assert levels == sorted(set(levels)) and report.level in levels
    designs = {row.design for row in report.rows if report.low <= row.level <= report.high}
    assert len(designs) == 1


def test_area_falls_with_the_level_and_agrees_with_a_count():
    density, layout, declared = load("s5_crescent_96x128_R1.5_b2")
    report = make_level_report(density, layout, declared)
    areas = [row.area_ratio for row in report.rows]
    assert all(a >= b - 2e-3 for a, b in itertools.pairwise(areas))  # crumbs may come back
    value = smoothed(density.value)
    for row in report.rows:
        assert row.area_ratio == pytest.approx(float((value > row.level).mean()), abs=0.02)


def test_dead_ends_are_counted():
    lines = [([(-9, 20), (90, 20)], 5.0), ([(30, 20), (30, 34)], 4.0), ([(55, 20), (55, 6)], 4.0)]
    density = drawn(lines, SIZE_MM, PITCH_MM)
    report = make_level_report(density, settings(density), BOTH)
    counts = {row.dead_ends for row in report.rows if 0.3 <= row.level <= 0.7 and row.dead_ends is not None}
    assert counts == {2}
    assert next(row for row in report.rows if row.level == 0.5).dead_ends == 2


def test_the_split_layout_sits_on_an_edge():
    """The loop of this layout closes and opens within 0.02 of a half: both sides are told."""
    density, layout, declared = load("s3_split_96x128_R2.0_b0")
    report = make_level_report(density, layout, declared)
    assert (report.below.loops, report.above.loops) == (2, 0)
    assert report.low > 0.45 and report.high < 0.55 and len(report.notices) == 1


def test_keep_area_and_numbers_set_the_level_in_use():
    density = layered(0.44)
    assert make_level_report(density, settings(density, level=0.37), BOTH).level == 0.37
    kept = make_level_report(density, settings(density, level=LevelRule.KEEP_AREA, area_ratio=0.2), BOTH)
    here = next(row for row in kept.rows if row.level == kept.level)
    assert here.area_ratio == pytest.approx(0.2, abs=0.02)
    with pytest.raises(SettingError):
        make_level_report(density, settings(density, level=LevelRule.KEEP_AREA, area_ratio=0.99), BOTH)


@pytest.mark.parametrize("samples", list(Samples))
def test_on_a_joined_seam_rings_around_are_loops_and_turning_changes_nothing(samples):
    lines = [([(-10, 12), (110, 12)], 5.0), ([(-10, 30), (110, 30)], 4.0), ([(30, 12), (30, 30)], 4.0)]
    lines += [([(30, 0), (30, 12)], 5.0), ([(70, 30), (70, 40)], 5.0)]
    density = replace(drawn(lines, SIZE_MM, PITCH_MM, samples), seam=Seam.JOINED)
    declared = ports(("a", "in", 30, 0), ("b", "out", 70, 40))
    report = make_level_report(density, settings(density, seam=Seam.JOINED), declared)
    here = next(row for row in report.rows if row.level == 0.5)
    assert (here.components, here.loops, here.joined, here.dead_ends) == (1, 2, (("a", "b"),), 0)
    if samples is Samples.CELLS:
        turned = replace(density, value=np.roll(density.value, 37, axis=1))
        shift = 37 * PITCH_MM
        moved = ports(("a", "in", (30 + shift) % 80, 0), ("b", "out", (70 + shift) % 80, 40))
        again = make_level_report(turned, settings(turned, seam=Seam.JOINED), moved)
        assert [row.design for row in again.rows] == [row.design for row in report.rows]
        assert math.isclose(again.low, report.low) and math.isclose(again.high, report.high)
