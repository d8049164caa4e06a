"""Keep-outs: distances by hand, verdicts with place, and what is refused."""

import numpy as np
import pytest

from morph.core.errors import SettingError
from morph.core.verdict import Outcome
from morph.layout.extract import make_graph
from morph.layout.keep_out import check_keep_outs, measure_away_mm, outline_mm, require_keep_outs
from morph.settings.job import KeepOutSettings
from tests.layout.drawing import drawn, ports, settings

pytestmark = pytest.mark.quick

SIZE_MM = (60.0, 40.0)
BOTH = ports(("a", "in", 0, 20), ("b", "out", 60, 20))
DISC = KeepOutSettings("pin", (30.0, 30.0), 6.0, None, 4.0)
SQUARE = KeepOutSettings("boss", None, None, ((10.0, 5.0), (18.0, 5.0), (18.0, 14.0), (10.0, 14.0)), 1.0)


def lines(graph):
    return [(branch.id, branch.sheet_mm, branch.bore_mm) for branch in graph.branches]


@pytest.fixture(scope="module")
def graph():
    density = drawn([([(-9, 20), (70, 20)], 4)], SIZE_MM, 0.5)
    return make_graph(density, settings(density), BOTH)


def test_distances_by_hand():
    place = np.array([(30.0, 20.0), (30.0, 30.0), (14.0, 20.0), (14.0, 10.0), (22.0, 17.0)])
    np.testing.assert_allclose(measure_away_mm(DISC, place)[:2], [7.0, -3.0])
    np.testing.assert_allclose(measure_away_mm(SQUARE, place)[2:], [6.0, -4.0, 5.0])  # the last: 4, 3 off the corner


def test_a_clear_keep_out_passes_and_a_near_one_fails_with_place_and_branch(graph):
    """Disc edge at y = 27, channel wall at y = 22: 5 mm of metal. Square edge at y = 14, wall at y = 18: 4 mm."""
    disc, square = check_keep_outs((DISC, SQUARE), lines(graph))
    assert disc.outcome is Outcome.PASS and disc.value == pytest.approx(5.0, abs=0.05)
    assert square.outcome is Outcome.PASS and square.value == pytest.approx(4.0, abs=0.05)
    (near,) = check_keep_outs((KeepOutSettings("pin", (30.0, 30.0), 6.0, None, 5.5),), lines(graph))
    assert near.outcome is Outcome.FAIL and near.branch_ids == ("B1",) and near.limit == 5.5
    assert near.sheet_mm == pytest.approx((30.0, 20.0), abs=0.6) and near.hint


def test_a_channel_through_a_keep_out_fails(graph):
    (through,) = check_keep_outs((KeepOutSettings("slot", (40.0, 21.0), 3.0, None, 0.0),), lines(graph))
    assert through.outcome is Outcome.FAIL and through.value < 0 and "runs into it" in through.text


def test_around_a_joined_seam_the_shorter_way_counts():
    keep_out = KeepOutSettings("pin", (1.0, 20.0), 2.0, None, 0.0)
    assert measure_away_mm(keep_out, np.array([[58.0, 20.0]]), 60.0)[0] == pytest.approx(2.0)
    assert measure_away_mm(keep_out, np.array([[-2.0, 20.0]]), 60.0)[0] == pytest.approx(2.0)


def test_outlines_are_closed_and_grow_by_the_clearance():
    for keep_out in (DISC, SQUARE):
        line = outline_mm(keep_out, 1.5)
        np.testing.assert_allclose(line[0], line[-1], atol=1e-12)
        np.testing.assert_allclose(measure_away_mm(keep_out, line), 1.5, atol=0.02)


@pytest.mark.parametrize(
    ("keep_out", "code"),
    [
        (KeepOutSettings("p", (1.0, 20.5), 3.0), "keep-out-over-port"),
        (KeepOutSettings("p", (5.0, 20.0), 4.0, None, 3.0), "keep-out-over-port"),
        (KeepOutSettings("p", None, None, ((55.0, 15.0), (65.0, 15.0), (60.0, 30.0))), "keep-out-over-port"),
        (KeepOutSettings("p", (80.0, 20.0), 4.0), "keep-out-outside"),
        (KeepOutSettings("p", None, None, ((0.0, -9.0), (9.0, -9.0), (4.0, -2.0))), "keep-out-outside"),
    ],
)
def test_keep_outs_that_cannot_be_are_refused(keep_out, code):
    with pytest.raises(SettingError) as caught:
        require_keep_outs((keep_out,), BOTH, SIZE_MM)
    assert caught.value.code == code


def test_keep_outs_beside_ports_are_fine():
    require_keep_outs((DISC, SQUARE), BOTH, SIZE_MM)
