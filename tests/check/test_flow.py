"""Flow rows: a figure beyond its limit is a watch that names the branches and says what to change."""

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from morph.body.plan import ChannelPlan
from morph.check.flow import MOST_DROP_BAR, MOST_VELOCITY_M_S, check_flow
from morph.core.verdict import Outcome
from morph.flow.measure import measure_flow
from morph.settings.job import CoolantSettings
from morph.settings.profile import read_profile
from tests.solid.plans import ring, straight_pipe

pytestmark = pytest.mark.quick


def rows(plan: ChannelPlan, **coolant):
    flow = measure_flow(plan, CoolantSettings(**coolant), read_profile("steel-40um", Path()))
    return flow, {row.code: row for row in check_flow(flow)}


def uneven_ring(narrow_mm: float) -> ChannelPlan:
    plan = ring(bore_mm=6.0)
    branches = [
        dataclasses.replace(b, bore_mm=np.full(len(b.bore_mm), narrow_mm)) if b.id == "B2" else b for b in plan.branches
    ]
    return dataclasses.replace(plan, branches=tuple(branches))


def test_an_even_circuit_in_its_limits_passes_every_row():
    _, found = rows(straight_pipe(6.0), flow_l_min=3.0)
    assert {row.outcome for row in found.values()} == {Outcome.PASS}
    # continuity: 3 L/min through 6 mm is 1.768 m/s
    assert found["flow-velocity"].value == pytest.approx(3.0 / 60_000.0 / (0.25 * np.pi * 0.006**2), rel=1e-3)
    assert found["flow-spread"].value == pytest.approx(1.0)


def test_fast_water_is_a_watch_that_names_the_branches():
    flow, found = rows(straight_pipe(3.0), flow_l_min=3.0)
    row = found["flow-velocity"]
    assert row.outcome is Outcome.WATCH and row.value > MOST_VELOCITY_M_S and row.hint
    assert set(row.branch_ids) == {branch.id for branch in flow.branches}


def test_a_large_drop_is_judged_after_the_bore_band():
    flow, found = rows(straight_pipe(3.0), drop_bar=1.9, pressure_bar=8.0)
    row = found["flow-drop"]
    assert row.value == pytest.approx(1.9, rel=1e-6) and row.value < MOST_DROP_BAR < row.value + row.band
    assert row.outcome is Outcome.WATCH
    least, nominal, most = flow.bands[0].flow_at_drop_l_min
    assert f"{nominal:.2f} L/min, {least:.2f} to {most:.2f} L/min" in row.text


def test_a_starved_side_is_named_slow_and_uneven():
    flow, found = rows(uneven_ring(0.4), flow_l_min=4.0)
    assert found["flow-slow"].outcome is Outcome.WATCH and found["flow-slow"].branch_ids == ("B2",)
    speeds = {row.id: row.velocity_m_s for row in flow.branches}
    assert found["flow-slow"].value == pytest.approx(speeds["B2"] / flow.velocity_mean_m_s)
    assert found["flow-spread"].value == pytest.approx(speeds["B1"] / speeds["B2"])
    assert found["flow-spread"].outcome is Outcome.WATCH


def test_a_return_below_atmosphere_is_a_watch_that_says_what_pressure_it_takes():
    plan, profile = straight_pipe(4.0), read_profile("steel-40um", Path())
    flow = measure_flow(plan, CoolantSettings(flow_l_min=3.0, pressure_bar=0.05), profile)
    drop = flow.supplies[0].drop_bar
    low = next(row for row in check_flow(flow, None, 0.05) if row.code == "flow-return-pressure")
    assert low.outcome is Outcome.WATCH and low.value == pytest.approx(0.05 - drop) and f"{drop:.2f} bar" in low.hint
    enough = next(row for row in check_flow(flow, None, drop + 0.5) if row.code == "flow-return-pressure")
    assert enough.outcome is Outcome.PASS and enough.value == pytest.approx(0.5)


def test_laminar_and_uncertain_branches_are_named_apart():
    # 6 mm water at 20 C: Re 2300 at 0.65 L/min, 4000 at 1.13 L/min
    _, slow = rows(straight_pipe(6.0), flow_l_min=0.4)
    assert slow["flow-regime"].outcome is Outcome.WATCH and "Below Reynolds 2300: B1" in slow["flow-regime"].text
    _, unsure = rows(straight_pipe(6.0), flow_l_min=0.9)
    assert "Between 2300 and 4000 either law may hold" in unsure["flow-regime"].text
    assert unsure["flow-regime"].branch_ids == ("B1",)
