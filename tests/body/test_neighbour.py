"""Distances between channels against brute force, and which pairs are walls and which a junction's web."""

import math

import numpy as np
import pytest
from scipy.spatial import cKDTree

from morph.body.neighbour import (
    Strand,
    count_as_wall,
    distance_to_strand_mm,
    make_network,
    near_pairs,
    polyline_arc_mm,
    room_beside,
    way_between_mm,
    way_from_node_mm,
)

pytestmark = pytest.mark.quick

WALL = 3.2


def strand(name, start, end, points, bore=4.0, spacing=0.5):
    points = np.asarray(points, dtype=float)
    arc = polyline_arc_mm(points)
    at = np.linspace(0.0, arc[-1], max(2, math.ceil(arc[-1] / spacing) + 1))
    fine = np.column_stack([np.interp(at, arc, points[:, k]) for k in range(3)])
    return Strand(name, start, end, fine, polyline_arc_mm(fine), np.full(len(fine), bore))


def fork(angle_deg, length=60.0, bore=4.0):
    """Two straight channels from one node, `angle_deg` apart."""
    turn = math.radians(angle_deg)
    far = (length * math.cos(turn), length * math.sin(turn), 0)
    return make_network(
        [strand("A", 0, 1, [(0, 0, 0), (length, 0, 0)], bore), strand("B", 0, 2, [(0, 0, 0), far], bore)], 3
    )


def walls(network, wall=WALL):
    pairs = near_pairs(network, float(network.bore_mm.max()) + wall + 1.0)
    return pairs.only(count_as_wall(network, pairs, wall))


def test_parallel_channels_are_their_distance_apart():
    # Samples of the second are shifted by half their spacing: the distance is to the line, not to the sample.
    network = make_network(
        [strand("A", 0, 1, [(0, 0, 0), (50, 0, 0)]), strand("B", 2, 3, [(0.25, 6, 0), (50.25, 6, 0)])], 4
    )
    pairs = walls(network)
    assert pairs.distance_mm.min() == pytest.approx(6.0, abs=1e-12)
    room, by = room_beside(network, pairs, WALL)
    # b <= 2 (6 - wall) - 4.
    middle = slice(20, 80)
    np.testing.assert_allclose(room[:101][middle], 2 * (6 - WALL) - 4, atol=1e-9)
    assert (by[:101][middle] == 1).all() and (by[101:][middle] == 0).all()


def test_crossing_channels_agree_with_the_distance_of_skew_lines():
    network = make_network(
        [strand("A", 0, 1, [(-30, 0, 0), (30, 0, 0)]), strand("B", 2, 3, [(-29.8, -17, 5), (29.8, 17, 5)])], 4
    )
    assert walls(network).distance_mm.min() == pytest.approx(5.0, abs=1e-3)


def test_distances_agree_with_brute_force_on_random_curves():
    rng = np.random.default_rng(8)
    strands = []
    for k in range(6):
        t = np.linspace(0, 1, 60)[:, None]
        control = rng.uniform(0, 30, (4, 3))
        points = (
            (1 - t) ** 3 * control[0]
            + 3 * t * (1 - t) ** 2 * control[1]
            + 3 * t**2 * (1 - t) * control[2]
            + t**3 * control[3]
        )
        strands.append(strand(f"S{k}", 2 * k, 2 * k + 1, points, spacing=0.4))
    network = make_network(strands, 12)
    pairs = near_pairs(network, 8.0)
    best = {}
    for i, j, d in zip(network.owner[pairs.i], network.owner[pairs.j], pairs.distance_mm, strict=True):
        if i != j:
            best[i, j] = min(best.get((i, j), np.inf), d)
    checked = 0
    for (i, j), found in best.items():
        fine = [
            np.column_stack([np.interp(np.linspace(0, s.arc_mm[-1], 4000), s.arc_mm, s.xyz_mm[:, k]) for k in range(3)])
            for s in (strands[i], strands[j])
        ]
        reference = cKDTree(fine[1]).query(fine[0])[0].min()
        if reference < 7.0:
            checked += 1
            # Sample against polyline: exact for parallel runs, late by at most spacing^2 / (8 d) where they cross.
            # The reference itself is a minimum over points about 0.01 mm apart.
            assert reference - 2e-3 <= found <= reference + 0.4**2 / (8 * max(reference, 0.5)) + 0.02
    assert checked >= 5


def test_distance_to_a_strand_is_to_its_two_pieces():
    network = make_network([strand("A", 0, 1, [(0, 0, 0), (10, 0, 0)], spacing=1.0)], 2)
    points = np.array([[4.6, 3.0, 0.0], [-4.0, 3.0, 0.0], [12.0, 0.0, 0.0]])
    np.testing.assert_allclose(distance_to_strand_mm(network, points, np.array([5, 0, 10])), [3.0, 5.0, 2.0])


@pytest.mark.parametrize("angle", [20, 30, 40, 60, 90, 120, 180])
def test_a_fork_has_no_wall(angle):
    """Straight channels that part from one node: near it they are one web, further out they are far apart."""
    pairs = walls(fork(angle))
    needed = 4.0 + WALL
    assert (pairs.distance_mm >= needed - 1e-9).all() if len(pairs.i) else True


def test_a_slit_of_a_fork_does_have_a_wall():
    """At 8 degrees the two channels run side by side for long: that is no longer a junction."""
    pairs = walls(fork(8))
    assert pairs.distance_mm.min() < 4.0 + WALL


def test_channels_that_part_and_come_back_have_a_wall():
    """A Y whose arms open to 12 mm and then run parallel 5 mm apart: the wall is found at the parallel part only."""
    upper = [(0, 0, 0), (10, 6, 0), (14, 2.5, 0), (50, 2.5, 0)]
    lower = [(x, -y, z) for x, y, z in upper]
    network = make_network([strand("A", 0, 1, upper), strand("B", 0, 2, lower)], 3)
    pairs = walls(network)
    close = pairs.distance_mm < 4.0 + WALL - 1e-9
    assert pairs.distance_mm.min() == pytest.approx(5.0, abs=1e-9)
    assert network.xyz_mm[pairs.i[close], 0].min() > 10.0


def test_a_hairpin_has_a_wall_between_its_legs():
    turn = np.linspace(-np.pi / 2, np.pi / 2, 40)
    bend = np.column_stack([40 + 2.5 * np.cos(turn), 2.5 * np.sin(turn), 0 * turn])
    hairpin = np.concatenate([[(0, -2.5, 0)], bend, [(0, 2.5, 0)]])
    network = make_network([strand("A", 0, 1, hairpin)], 2)
    pairs = walls(network)
    assert pairs.distance_mm.min() == pytest.approx(5.0, abs=1e-3)
    assert network.xyz_mm[pairs.i, 0].max() < 40.0


def test_ways_follow_the_shortest_route_through_the_network():
    network = make_network(
        [
            strand("A", 0, 1, [(0, 0, 0), (10, 0, 0)]),
            strand("B", 1, 2, [(10, 0, 0), (10, 6, 0)]),
            strand("C", 0, 2, [(0, 0, 0), (0, 30, 0), (10, 30, 0), (10, 6, 0)]),
        ],
        3,
    )
    a, b, c = (int(network.first[k]) for k in range(3))
    assert way_between_mm(network, np.array([a]), np.array([b + 12]))[0] == pytest.approx(16.0)
    # 4 mm up C from node 0, to 2 mm along A: by node 0.
    assert way_between_mm(network, np.array([a + 4]), np.array([c + 8]))[0] == pytest.approx(6.0)
    # Along one strand the way round may be the shorter one.
    last = int(network.first[3]) - 1
    assert way_between_mm(network, np.array([c]), np.array([last]))[0] == pytest.approx(16.0)
    assert way_from_node_mm(network, 2, np.array([a]))[0] == pytest.approx(16.0)


def test_pieces_that_are_not_connected_always_count():
    network = make_network([strand("A", 0, 1, [(0, 0, 0), (2, 0, 0)]), strand("B", 2, 3, [(0, 5, 0), (2, 5, 0)])], 4)
    assert len(walls(network).i) > 0


def test_an_eye_that_opens_wide_has_only_webs_at_its_corners():
    """Two branches between the same nodes, 12 mm apart in the middle, meeting at about 30 degrees: no wall."""
    t = np.linspace(0.0, 1.0, 60)
    arms = [[(70 * s, sign * 24 * s * (1 - s), 0) for s in t] for sign in (1, -1)]
    network = make_network([strand(n, 0, 1, a) for n, a in zip("AB", arms, strict=True)], 2)
    pairs = walls(network)
    assert (pairs.distance_mm >= 4.0 + WALL - 1e-9).all()


def test_an_eye_that_never_opens_is_one_long_thin_wall():
    t = np.linspace(0.0, 1.0, 60)
    arms = [[(70 * s, sign * 12 * s * (1 - s), 0) for s in t] for sign in (1, -1)]
    network = make_network([strand(n, 0, 1, a) for n, a in zip("AB", arms, strict=True)], 2)
    pairs = walls(network)
    # 6 mm apart at most, 7.2 needed.
    assert (pairs.distance_mm < 4.0 + WALL).sum() > 50
