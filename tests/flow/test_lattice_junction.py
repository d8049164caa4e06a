"""Lengths of junction legs at creeping flow against stars solved on the lattice, and a ladder held out."""

import numpy as np
import pytest

from morph.flow.lattice import solve_channel_flow
from morph.flow.lattice_junction import junction_lengths_mm
from morph.solid.channel import make_channel_solid
from tests.flow import tubes

# Angles and bores of the legs, and how many of their own bores they are shorter: three solutions each, own, at 10
# cells across the smallest bore, good to 0.03.
STARS = [
    ((180, 0, 90), (4, 4, 4), (0.13, 0.13, 0.33)),
    ((0, 120, 240), (4, 4, 4), (0.09, 0.09, 0.09)),
    ((180, 0, 60), (4, 4, 4), (-0.16, 0.49, 0.50)),
    ((180, 0, 45), (4, 4, 4), (-0.36, 0.82, 0.83)),
    ((180, 30, -30), (4, 4, 4), (-0.19, 0.50, 0.50)),
    ((0, 90, 200), (4, 4, 4), (0.16, 0.25, -0.01)),
    ((180, 0, 90), (5, 5, 3.5), (0.05, 0.04, 0.51)),
    ((180, 0, 90), (3.5, 3.5, 5), (0.42, 0.40, 0.22)),
    ((180, 0, 90), (5, 3.5, 3.5), (0.09, 0.26, 0.45)),
    ((180, 45, -45), (5, 3.5, 4), (-0.04, 0.37, 0.25)),
    ((180, 60, -60), (4, 4, 4), (0.10, 0.09, 0.08)),
]


def legs(angles_deg):
    angle = np.radians(angles_deg)
    return np.stack([np.cos(angle), np.sin(angle), 0.0 * angle], axis=1)


@pytest.mark.quick
@pytest.mark.parametrize(("angles", "bores", "shorter"), STARS)
def test_stars_solved_on_the_lattice(angles, bores, shorter):
    bore = np.array(bores, float)
    found = junction_lengths_mm(legs(angles), bore) / bore
    assert found == pytest.approx(shorter, abs=0.2)


@pytest.mark.quick
def test_the_rule_misses_the_stars_by_far_less_than_one_length_for_all():
    found, wanted = [], []
    for angles, bores, shorter in STARS:
        bore = np.array(bores, float)
        found += list(junction_lengths_mm(legs(angles), bore) / bore)
        wanted += list(shorter)
    miss = np.array(found) - wanted
    assert np.sqrt(np.mean(miss**2)) < 0.1
    assert np.sqrt(np.mean((0.4 - np.array(wanted)) ** 2)) > 0.25


@pytest.mark.quick
def test_order_size_and_place_in_space_do_not_matter():
    rng = np.random.default_rng(3)
    direction = rng.normal(size=(4, 3))
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    bore = rng.uniform(2.0, 6.0, 4)
    one = junction_lengths_mm(direction, bore)
    turn, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    order = np.array([2, 0, 3, 1])
    assert junction_lengths_mm(direction[order] @ turn, 3.0 * bore[order]) == pytest.approx(3.0 * one[order], rel=1e-9)


def star_network(plan):
    """Total of a network of round tubes whose junction legs are cut by the rule; own solution of the linear equations."""
    number = {node.id: i for i, node in enumerate(plan.nodes)}
    ends = {}
    for row, branch in enumerate(plan.branches):
        for side, node in enumerate((branch.start, branch.end)):
            points = branch.xyz_mm if side == 0 else branch.xyz_mm[::-1]
            bores = branch.bore_mm if side == 0 else branch.bore_mm[::-1]
            unit = points[3] - points[0]
            ends.setdefault(node, []).append((row, side, unit / np.linalg.norm(unit), bores[0]))
    cut = np.zeros((len(plan.branches), 2))
    for meeting in ends.values():
        if len(meeting) > 2:
            lengths = junction_lengths_mm(np.array([leg[2] for leg in meeting]), np.array([leg[3] for leg in meeting]))
            for leg, length in zip(meeting, lengths, strict=True):
                cut[leg[0], leg[1]] = length
    matrix = np.zeros((len(number), len(number)))
    conductance = []
    for row, branch in enumerate(plan.branches):
        bore = float(branch.bore_mm[0])
        g = np.pi * bore**4 / 128.0 / (branch.length_mm - cut[row].sum())
        a, b = number[branch.start], number[branch.end]
        matrix[[a, b], [a, b]] += g
        matrix[[a, b], [b, a]] -= g
        conductance.append(g)
    held = {number[exit_.node]: float(exit_.role == "in") for exit_ in plan.exits}
    free = [i for i in range(len(number)) if i not in held]
    pressure = np.zeros(len(number))
    pressure[list(held)] = list(held.values())
    pressure[free] = np.linalg.solve(matrix[np.ix_(free, free)], -matrix[free] @ pressure)
    flow = [
        g * (pressure[number[b.start]] - pressure[number[b.end]])
        for g, b in zip(conductance, plan.branches, strict=True)
    ]
    at_ports = [abs(q) for q, b in zip(flow, plan.branches, strict=True) if b.id.startswith("L-")]
    return np.array(flow), 0.5 * sum(at_ports)


def test_ladders_held_out_of_the_fit():
    """Total within 2 % and split within 1.5 % of the lattice; with 0.4 bores off every leg they miss by 9 to 15 %."""
    plan, blank = tubes.ladder((4.0, 3.5, 4.5))
    found = solve_channel_flow(make_channel_solid(plan, blank, 0.25).trimmed, plan, 10.0)
    flow, total = star_network(plan)
    assert found.total_mm3 == pytest.approx(total, rel=0.02)
    assert np.abs(found.branch_mm3 / found.total_mm3 - flow / total).max() < 0.015
