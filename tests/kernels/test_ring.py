"""Rings: frames, points on the wall against root finding on the field, ridges against the line they lie on."""

import dataclasses

import numpy as np
import pytest
from scipy.optimize import brentq

from morph.body.section import SectionRule
from morph.core.progress import SILENT
from morph.kernels.ring import find_ridge, frame_branch, ring_follows
from morph.kernels.stretch import INSIDE, NO_STRETCH, is_beyond, is_swept
from morph.kernels.swept_ball import piece_distance, piece_gradient, piece_wall
from morph.settings.job import SectionShape
from morph.solid.centreline import AROUND_MM, count_sides, frame_samples, list_samples
from morph.solid.stretch import _place
from morph.solid.sweep import make_sweep
from tests.solid import plans
from tests.solid.exact import exact_field

ROOF = SectionRule(SectionShape.ROOFED, 47.0)


def placed(plan):
    sweep = make_sweep(plan)
    samples = frame_samples(list_samples(plan), plan)
    sides = count_sides(samples)
    offset = np.cumsum(sides) - sides
    points, lean = _place(samples, sweep, sides, offset, SILENT)
    return sweep, samples, sides, offset, points, lean


def climbing_bend():
    """An arc of 14 mm radius that climbs, 5 to 6 mm bore."""
    t = np.linspace(0.0, 1.2, 60)
    xyz = np.column_stack([14 * np.cos(t), 14 * np.sin(t), 9.0 * t])
    return plans.plan_of([plans.branch("B1", "N1", "N2", xyz, 5.0 + t / 1.2)])


@pytest.mark.parametrize("rule", [SectionRule(), ROOF])
def test_ring_points_stand_where_rays_leave_the_field_plus_their_share_of_the_chord(rule):
    plan = dataclasses.replace(climbing_bend(), section=rule)
    sweep, samples, sides, offset, points, _ = placed(plan)
    for r in range(8, 52, 6):
        for k in range(0, sides[r], 5):
            p, c = points[offset[r] + k], samples.xyz_mm[r]
            way = (p - c) / np.linalg.norm(p - c)
            assert abs(way @ samples.tangent[r]) < 1e-9
            wall = brentq(lambda t, c=c, way=way: exact_field(sweep, (c + t * way)[None])[0], 0.5, 8.0, xtol=1e-9)
            surplus = np.linalg.norm(p - c) - wall
            assert -1e-5 < surplus <= 1.3 * AROUND_MM
            if rule is not ROOF:
                edge = 2.0 * np.pi / sides[r] * np.linalg.norm(p - c)
                assert surplus == pytest.approx(edge**2 / 12.0 / samples.radius_mm[r], rel=0.05)


def test_point_0_of_a_roofed_ring_is_on_the_ridge():
    """The ridge of a level straight channel is the line r / cos b above it; on the bend it is the highest sharp place."""
    a, b = np.array([12.0, 12.0, 12.0]), np.array([46.0, 29.0, 12.0])
    plan = plans.plan_of([plans.branch("B1", "N1", "N2", plans.sampled([a, b], 6.0), 6.0)])
    _, samples, _, offset, points, lean = placed(dataclasses.replace(plan, section=ROOF))
    top = samples.xyz_mm + np.array([0.0, 0.0, 3.0 / np.cos(np.radians(47.0))])
    assert np.abs(points[offset] - top).max() < 1e-3 and np.abs(lean).max() < 1e-4
    plan = dataclasses.replace(climbing_bend(), section=ROOF)
    sweep, samples, _, offset, points, lean = placed(plan)
    assert 0.01 < np.abs(lean[10:50]).max() < 0.25
    for r in range(10, 50, 8):
        across = np.cross(samples.tangent[r], samples.side[r])
        step = 1e-3 * across
        slope = exact_field(sweep, points[offset[r]] + np.array([[-2], [-1], [1], [2]]) * step)
        assert (slope[0] - slope[1]) > 3e-4 and (slope[3] - slope[2]) > 3e-4  # it falls away to both sides


def test_a_round_wall_has_no_ridge():
    pieces = make_sweep(plans.straight_pipe()).pieces
    own, way, out = np.arange(len(pieces)), np.empty(3), np.empty(4)
    centre, side, across = np.array([30.0, 20.0, 15.0]), np.array([0.0, 0.0, 1.0]), np.array([0.0, 1.0, 0.0])
    assert find_ridge(centre, side, across, 3.0, 0.2, pieces, own, 0, len(own), way, out) == 0.0


def test_frames_are_square_and_follow_up_where_there_is_a_roof():
    t = np.linspace(0.0, 1.0, 40)[:, None]
    tangent = (1 - t) * np.array([0.0, 0.1, 1.0]) + t * np.array([1.0, 0.2, 0.0])
    tangent /= np.linalg.norm(tangent, axis=1)[:, None]
    for roofed in (0, 1):
        side, turn = np.empty((40, 3)), np.empty(40)
        frame_branch(tangent, np.array([0.0, 0.0, 1.0]), np.full(40, roofed, np.uint8), side, turn)
        assert np.abs((side * tangent).sum(axis=1)).max() < 1e-12
        assert np.linalg.norm(side, axis=1) == pytest.approx(1.0)
        assert turn.max() < 0.05
        if roofed:
            level = np.cross(tangent[-1], [0.0, 0.0, 1.0])
            assert abs(side[-1] @ level) < 1e-12 < side[-1, 2]


def test_strips_keep_to_the_rings_between_and_go_on():
    """Three rings of four points on a bent line: the middle one 0.1 mm outside of the strip."""
    square = np.array([[0, 1, 0], [0, 0, 1], [0, -1, 0], [0, 0, -1.0]])
    points = np.concatenate([square, 1.1 * square + np.array([1, 0, 0]), square + np.array([2, 0, 0])])
    centre, offset = np.array([[0.0, 0, 0], [1, 0, 0], [2, 0, 0]]), np.array([0, 4, 8])
    assert ring_follows(0, 2, 4, offset, points, centre, 0.11, 0.0)
    assert not ring_follows(0, 2, 4, offset, points, centre, 0.09, 1.0)
    points[4:8] = 0.9 * square + np.array([1, 0, 0])
    assert not ring_follows(0, 2, 4, offset, points, centre, 1.0, 0.09)
    assert not ring_follows(2, 0, 4, offset, points, -centre, 1.0, 1.0)  # runs back


def test_one_call_gives_distance_and_gradient():
    pieces = make_sweep(dataclasses.replace(climbing_bend(), section=ROOF)).pieces
    rng = np.random.default_rng(4)
    for point in rng.uniform(-15, 15, (50, 3)):
        i = int(rng.integers(len(pieces)))
        wall = piece_wall(*point, pieces, i)
        assert wall[0] == piece_distance(*point, pieces, i) and wall[1:] == piece_gradient(*point, pieces, i)


def test_what_lies_beyond_a_plane_is_left_to_rings():
    end, planes = np.array([NO_STRETCH, INSIDE, 0]), np.array([[1.0, 0.0, 0.0, 1.0, 0.0, 0.0]])
    assert not is_beyond(9.0, 0.0, 0.0, 1.0, 0, end, planes)
    assert is_beyond(0.0, 0.0, 0.0, 1.0, 1, end, planes)
    assert is_beyond(2.5, 0.0, 0.0, 1.0, 2, end, planes) and not is_beyond(1.5, 0.0, 0.0, 1.0, 2, end, planes)
    assert is_swept(2.5, 0.0, 0.0, 1.0, np.array([1, 2]), 2, end, planes)
    assert not is_swept(2.5, 0.0, 0.0, 1.0, np.array([1, 2, 0]), 3, end, planes)
    assert not is_swept(2.5, 0.0, 0.0, 1.0, np.array([1]), 1, end, np.zeros((0, 6)))
