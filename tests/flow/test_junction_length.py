"""Lengths of junction legs at creeping flow against stars solved on the lattice, and a ladder held out."""

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from morph.flow.junction_length import junction_lengths_mm, without_junctions
from morph.flow.lattice import solve_channel_flow
from morph.flow.lattice_check import creeping_flow_mm3
from morph.flow.network import join_segments, make_network, pad_junctions
from morph.flow.pipe_law import straight_pipes
from morph.settings.job import CoolantSettings
from morph.settings.profile import read_profile
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


def pipes_and_star(angles_deg, bores_mm, lengths_mm):
    """Pipes of two segments each that start in one node."""
    direction = legs(angles_deg)
    rows = [
        straight_pipes(np.array([0.5e-3 * v] * 2), np.array([1e-3 * b] * 2))
        for v, b in zip(lengths_mm, bores_mm, strict=True)
    ]
    joined = dataclasses.replace(join_segments(rows), first=2 * np.arange(len(rows) + 1))
    star = {0: [(e, -1.0, direction[e], 2 * e) for e in range(len(rows))]}
    return joined, pad_junctions(star, joined.area_m2)


@pytest.mark.quick
def test_pipes_lose_what_the_rule_says_at_the_end_that_joins():
    angles, bores, lengths = (180, 30, -30), (4.0, 4.0, 4.0), (20.0, 30.0, 40.0)
    pipes, star = pipes_and_star(angles, bores, lengths)
    cut = without_junctions(pipes, star)
    rule = junction_lengths_mm(legs(angles), np.array(bores))
    assert 1e3 * cut.summed(cut.length_m) == pytest.approx(lengths - rule, rel=1e-12)
    assert rule[0] < 0.0 and 1e3 * cut.length_m[0] == pytest.approx(10.0 - rule[0])  # a stem gets longer, at the node
    assert 1e3 * cut.length_m[1::2] == pytest.approx([10.0, 15.0, 20.0])  # far ends stay
    assert cut.area_m2.tolist() == pipes.area_m2.tolist()


@pytest.mark.quick
def test_a_pipe_inside_its_junction_keeps_a_fifth_and_two_legs_are_no_junction():
    pipes, star = pipes_and_star((180, 0, 90), (8.0, 8.0, 2.0), (30.0, 30.0, 3.0))
    cut = without_junctions(pipes, star)
    assert 1e3 * cut.summed(cut.length_m)[2] == pytest.approx(0.2 * 3.0)
    pipes, line = pipes_and_star((180, 90), (4.0, 4.0), (30.0, 30.0))
    assert without_junctions(pipes, line).length_m.tolist() == pipes.length_m.tolist()


@pytest.mark.parametrize("bores", [(4.0, 3.5, 4.5), (4.0, 4.0, 4.0)])
def test_ladders_held_out_of_the_fit(bores):
    """Total within 2 % and split within 2 % of the lattice; with 0.4 bores off every leg they miss by 9 and 3 %."""
    plan, blank = tubes.ladder(bores)
    found = solve_channel_flow(make_channel_solid(plan, blank, 0.25).trimmed, plan, 10.0)
    network = make_network(plan, CoolantSettings(drop_bar=1.0), read_profile("steel-40um", Path()))
    flow, total = creeping_flow_mm3(network)
    assert found.total_mm3 == pytest.approx(total, rel=0.02)
    assert np.abs(found.branch_mm3 / found.total_mm3 - flow / total).max() < 0.02
