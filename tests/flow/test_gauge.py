"""The bench test: its curve is the network's, and a blocked branch is what a network without it gives."""

from dataclasses import replace
from pathlib import Path

import pytest

from morph.flow.gauge import METER_RATIO, measure_gauge
from morph.flow.measure import measure_flow
from morph.settings.job import Role
from morph.settings.profile import read_profile
from tests.flow.plans import coolant, ladder, make_plan

pytestmark = pytest.mark.quick

PROFILE = read_profile("steel-40um", Path())
PLACES = {"in": (-20, 0, 0), "A": (0, 0, 0), "B": (20, 15, 0), "C": (20, -15, 0), "D": (40, 0, 0), "out": (60, 0, 0)}
PIPES = {
    "I": ("in", "A", 5.0),
    "AB": ("A", "B", 4.0),
    "AC": ("A", "C", 4.0),
    "BD": ("B", "D", 4.0),
    "CD": ("C", "D", 4.0),
    "O": ("D", "out", 5.0),
}
ENDS = {"in": Role.IN, "out": Role.OUT}


def gauge_of(plan, settings=None, **more):
    settings = settings or coolant()
    return measure_gauge(plan, settings, PROFILE, measure_flow(plan, settings, PROFILE), **more)


def test_curve_is_what_the_network_gives_at_each_drop():
    plan = ladder(3)
    gauge = gauge_of(plan, coolant(hose_mm=(9.0, 3000.0)))
    for point in gauge.curves[0]:
        low, nominal, high = point.flow_l_min
        alone = measure_flow(plan, coolant(drop_bar=point.drop_bar), PROFILE)
        assert nominal == pytest.approx(alone.supplies[0].flow_l_min, rel=1e-6)
        assert low < nominal < high
        assert low == pytest.approx(alone.bands[0].flow_at_drop_l_min[0], rel=1e-6)


def test_a_blocked_branch_is_a_plan_without_it():
    plan = make_plan(PLACES, PIPES, ENDS)
    drop = measure_flow(plan, coolant(), PROFILE).supplies[0].drop_bar
    blocked = {row.id: row for row in gauge_of(plan).blocked}
    left = {name: pipe for name, pipe in PIPES.items() if name != "AB"}
    without = make_plan(PLACES, left, ENDS, through={"I", "AC", "CD", "O"})
    flow = measure_flow(without, coolant(drop_bar=drop), PROFILE).supplies[0].flow_l_min
    assert 1.0 - flow / 6.0 == pytest.approx(
        blocked["AB"].flow_loss_ratio, abs=5e-3
    )  # the corner at A is no junction now
    assert blocked["AB"].flow_loss_ratio == pytest.approx(blocked["BD"].flow_loss_ratio, rel=1e-6)
    assert blocked["I"].flow_loss_ratio == 1.0 and blocked["L-out"].flow_loss_ratio == 1.0
    assert blocked["AB"].detectable and blocked["AB"].threshold_ratio > METER_RATIO


def test_one_of_many_rungs_does_not_show_and_says_so():
    gauge = gauge_of(ladder(12, bore=3.5, header=8.0))
    rungs = [row for row in gauge.blocked if row.id.startswith("R")]
    hidden = [row for row in rungs if not row.detectable]
    assert hidden and all(row.flow_loss_ratio <= row.threshold_ratio for row in hidden)
    assert all("borescope" in row.method for row in hidden)


def test_a_port_beside_it_finds_what_the_whole_does_not():
    """A by-pass of 3.5 mm beside 8 mm does not show on the whole; through its own access port it is all there is."""
    places = {"in": (-20, 0, 0), "A": (0, 0, 0), "D": (40, 0, 0), "out": (60, 0, 0), "P": (20, 30, 0)}
    pipes = {
        "I": ("in", "A", 8.0),
        "M": ("A", "D", 8.0),
        "U": ("A", "P", 3.5),
        "V": ("P", "D", 3.5),
        "O": ("D", "out", 8.0),
    }
    plan = make_plan(places, pipes, {**ENDS, "P": Role.ACCESS})
    blocked = {row.id: row for row in gauge_of(plan).blocked}
    assert not blocked["U"].detectable
    assert "P" in blocked["U"].method and "other ports plugged" in blocked["U"].method


def test_the_test_water_is_its_own_whatever_the_coolant():
    plan = ladder(3)
    settings = coolant(inlet_c=60.0)
    result = measure_flow(plan, settings, PROFILE)
    cold = measure_gauge(plan, settings, PROFILE, result, test_c=20.0)
    warm = measure_gauge(plan, settings, PROFILE, result, test_c=60.0)
    assert cold.curves[0][3].flow_l_min[1] < warm.curves[0][3].flow_l_min[1]
    assert warm.curves[0][3].flow_l_min[1] == pytest.approx(6.0, rel=1e-6)
    assert replace(settings, inlet_c=20.0) != settings
