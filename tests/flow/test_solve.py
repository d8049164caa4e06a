"""The solver against published networks, hand calculations and EPANET, each with the law that network was published with."""

import numpy as np
import pytest

from morph.core.errors import FlowError
from morph.flow.grid import Grid, PressureSystem, make_grid
from morph.flow.pipe_law import PipeLaw, straight_pipes
from morph.flow.solve import solve_grid
from tests.flow.epanet import EpanetLaw, random_case, solve_epanet

pytestmark = pytest.mark.quick

N2_NODES = {name: k for k, name in enumerate("ABCDEFGH")}
N2_ENDS = [(N2_NODES[a], N2_NODES[b]) for a, b in ["AB", "BC", "CD", "ED", "AE", "DF", "FG", "EG", "CH", "HF"]]
N2_BORE_M = np.array([0.3, 0.2, 0.2, 0.2, 0.2, 0.15, 0.25, 0.15, 0.15, 0.25])
N2_LENGTH_M = np.array([250.0, 100, 125, 125, 100, 100, 125, 100, 100, 125])
N2_F = np.array([0.01879, 0.02075, 0.02075, 0.02075, 0.02075, 0.02233, 0.01964, 0.02233, 0.02233, 0.01964])
N2_M3_S = [0.0383, 0.0383, 0.0232, 0.0258, 0.0417, 0.0090, 0.0041, 0.0159, 0.0151, -0.0049]
N3_M3_S = [0.0382, 0.0382, 0.0230, 0.0258, 0.0418, 0.0088, 0.0040, 0.0160, 0.0152, -0.0048]
"""Open worked example of a pipe network package, flows after three rounds: to 2.5e-4 m3/s."""


class PowerLaw:
    """Drop r |Q|^n, its slope held above 0 at rest."""

    def __init__(self, resistance, power, typical):
        self.resistance, self.power, self.typical = np.asarray(resistance, dtype=float), power, typical

    def typical_flow(self):
        return np.full(len(self.resistance), self.typical)

    def drop(self, flow):
        size = np.maximum(np.abs(flow), 1e-9 * self.typical)
        rate = self.resistance * size ** (self.power - 1.0)
        return rate * flow, self.power * rate


def n2_demand():
    fed = np.zeros(8)
    fed[N2_NODES["A"]], fed[N2_NODES["D"]], fed[N2_NODES["G"]] = 0.08, -0.04, -0.02
    return fed


def test_three_loop_network_with_given_friction_factors():
    law = PowerLaw(8.0 * N2_F * N2_LENGTH_M * 1000.0 / (np.pi**2 * N2_BORE_M**5), 2.0, 0.01)
    assert law.resistance[0] / (1000.0 * 9.81) == pytest.approx(159.7828, rel=2e-3)  # K1 of the example, in m
    state = solve_grid(make_grid(8, N2_ENDS, [N2_NODES["H"]]), law, np.zeros(1), n2_demand())
    assert state.flow == pytest.approx(N2_M3_S, abs=2.5e-4)


def test_three_loop_network_with_roughness_and_water_at_20_c():
    law = PipeLaw(straight_pipes(N2_LENGTH_M, N2_BORE_M, 0.25e-3), 998.2, 1.0016e-3)
    state = solve_grid(make_grid(8, N2_ENDS, [N2_NODES["H"]]), law, np.zeros(1), n2_demand())
    assert state.flow == pytest.approx(N3_M3_S, abs=2.5e-4)


def test_two_loop_network_of_alperovits_and_shamir():
    """Alperovits and Shamir 1977, Water Resour. Res. 13; heads as in Savic and Walters 1997; flows by EPANET."""
    ends = [(0, 1), (1, 2), (1, 3), (3, 4), (3, 5), (5, 6), (2, 4), (6, 4)]
    bore = 0.0254 * np.array([18.0, 10, 16, 4, 16, 10, 10, 1])
    law = PowerLaw(10.6668 * 1000.0 / (130.0**1.852 * bore**4.871), 1.852, 0.05)
    demand = np.array([0.0, 100, 100, 120, 270, 330, 200]) / 3600.0
    state = solve_grid(make_grid(7, ends, [0]), law, np.array([210.0]), -demand)
    head = state.pressure[1:] - np.array([150.0, 160, 155, 150, 165, 160])
    assert head == pytest.approx([53.25, 30.46, 43.45, 33.81, 30.44, 30.55], abs=0.05)
    flow = [1120.00, 336.87, 683.13, 32.57, 530.56, 200.56, 236.87, 0.56]
    assert state.flow * 3600.0 == pytest.approx(flow, rel=1e-3, abs=0.01)


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("millimetres", [False, True])
def test_same_flows_as_epanet_under_its_own_law(seed, millimetres):
    case = random_case(seed, 20 + 12 * seed, millimetres)
    flow = solve_epanet(case)
    state = solve_grid(case.grid, EpanetLaw(case), case.head_m, -case.demand_m3_s)
    assert np.abs(state.flow - flow).max() <= 1e-4 * np.abs(flow).max()


def test_flow_parts_by_resistance_as_by_hand():
    """Two laminar pipes in parallel, one twice as long: 2 : 1; a third in series sees all of it."""
    law = PipeLaw(straight_pipes(np.array([1.0, 2.0, 1.0]), np.full(3, 0.01)), 1000.0, 1e-3)
    state = solve_grid(make_grid(3, [(0, 1), (0, 1), (1, 2)], [2]), law, np.zeros(1), np.array([3e-6, 0.0, 0.0]))
    assert state.flow == pytest.approx([2e-6, 1e-6, 3e-6], rel=1e-9)
    poiseuille = 128.0 * 1e-3 / (np.pi * 0.01**4)
    assert state.pressure == pytest.approx([poiseuille * 5e-6, poiseuille * 3e-6, 0.0], rel=1e-9)


def test_pieces_without_a_fixed_pressure_stand_still():
    law = PipeLaw(straight_pipes(np.ones(3), np.full(3, 0.01)), 1000.0, 1e-3)
    grid = make_grid(5, [(0, 1), (2, 3), (3, 4)], [1])
    state = solve_grid(grid, law, np.zeros(1), np.array([1e-6, 0, 0, 0, 0]))
    assert state.flow.tolist() == [pytest.approx(1e-6), 0.0, 0.0]
    assert state.reached.tolist() == [True, True, False, False, False]
    with pytest.raises(FlowError) as caught:
        solve_grid(grid, law, np.zeros(1), np.array([1e-6, 0, 1e-6, 0, 0]))
    assert caught.value.code == "flow-disconnected"


def test_a_law_that_is_no_number_ends_with_its_code():
    law = PowerLaw([np.nan], 2.0, 0.01)
    with pytest.raises(FlowError) as caught:
        solve_grid(make_grid(2, [(0, 1)], [1]), law, np.zeros(1), np.array([1e-6, 0.0]))
    assert caught.value.code == "flow-not-converged"


def test_dead_ends_loops_at_one_node_and_parallel_pipes_are_all_right():
    law = PipeLaw(straight_pipes(np.ones(5), np.full(5, 0.01)), 1000.0, 1e-3)
    grid = make_grid(4, [(0, 1), (0, 1), (1, 2), (1, 1), (2, 3)], [2])
    state = solve_grid(grid, law, np.zeros(1), np.array([2e-6, 0.0, 0.0, 0.0]))
    assert state.flow == pytest.approx([1e-6, 1e-6, 2e-6, 0.0, 0.0], abs=1e-15)


def test_everything_at_rest_is_a_solution():
    law = PipeLaw(straight_pipes(np.ones(2), np.full(2, 0.01)), 1000.0, 1e-3)
    state = solve_grid(make_grid(3, [(0, 1), (1, 2)], [0, 2]), law, np.array([5.0, 5.0]))
    assert state.flow.tolist() == [0.0, 0.0] and state.pressure.tolist() == [5.0, 5.0, 5.0]


def random_network(seed):
    """A random tree with more pipes thrown in; bores of 1 to 30 mm, lengths of 1 mm to 1 m, 1 Pa to 10 bar."""
    random = np.random.default_rng(seed)
    n = int(random.integers(2, 60))
    tree = np.array([[random.integers(0, k), k] for k in range(1, n)]).reshape(-1, 2)
    ends = np.concatenate([tree, random.integers(0, n, (int(random.integers(0, 2 * n)), 2))])
    m = len(ends)
    bore = 10.0 ** random.uniform(-3.0, -1.5, m)
    pipes = straight_pipes(
        10.0 ** random.uniform(-3.0, 0.0, m), bore, bore * random.uniform(0.0, 0.05, m), random.uniform(0.0, 5.0, m)
    )
    law = PipeLaw(pipes, random.uniform(700.0, 1300.0), 10.0 ** random.uniform(-3.5, -0.5))
    fixed = random.choice(n, int(random.integers(1, min(n, 4) + 1)), replace=False)
    fed = np.where(random.random(n) < 0.3, random.normal(size=n) * 10.0 ** random.uniform(-8.0, -3.0), 0.0)
    fed[fixed] = 0.0
    return (
        Grid(n, ends[:, 0], ends[:, 1], fixed),
        law,
        random.uniform(0.0, 10.0 ** random.uniform(0.0, 6.0), len(fixed)),
        fed,
    )


def check_random_networks(seeds):
    for seed in seeds:
        grid, law, pressure, fed = random_network(seed)
        state = solve_grid(grid, law, pressure, fed)
        free = np.setdiff1d(np.arange(grid.n_nodes), grid.fixed)
        scale = max(np.abs(state.flow).max(initial=0.0), np.abs(fed).max())
        assert np.abs((grid.leaving(state.flow) - fed)[free]).max(initial=0.0) <= 1e-9 * scale, seed
        drop, _ = law.drop(state.flow)
        left = drop - (state.pressure[grid.start] - state.pressure[grid.end])
        assert np.abs(left).max(initial=0.0) <= 1e-6 * max(np.abs(state.pressure).max(), 1e-300), seed


def test_random_networks_from_rest_balance():
    check_random_networks(range(300))


@pytest.mark.slow
def test_ten_thousand_random_networks_from_rest_balance():
    check_random_networks(range(10_000))


def test_factor_solves_like_a_dense_solver():
    for seed in range(5):
        random = np.random.default_rng(seed)
        grid, _, _, _ = random_network(seed + 1000)
        system = PressureSystem(grid)
        conductance = np.where(system.live, random.uniform(0.1, 10.0, grid.n_pipes), 0.0)
        assert system.factor(conductance) == -1
        dense = np.zeros((grid.n_nodes, grid.n_nodes))
        for a, b, g in zip(grid.start, grid.end, conductance, strict=True):
            dense[a, a] += g
            dense[b, b] += g
            dense[a, b] -= g
            dense[b, a] -= g
        inner = dense[np.ix_(system.free, system.free)]
        right = random.normal(size=len(system.free))
        assert system.solve(right) == pytest.approx(np.linalg.solve(inner, right), rel=1e-9)
