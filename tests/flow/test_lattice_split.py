"""The lattice in solids as morph builds them: against section factors, and against networks of tubes.

Sections: flow times viscosity over pressure drop of a straight channel is 2 A D^2 / (f Re L) with the finite-element
factors of duct_table.py. Junctions: a linear junction of three legs is a star of three resistances, so that three
solutions give the length each leg is shorter than its centreline.
"""

from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from morph.body.section import SectionRule, hydraulic_diameter_mm, section_area_mm2
from morph.core.errors import FlowError
from morph.core.verdict import Outcome
from morph.flow import lattice_check
from morph.flow.duct_table import friction_factor_re
from morph.flow.lattice import solve_channel_flow
from morph.flow.lattice_check import (
    check_flow_3d,
    choose_cells_per_bore,
    creeping_flow_mm3,
    flow_check_verdicts,
)
from morph.flow.network import make_network
from morph.settings.job import CoolantSettings, SectionShape
from morph.settings.profile import read_profile
from morph.solid.channel import make_channel_solid
from tests.flow import tubes
from tests.solid import plans

BLANK = plans.box_blank()


def network_of(plan):
    return make_network(plan, CoolantSettings(drop_bar=1.0), read_profile("steel-40um", Path()))


@pytest.mark.parametrize(
    ("shape", "angle_deg"),
    [(SectionShape.ROUND, 47.0), (SectionShape.ROOFED, 47.0), (SectionShape.ROOFED, 60.0), (SectionShape.ARCHED, 47.0)],
)
def test_sections_as_built_resist_as_their_finite_elements(shape, angle_deg):
    """Two methods that share nothing: biquadratic elements on the section, and the lattice in the meshed solid."""
    path = plans.sampled([(0.0, 20.0, 12.0), (60.0, 20.0, 12.0)], 4.0)
    plan = replace(tubes.tube_plan(path, 4.0), section=SectionRule(shape, angle_deg))
    mesh = make_channel_solid(plan, BLANK, 0.25).trimmed
    bore, along = np.array([4.0]), np.array([[1.0, 0.0, 0.0]])
    area, diameter = section_area_mm2(bore, along, plan.section), hydraulic_diameter_mm(bore, along, plan.section)
    exact = float((2.0 * area * diameter**2 / friction_factor_re(bore, along, plan.section))[0]) / 60.0
    assert solve_channel_flow(mesh, plan, 12.0).total_mm3 == pytest.approx(exact, rel=0.012)


def tee(run_mm, side_mm):
    centre, z = (30.0, 10.0, 15.0), 15.0
    legs = [
        plans.branch(f"L-{name}", "J", name, plans.sampled([centre, end], bore), bore, lead=True)
        for name, end, bore in (
            ("a", (10.0, 10.0, z), run_mm), ("b", (50.0, 10.0, z), run_mm), ("c", (30.0, 30.0, z), side_mm)
        )
    ]  # fmt: skip
    exits = [
        ("a", "in", "L-a", "-x", (-1.0, 0.0, 0.0), 0.0),
        ("b", "out", "L-b", "+x", (1.0, 0.0, 0.0), 0.0),
        ("c", "out", "L-c", "+y", (0.0, 1.0, 0.0), 0.0),
    ]
    blank = plans.box_blank((10.0, 0.0, 0.0), (50.0, 30.0, 30.0), port=("-x", "+x", "+y"))
    return plans.plan_of(legs, exits), blank


def test_a_tee_is_a_star_of_three_resistances():
    """Fed one way, the split follows from the three pairwise resistances (exact for any linear junction)."""
    plan, blank = tee(4.0, 4.0)
    mesh = make_channel_solid(plan, blank, 0.25).trimmed
    pair = {}
    for roles in (("in", "out", "access"), ("in", "access", "out"), ("access", "in", "out")):
        pair[roles] = 1.0 / solve_channel_flow(mesh, tubes.with_roles(plan, *roles), 10.0).total_mm3
    run, first, second = pair.values()
    a, b, c = 0.5 * (run + first - second), 0.5 * (run + second - first), 0.5 * (first + second - run)
    both = solve_channel_flow(mesh, plan, 10.0)
    assert both.total_mm3 == pytest.approx(1.0 / (a + b * c / (b + c)), rel=2e-3)
    assert both.share["L-b"] == pytest.approx(c / (b + c), abs=2e-3)
    assert b == pytest.approx(a, rel=5e-3)  # the two halves of the run mirror each other
    tube = 128.0 / (np.pi * 4.0**4)
    shorter = [(20.0 - r / tube) / 4.0 for r in (a, c)]
    # A branch leaves at the wall of the run (half a bore) and pays for its entry (about 0.2 bores, own measurement
    # at 10 to 16 cells); along the run the open side saves a tenth.
    assert shorter == pytest.approx([0.1, 0.32], abs=0.06)


@cache
def checked(name):
    make = {
        "wye": tubes.unequal_wye,
        "ladder": lambda: tubes.ladder((4.0, 3.5, 4.5)),
        "roofed wye": tubes.unequal_wye,
    }
    plan, blank = make[name]()
    if name.startswith("roofed"):
        plan = replace(plan, section=SectionRule(SectionShape.ROOFED, 47.0))
    mesh = make_channel_solid(plan, blank, 0.25).trimmed
    return plan, check_flow_3d(mesh, plan, network_of(plan))


@pytest.mark.parametrize("name", ["wye", "roofed wye", "ladder"])
def test_split_within_two_per_cent_of_the_network(name):
    plan, found = checked(name)
    assert np.abs(found.split_error).max() < 0.02, dict(zip(found.branch_ids, found.split_error, strict=True))
    assert found.spread.max() < 0.01 and abs(found.fine.imbalance) < 1e-3
    assert found.fine.cells_per_bore == 12.0 and found.coarse.cells_per_bore == 8.0
    balance = dict.fromkeys((node.id for node in plan.nodes), 0.0)
    for branch, flow in zip(plan.branches, found.fine.branch_mm3, strict=True):
        balance[branch.start] -= flow / found.fine.total_mm3
        balance[branch.end] += flow / found.fine.total_mm3
    inner = set(balance) - {exit_.node for exit_ in plan.exits}
    assert max(abs(balance[node]) for node in inner) < 2e-3  # what the cuts count adds up at every junction


def test_rows_say_figure_resolution_and_scope():
    _, found = checked("wye")
    split, total = flow_check_verdicts(found)
    assert (split.code, total.code) == ("flow-3d-split", "flow-3d-total")
    assert split.outcome is Outcome.PASS and split.unit == "%" and split.limit == 2.0
    assert split.value == pytest.approx(100.0 * np.abs(found.split_error).max())
    assert "not turbulence" in split.text and "12 cells" in split.text and "not turbulence" in total.text
    worst = int(np.abs(found.split_error).argmax())
    ours = abs(found.fine.branch_mm3[worst]) / found.fine.total_mm3
    assert f"{found.branch_ids[worst]} carries {100.0 * ours:.1f} %" in split.text
    assert f"{100.0 * abs(found.total_error):.1f} % {'more' if found.total_error > 0.0 else 'less'}" in total.text
    off = replace(found, split_error=found.split_error + 0.05, total_error=0.2)
    assert [row.outcome for row in flow_check_verdicts(off)] == [Outcome.WATCH, Outcome.WATCH]
    assert set(flow_check_verdicts(off)[0].branch_ids) == set(found.branch_ids)


def test_the_network_at_creeping_flow_is_that_of_its_tubes():
    """Two leads in line, without a junction: Hagen-Poiseuille through the network's own public call."""
    path = plans.sampled([(0.0, 20.0, 12.0), (60.0, 20.0, 12.0)], 4.0)
    flow, total = creeping_flow_mm3(network_of(tubes.tube_plan(path, 4.0)))
    assert total == pytest.approx(np.pi * 4.0**4 / (128.0 * 60.0), rel=2e-3)
    assert flow.tolist() == pytest.approx([-total, total], rel=1e-6)


def test_cells_are_fewer_where_there_would_be_too_many(monkeypatch):
    mesh, plan = tubes.straight((1, 0, 0), 40.0, 4.0)
    assert choose_cells_per_bore(mesh, plan) == 12.0
    monkeypatch.setattr(lattice_check, "MOST_CELLS", 5000.0)
    fewer = choose_cells_per_bore(mesh, plan)
    assert 6.0 <= fewer < 12.0
    monkeypatch.setattr(lattice_check, "MOST_CELLS", 1000.0)
    with pytest.raises(FlowError) as caught:
        choose_cells_per_bore(mesh, plan)
    assert caught.value.code == "lattice-too-large"


def test_a_branch_shorter_than_its_bore_is_still_counted():
    """Two side channels leave a run 3 mm apart, bores 4 mm: what passes between them is what the rest leaves over."""
    z = 15.0
    a, b = (28.5, 20.0, z), (31.5, 20.0, z)
    items = [plans.branch("B1", "A", "B", plans.sampled([a, b], 4.0), 4.0)]
    for name, node, start, end in (
        ("in", "A", a, (10.0, 20.0, z)),
        ("out", "B", b, (50.0, 20.0, z)),
        ("up", "A", a, (28.5, 36.0, z)),
        ("down", "B", b, (31.5, 4.0, z)),
    ):
        items.append(plans.branch(f"L-{name}", node, f"X{name}", plans.sampled([start, end], 4.0), 4.0, lead=True))
    exits = [
        ("in", "in", "L-in", "-x", (-1.0, 0.0, 0.0), 0.0),
        ("out", "out", "L-out", "+x", (1.0, 0.0, 0.0), 0.0),
        ("up", "out", "L-up", "+y", (0.0, 1.0, 0.0), 0.0),
        ("down", "out", "L-down", "-y", (0.0, -1.0, 0.0), 0.0),
    ]
    blank = plans.box_blank((10.0, 4.0, 0.0), (50.0, 36.0, 30.0), port=("-x", "+x", "-y", "+y"))
    plan = plans.plan_of(items, exits)
    found = solve_channel_flow(make_channel_solid(plan, blank, 0.25).trimmed, plan, 10.0)
    share = found.share
    assert -share["L-in"] == pytest.approx(1.0, abs=2e-3)
    assert share["B1"] == pytest.approx(share["L-out"] + share["L-down"], abs=5e-3)
    assert share["B1"] == pytest.approx(1.0 - share["L-up"], abs=5e-3)
    assert 0.3 < share["B1"] < 0.9
