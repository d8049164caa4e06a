"""The flow stage on plans written by hand: sums, splits, regimes, bands, both directions, and everything it refuses."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from morph.body.finish import Finish, ThreadHole
from morph.body.thread import make_thread
from morph.core.errors import FlowError
from morph.flow.drive import GivenFlow
from morph.flow.measure import make_drive, measure_flow
from morph.flow.network import make_network
from morph.flow.result import Regime
from morph.flow.solve_network import Liquid, NetworkSolver
from morph.settings.job import FluidKind, FluidSettings, OwnFluid, Role, Supply
from morph.settings.profile import read_profile
from tests.flow.plans import coolant, ladder, make_plan

pytestmark = pytest.mark.quick

PROFILE = read_profile("steel-40um", Path())
WATER = Liquid(998.2, 1.0016e-3)
OIL = FluidSettings(FluidKind.OWN, own=OwnFluid(870.0, 40.0, 0.13, 1900.0))


def straight(bore=4.0, length=100.0, **values):
    return make_plan(
        {"in": (0, 0, 0), "out": (length, 0, 0)},
        {"B1": ("in", "out", bore)},
        {"in": Role.IN, "out": Role.OUT},
        **values,
    )


def rows(result):
    return {row.id: row for row in result.branches}


def test_one_laminar_pipe_is_hagen_poiseuille_with_entry_and_exit():
    result = measure_flow(straight(), coolant(flow_l_min=0.3, fluid=OIL, roughness_um=0.0), PROFILE)
    flow, bore, length = 0.3 / 60_000.0, 0.004, 0.110  # two leads of 5 mm
    velocity = flow / (0.25 * np.pi * bore**2)
    poiseuille = 128.0 * 0.040 * length * flow / (np.pi * bore**4)
    ends = (0.5 + 1.0) * 0.5 * 870.0 * velocity**2
    assert result.supplies[0].drop_bar == pytest.approx((poiseuille + ends) / 1e5, rel=2e-3)
    row = rows(result)["B1"]
    assert row.velocity_m_s == pytest.approx(velocity, rel=1e-9)
    assert row.reynolds == pytest.approx(870.0 * velocity * bore / 0.040, rel=1e-9)
    assert row.regime is Regime.LAMINAR


def test_parts_of_the_drop_and_pressures_of_nodes_add_up():
    result = measure_flow(ladder(5), coolant(hose_mm=(9.0, 2000.0)), PROFILE)
    node = dict(result.node_bar)
    plan = ladder(5)
    for branch in plan.branches:
        row = rows(result)[branch.id]
        parts = row.friction_bar + row.bends_bar + row.ends_bar + row.junctions_bar
        assert row.drop_bar == pytest.approx(parts, abs=1e-12)
        assert node[branch.start] - node[branch.end] == pytest.approx(row.drop_bar, abs=1e-7)
    assert result.supplies[0].flow_l_min == pytest.approx(6.0, rel=1e-9)
    assert node["X-in"] == pytest.approx(result.supplies[0].drop_bar - result.supplies[0].hose_bar, rel=1e-6)


def test_flow_is_kept_at_every_node():
    plan, result = ladder(6), measure_flow(ladder(6), coolant(), PROFILE)
    for node in plan.nodes:
        if node.id.startswith("X-"):
            continue
        out = sum(rows(result)[b.id].flow_l_min for b in plan.branches if b.start == node.id)
        into = sum(rows(result)[b.id].flow_l_min for b in plan.branches if b.end == node.id)
        assert out == pytest.approx(into, abs=1e-9)


def test_given_drop_and_given_flow_agree():
    by_flow = measure_flow(ladder(4), coolant(flow_l_min=5.0), PROFILE)
    by_drop = measure_flow(ladder(4), coolant(drop_bar=by_flow.supplies[0].drop_bar), PROFILE)
    assert by_drop.supplies[0].flow_l_min == pytest.approx(5.0, rel=1e-6)


def test_pump_meets_the_system_on_both_curves(tmp_path):
    (tmp_path / "pump.csv").write_text("flow,head\n0,2\n10,1.5\n30,0\n")
    settings = coolant(pump=tmp_path / "pump.csv")
    result = measure_flow(ladder(4), settings, PROFILE)
    flow, drop = result.supplies[0].flow_l_min, result.supplies[0].drop_bar
    assert drop == pytest.approx(np.interp(flow, [0, 10, 30], [2, 1.5, 0]), rel=1e-6)
    again = measure_flow(ladder(4), coolant(flow_l_min=flow), PROFILE)
    assert again.supplies[0].drop_bar == pytest.approx(drop, rel=1e-6)


def test_a_mirror_layout_parts_evenly_and_turned_round_it_keeps_its_flows():
    places = {
        "in": (-20, 0, 0),
        "A": (0, 0, 0),
        "B": (20, 15, 0),
        "C": (20, -15, 0),
        "D": (40, 0, 0),
        "out": (60, 0, 0),
    }
    pipes = {
        "I": ("in", "A", 5.0),
        "AB": ("A", "B", 4.0),
        "AC": ("A", "C", 4.0),
        "BD": ("B", "D", 4.0),
        "CD": ("C", "D", 4.0),
        "O": ("D", "out", 5.0),
    }
    plan = make_plan(places, pipes, {"in": Role.IN, "out": Role.OUT})
    ahead = rows(measure_flow(plan, coolant(), PROFILE))
    assert ahead["AB"].flow_l_min == pytest.approx(3.0, rel=1e-6)
    back = measure_flow(plan, coolant(), PROFILE, reverse=True)
    assert back.reverse and rows(back)["AB"].flow_l_min == pytest.approx(-3.0, rel=1e-6)
    assert back.supplies[0].flow_l_min == pytest.approx(6.0, rel=1e-9)


def test_band_of_0_3_mm_on_4_mm_is_about_half_the_drop_again():
    """Turbulent drop goes with bore^-4.8 or so: (4 / 3.7)^4.8 = 1.45; common practice says 48 %."""
    profile = replace(PROFILE, bore_band_mm=replace(PROFILE.bore_band_mm, value=0.3))
    result = measure_flow(straight(length=400.0), coolant(flow_l_min=3.0), profile)
    low, nominal, high = result.bands[0].drop_at_flow_bar
    assert low < nominal < high
    assert 1.40 < high / nominal < 1.55
    less, same, more = result.bands[0].flow_at_drop_l_min
    assert same == pytest.approx(3.0, rel=1e-9) and less < same < more


def test_transition_is_named_with_both_laws():
    result = measure_flow(
        straight(bore=4.0), coolant(flow_l_min=3000.0 * 0.25 * np.pi * 0.004 * 1.0034e-6 * 60_000.0), PROFILE
    )
    row = rows(result)["B1"]
    assert row.regime is Regime.TRANSITION and "uncertain" in row.regime.value
    laminar, turbulent = row.drop_between_bar
    assert 0.0 < laminar < turbulent
    assert laminar * 0.99 <= row.friction_bar <= turbulent * 1.1


def test_dead_ends_and_plugged_ports_are_dead_water():
    places = {"in": (0, 0, 0), "A": (20, 0, 0), "E": (20, 15, 0), "out": (50, 0, 0), "P": (20, -15, 0)}
    pipes = {"B1": ("in", "A", 4.0), "B2": ("A", "out", 4.0), "B3": ("A", "E", 4.0), "B4": ("A", "P", 4.0)}
    plan = make_plan(places, pipes, {"in": Role.IN, "out": Role.OUT, "P": Role.ACCESS}, through={"B1", "B2"})
    result = measure_flow(plan, coolant(), PROFILE)
    assert {one.id for one in result.dead_water} == {"B3", "B4", "L-P"}
    for name in ("B3", "B4", "L-P"):
        assert rows(result)[name].regime is Regime.STILL and rows(result)[name].flow_l_min == 0.0
    assert result.velocity_max_over_min == pytest.approx(1.0, abs=1e-6)


def test_two_circuits_share_or_have_a_supply_each():
    places = {"a": (0, 0, 0), "b": (100, 0, 0), "c": (0, 50, 0), "d": (100, 50, 0)}
    pipes = {"B1": ("a", "b", 4.0), "B2": ("c", "d", 4.0)}
    plan = make_plan(places, pipes, {"a": Role.IN, "b": Role.OUT, "c": Role.IN, "d": Role.OUT})
    shared = measure_flow(plan, coolant(), PROFILE)
    assert [row.flow_l_min for row in shared.supplies] == pytest.approx([6.0])
    assert rows(shared)["B1"].flow_l_min == pytest.approx(3.0, rel=1e-6)
    each = measure_flow(plan, coolant(supply=Supply.PER_CIRCUIT), PROFILE)
    assert [row.flow_l_min for row in each.supplies] == pytest.approx([6.0, 6.0])
    assert rows(each)["B2"].flow_l_min == pytest.approx(6.0, rel=1e-6)


def test_several_ins_and_outs_hang_at_one_pressure_each():
    places = {"a": (0, 10, 0), "b": (0, -10, 0), "M": (30, 0, 0), "c": (60, 10, 0), "d": (60, -10, 0)}
    pipes = {"B1": ("a", "M", 4.0), "B2": ("b", "M", 4.0), "B3": ("M", "c", 4.0), "B4": ("M", "d", 4.0)}
    plan = make_plan(places, pipes, {"a": Role.IN, "b": Role.IN, "c": Role.OUT, "d": Role.OUT})
    got = rows(measure_flow(plan, coolant(), PROFILE))
    assert [got[name].flow_l_min for name in ("B1", "B2", "B3", "B4")] == pytest.approx([3.0] * 4, rel=1e-6)


def test_a_thread_is_wider_than_its_pilot_and_costs_its_step():
    thread = ThreadHole(make_thread("G1/4"), 10.0, 3.0, 0.3)
    plain = measure_flow(straight(bore=6.0), coolant(), PROFILE)
    cut = measure_flow(
        straight(bore=6.0, finishes={"out": Finish(thread, 6.0, 13.157, 13.0, 20.0)}), coolant(), PROFILE
    )
    a, b = rows(plain)["L-out"], rows(cut)["L-out"]
    assert b.velocity_m_s < a.velocity_m_s  # the lead is all thread
    assert b.ends_bar < a.ends_bar  # the exit counts on the wide bore


def test_a_branch_between_junctions_is_shorter_than_its_centreline():
    """Tees of a 6 mm header and a 4 mm rung, by hand: each header wall lies 3 mm up the rung, 0.461 of its bores past the
    0.289 of legs at 120 degrees, so each header leg takes (0.473 * 0.461 + 0.313 * 0.461^2) * 4 mm, and a tenth is 0.4 mm.
    """
    network = make_network(ladder(3), coolant(), PROFILE)
    length = dict(zip(network.branch_ids, network.segments.summed(network.segments.length_m), strict=True))
    assert length["R1"] == pytest.approx(0.030 - 2 * 0.002679, abs=2e-6)
    assert length["L-in"] == pytest.approx(0.005, rel=1e-9)  # bends and ends of a line are no junctions
    assert length["R0"] == pytest.approx(0.030 - 0.002679, abs=2e-6)  # the first rung ends in a corner, not a tee
    narrower = make_network(ladder(3), coolant(), PROFILE, bore_change_mm=-0.2)
    after = dict(zip(narrower.branch_ids, narrower.segments.summed(narrower.segments.length_m), strict=True))
    assert after["R1"] > length["R1"]


def test_slopes_in_the_bores_are_differences():
    """Adjoint against central differences on every branch, for flow and drop given, with and without hoses."""
    random = np.random.default_rng(0)
    for hose in (None, (9.0, 2000.0)):
        network = make_network(ladder(4), coolant(hose_mm=hose), PROFILE)
        solver = NetworkSolver(network)
        weight, drop_weight = random.normal(size=network.n_branches) * 1e4, np.array([1e-4])
        for flow in (1e-4, 3e-6):
            state = solver.solve(WATER, GivenFlow(flow))
            slope = solver.slopes_by_log_bore(WATER, state, weight, drop_weight)
            for e in range(network.n_branches):
                sides = []
                for way in (1.0, -1.0):
                    factor = np.ones(network.n_branches)
                    factor[e] = np.exp(way * 1e-5)
                    other = solver.with_network(network.scaled(factor)).solve(WATER, GivenFlow(flow), state)
                    sides.append(weight @ other.flow_m3_s + drop_weight @ other.supply_drop_pa)
                assert (sides[0] - sides[1]) / 2e-5 == pytest.approx(slope[e], abs=1e-6 * np.abs(slope).max())


def refused(plan, settings, profile=PROFILE):
    with pytest.raises(FlowError) as caught:
        measure_flow(plan, settings, profile)
    assert caught.value.do and caught.value.expected and caught.value.found
    return caught.value.code


def test_everything_impossible_has_its_own_code(tmp_path):
    assert refused(straight(), coolant(flow_l_min=100.0)) == "velocity-absurd"
    assert refused(straight(length=2000.0, bore=3.0), coolant(flow_l_min=6.0, pressure_bar=2.0)) == "flow-unreachable"
    assert refused(straight(), coolant(inlet_c=0.0)) == "coolant-freezes"
    assert (
        refused(straight(), coolant(inlet_c=-20.0, fluid=FluidSettings(FluidKind.ETHYLENE_GLYCOL, 30.0)))
        == "coolant-freezes"
    )
    assert refused(straight(), coolant(inlet_c=250.0)) == "coolant-too-hot"
    assert refused(straight(), coolant(inlet_c=110.0)) == "coolant-boils"
    assert refused(straight(), coolant(flow_l_min=9.0)) == "flow-cavitates"
    (tmp_path / "pump.csv").write_text("0,5\n1,4\n")
    assert refused(straight(), coolant(pump=tmp_path / "pump.csv")) == "pump-never-meets"
    blocked = replace(PROFILE, bore_band_mm=replace(PROFILE.bore_band_mm, value=4.0))
    assert refused(straight(), coolant(), blocked) == "flow-blocked"


def test_hot_water_under_pressure_is_all_right():
    measure_flow(straight(), coolant(inlet_c=140.0, pressure_bar=6.0, flow_l_min=2.0), PROFILE)


def test_a_neck_can_pull_the_pressure_below_vacuum():
    """An own fluid knows no vapour pressure; a neck of 1.5 mm at 18 m/s, sucked through, has no pressure left."""
    places = {"in": (0, 0, 0), "A": (50, 0, 0), "B": (60, 0, 0), "out": (110, 0, 0)}
    pipes = {"B1": ("in", "A", 6.0), "B2": ("A", "B", 1.5), "B3": ("B", "out", 6.0)}
    plan = make_plan(places, pipes, {"in": Role.IN, "out": Role.OUT})
    thin = FluidSettings(FluidKind.OWN, own=OwnFluid(998.0, 1.0, 0.6, 4180.0))
    blown = measure_flow(plan, coolant(flow_l_min=1.9, fluid=thin), PROFILE)
    assert 0.5 < blown.static_least_bar < 1.01 and blown.static_least_in == "B2"
    sucked = coolant(flow_l_min=1.9, fluid=thin, pressure_bar=blown.supplies[0].drop_bar - 0.95)
    assert refused(plan, sucked) == "pressure-negative"


def test_a_piece_with_only_one_kind_of_port_is_disconnected():
    places = {"a": (0, 0, 0), "b": (100, 0, 0), "c": (0, 50, 0), "d": (100, 50, 0)}
    pipes = {"B1": ("a", "b", 4.0), "B2": ("c", "d", 4.0)}
    plan = make_plan(places, pipes, {"a": Role.IN, "b": Role.IN, "c": Role.OUT, "d": Role.OUT})
    assert refused(plan, coolant()) == "flow-disconnected"
    none = make_plan(places, pipes, {"a": Role.ACCESS, "b": Role.ACCESS, "c": Role.ACCESS, "d": Role.ACCESS})
    assert refused(none, coolant()) == "flow-disconnected"


def test_same_input_same_numbers():
    one, two = (measure_flow(ladder(5), coolant(), PROFILE) for _ in range(2))
    assert one.branches == two.branches and one.supplies == two.supplies and one.bands == two.bands


def test_drive_needs_something():
    with pytest.raises(ValueError, match="one of flow"):
        make_drive(replace(coolant(), flow_l_min=None))
