"""Creeping flow through closed tubes against closed forms, and what the lattice must refuse.

Hagen-Poiseuille: Q = pi D^4 / (128 L) dp / viscosity. Bends: below a Dean number of about 11.6 a bend resists like
the straight pipe of its length (C. M. White 1929, Proc. Roy. Soc. A 123, 645).
"""

from dataclasses import replace

import numpy as np
import pytest

from morph.core.errors import FlowError
from morph.core.progress import SILENT
from morph.flow.lattice import solve_channel_flow
from morph.flow.lattice_domain import make_domain, predict_bytes
from morph.flow.lattice_guide import make_guide
from morph.geometry.mesh import Mesh, mesh_volume_mm3
from tests.flow import tubes

BORE = 4.0


def poiseuille_mm3(length_mm, bore_mm=BORE):
    return np.pi * bore_mm**4 / (128.0 * length_mm)


@pytest.mark.parametrize("direction", [(1, 0, 0), (0, 1, 0), (0, 0, 1), (1, 1, 0), (1, 1, 1), (3, 1, 0), (5, 2, 1.3)])
def test_straight_tube_at_twelve_cells_per_bore(direction):
    """Within 1.5 % along the grid and oblique to it."""
    mesh, plan = tubes.straight(direction, 40.0, BORE)
    found = solve_channel_flow(mesh, plan, 12.0)
    assert found.total_mm3 == pytest.approx(poiseuille_mm3(40.0), rel=0.015)
    assert abs(found.imbalance) < 5e-4
    assert found.share["L-out"] == pytest.approx(1.0, abs=5e-4)
    assert found.share["L-in"] == pytest.approx(-1.0, abs=5e-4)
    assert found.port_mm3[0] > 0.0 > found.port_mm3[1]


def test_the_error_falls_with_the_cells():
    """Mean over four directions: the walls' error falls at least in proportion to the cell, in effect faster."""
    directions = [(1, 0, 0), (1, 1, 0), (3, 1, 0), (5, 2, 1.3)]
    worst = []
    for cells in (6.0, 9.0, 18.0):
        errors = [
            abs(solve_channel_flow(*tubes.straight(d, 24.0, BORE), cells).total_mm3 / poiseuille_mm3(24.0) - 1.0)
            for d in directions
        ]
        worst.append(max(errors))
    assert worst[2] < 0.008 and worst[2] < 0.4 * worst[0], worst


@pytest.mark.parametrize("length_mm", [16.0, 80.0])
def test_ends_cost_nothing(length_mm):
    """A short tube resists per length like a long one: the openings add no length of their own."""
    mesh, plan = tubes.straight((1, 0.2, 0.1), length_mm, BORE)
    assert solve_channel_flow(mesh, plan, 12.0).total_mm3 == pytest.approx(poiseuille_mm3(length_mm), rel=0.012)


@pytest.mark.parametrize("bores_per_radius", [2.0, 4.0])
def test_a_bend_resists_like_the_straight_tube_of_its_length(bores_per_radius):
    mesh, plan, length = tubes.bend(bores_per_radius * BORE, 270.0, BORE)
    found = solve_channel_flow(mesh, plan, 10.0)
    assert found.total_mm3 == pytest.approx(poiseuille_mm3(length), rel=0.01)


def test_flow_is_the_same_whichever_way_and_wherever_the_part_lies():
    mesh, plan = tubes.straight((5, 2, 1.3), 24.0, BORE)
    one = solve_channel_flow(mesh, plan, 8.0)
    back = solve_channel_flow(mesh, tubes.with_roles(plan, "out", "in"), 8.0)
    assert back.total_mm3 == pytest.approx(one.total_mm3, rel=2e-3)
    assert back.share["L-out"] == pytest.approx(-one.share["L-out"], abs=5e-4)


def test_a_tube_twice_as_large_lets_eight_times_as_much_through():
    """Flow times viscosity over pressure drop goes with the cube of the size; the cells are the same."""
    mesh, plan = tubes.straight((3, 1, 0), 24.0, BORE)
    branches = tuple(replace(b, xyz_mm=2.0 * b.xyz_mm, bore_mm=2.0 * b.bore_mm) for b in plan.branches)
    nodes = tuple(replace(n, xyz_mm=2.0 * n.xyz_mm) for n in plan.nodes)
    exits = tuple(replace(e, xyz_mm=2.0 * e.xyz_mm, bore_mm=2.0 * e.bore_mm) for e in plan.exits)
    doubled = replace(plan, branches=branches, nodes=nodes, exits=exits)
    one = solve_channel_flow(mesh, plan, 8.0)
    two = solve_channel_flow(Mesh(2.0 * mesh.vertices_mm, mesh.triangles), doubled, 8.0)
    assert two.n_cells == one.n_cells
    assert two.total_mm3 == pytest.approx(8.0 * one.total_mm3, rel=1e-5)


def test_one_or_two_threads_give_the_same_bytes():
    import numba

    mesh, plan = tubes.straight((5, 2, 1.3), 16.0, BORE)
    threads, found = numba.get_num_threads(), []
    try:
        for n in (1, min(2, numba.config.NUMBA_NUM_THREADS)):
            numba.set_num_threads(n)
            found.append(solve_channel_flow(mesh, plan, 8.0))
    finally:
        numba.set_num_threads(threads)
    assert found[0].branch_mm3.tobytes() == found[1].branch_mm3.tobytes()
    assert found[0].port_mm3.tobytes() == found[1].port_mm3.tobytes()


def test_cells_fill_the_solid_and_walls_stand_where_the_mesh_has_them():
    mesh, plan = tubes.straight((5, 2, 1.3), 24.0, BORE)
    domain = make_domain(mesh, plan, 0.25, SILENT)
    assert domain.n_cells * 0.25**3 == pytest.approx(mesh_volume_mm3(mesh), rel=3e-3)
    unit = np.array([5, 2, 1.3]) / np.linalg.norm([5, 2, 1.3])
    from morph.kernels.lattice import DIRECTIONS

    wall = domain.link_opening < 0
    way = -DIRECTIONS[domain.link_direction[wall]]
    at = domain.places_mm[domain.link_cell[wall]] + 0.25 * domain.link_fraction[wall, None] * way
    across = np.linalg.norm(at - (at @ unit)[:, None] * unit, axis=1)
    assert np.abs(across - 0.5 * BORE).max() < 0.01
    assert sorted(set(domain.link_opening[~wall].tolist())) == [0, 1]


def test_cells_stand_on_the_nearest_place_of_the_centreline():
    mesh, plan = tubes.straight((1, 0, 0), 24.0, BORE)
    domain = make_domain(mesh, plan, 0.4, SILENT)
    guide = make_guide(plan, domain)
    along = guide.spread(_place_of_nodes(guide, plan))
    assert np.abs(along - domain.places_mm[:, 0]).max() < 1e-6


def _place_of_nodes(guide, plan):
    """x of each node of the guide: those of the plan, then the ones between, evenly spaced on each branch."""
    place = [float(node.xyz_mm[0]) for node in plan.nodes]
    for row, branch in enumerate(plan.branches):
        n = int((guide.branch == row).sum())
        place += list(np.linspace(branch.xyz_mm[0, 0], branch.xyz_mm[-1, 0], n + 1)[1:-1])
    return np.array(place)


@pytest.mark.parametrize("cells", [3.9, 0.0, -1.0, float("nan"), float("inf")])
def test_too_few_cells_are_refused(cells):
    with pytest.raises(FlowError) as caught:
        solve_channel_flow(*tubes.straight((1, 0, 0), 16.0, BORE), cells)
    assert caught.value.code == "lattice-too-coarse"


def test_a_lattice_that_would_not_fit_is_refused_before_it_is_made():
    mesh, plan = tubes.straight((1, 0, 0), 40.0, BORE)
    cells, size = predict_bytes(mesh, 0.005)
    assert cells > 1e9 and size > 1e11
    with pytest.raises(FlowError) as caught:
        solve_channel_flow(mesh, plan, BORE / 0.005)
    assert caught.value.code == "lattice-too-large"


def test_a_port_without_an_open_end_is_named():
    mesh, plan = tubes.straight((1, 0, 0), 24.0, BORE)
    moved = replace(plan.exits[1], xyz_mm=plan.exits[1].xyz_mm + np.array([0.0, 10.0, 0.0]))
    with pytest.raises(FlowError) as caught:
        solve_channel_flow(mesh, replace(plan, exits=(plan.exits[0], moved)), 8.0)
    assert caught.value.code == "lattice-no-opening" and "out" in caught.value.where


def test_flows_that_never_settle_are_said(monkeypatch):
    import morph.flow.lattice as lattice

    monkeypatch.setattr(lattice, "MOST_ROUNDS", 2)
    with pytest.raises(FlowError) as caught:
        solve_channel_flow(*tubes.straight((1, 0, 0), 16.0, BORE), 6.0)
    assert caught.value.code == "lattice-not-settled"
