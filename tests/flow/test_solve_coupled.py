"""Networks with junction losses: every random one settles from rest, and the solution balances."""

import numpy as np
import pytest

from morph.body.flow_path import through_openings
from morph.core.errors import FlowError
from morph.flow.grid import Grid, PressureSystem, make_grid
from morph.flow.junction import JunctionLaw
from morph.flow.network import pad_junctions
from morph.flow.pipe_law import PipeLaw, straight_pipes
from morph.flow.solve_coupled import CoupledSystem, solve_coupled

pytestmark = pytest.mark.quick


def random_channels(seed):
    """Nodes scattered on a plate, bores of 2 to 9 mm, up to five ports at pressures from 1 Pa to 3 bar."""
    random = np.random.default_rng(seed)
    n = int(random.integers(4, 40))
    place = random.uniform(0.0, 1.0, (n, 3)) * [0.1, 0.1, 0.01]
    tree = np.array([[random.integers(0, k), k] for k in range(1, n)])
    extra = random.integers(0, n, (int(random.integers(0, n)), 2))
    ends = np.concatenate([tree, extra[extra[:, 0] != extra[:, 1]]])
    m = len(ends)
    along = place[ends[:, 1]] - place[ends[:, 0]]
    length = np.linalg.norm(along, axis=1)
    pipes = straight_pipes(length, random.uniform(2e-3, 9e-3, m), random.uniform(0.0, 5e-5, m))
    fixed = random.choice(n, int(random.integers(2, min(n, 5) + 1)), replace=False)
    through = through_openings(n, [(int(a), int(b)) for a, b in ends], [int(k) for k in fixed])
    legs: dict[int, list] = {}
    for e in np.flatnonzero(through):
        heading = along[e] / length[e]
        for node, sign in ((int(ends[e, 0]), -1.0), (int(ends[e, 1]), 1.0)):
            legs.setdefault(node, []).append((int(e), sign, -sign * heading, int(e)))
    kept = {node: rows for node, rows in sorted(legs.items()) if len(rows) > 1 and node not in fixed}
    pressure = 10.0 ** random.uniform(0.0, 5.5) * random.uniform(0.0, 1.0, len(fixed))
    return Grid(n, ends[:, 0], ends[:, 1], fixed), pipes, pad_junctions(kept, pipes.area_m2), pressure


def check(seeds):
    for seed in seeds:
        grid, pipes, legs, pressure = random_channels(seed)
        law, joined = PipeLaw(pipes, 998.0, 1e-3), JunctionLaw(legs, 998.0, grid.n_pipes)
        try:
            state = solve_coupled(CoupledSystem(PressureSystem(grid), joined), law, pressure)
        except FlowError as error:
            pytest.fail(f"seed {seed}: {error}")
        drop = law.drop(state.flow)[0] + joined.drop(state.flow)
        left = drop - (state.pressure[grid.start] - state.pressure[grid.end])
        assert np.abs(left).max() <= 1e-6 * np.abs(pressure).max(), seed
        free = np.setdiff1d(np.arange(grid.n_nodes), grid.fixed)
        scale = np.abs(state.flow).max()
        assert np.abs(grid.leaving(state.flow)[free]).max(initial=0.0) <= 1e-9 * scale, seed


def test_random_channels_with_junctions_settle_from_rest():
    check(range(60))


@pytest.mark.slow
def test_two_thousand_random_channels_with_junctions_settle_from_rest():
    check(range(2000))


def test_starting_from_another_solution_ends_at_the_same():
    grid, pipes, legs, pressure = random_channels(1)
    law, coupled = (
        PipeLaw(pipes, 998.0, 1e-3),
        CoupledSystem(PressureSystem(grid), JunctionLaw(legs, 998.0, grid.n_pipes)),
    )
    cold = solve_coupled(coupled, law, pressure)
    other = solve_coupled(coupled, law, 1.1 * pressure)
    warm = solve_coupled(coupled, law, pressure, start_flow=other.flow)
    assert warm.flow == pytest.approx(cold.flow, abs=1e-8 * np.abs(cold.flow).max())
    assert warm.rounds < cold.rounds


class Jump:
    """A coupling without any solution near: the drop jumps where the flow passes 1."""

    def drop(self, flow):
        return np.where(flow > 1.0, 10.0, 0.0)

    def pattern(self):
        return np.zeros(1, dtype=np.int64), np.zeros(1, dtype=np.int64)

    def slopes(self, flow):
        return np.zeros(1)


class Line:
    def typical_flow(self):
        return np.ones(1)

    def drop(self, flow):
        return flow * 1.0, np.ones(1)


def test_what_has_no_solution_ends_with_its_code():
    with pytest.raises(FlowError) as caught:
        solve_coupled(
            CoupledSystem(PressureSystem(make_grid(2, [(0, 1)], [0, 1])), Jump()), Line(), np.array([5.0, 0.0])
        )
    assert caught.value.code == "flow-not-converged"
