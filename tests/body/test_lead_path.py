"""Paths of lines and arcs against closed forms."""

import math

import numpy as np
import pytest

from morph.body.lead_path import least_bend_radius_mm, make_paths, rough_points, sample_paths, start_corner

pytestmark = pytest.mark.quick


def one(points, radius):
    return make_paths(np.array([points], dtype=float), np.array([float(radius)]))


def test_a_right_angle_by_hand():
    # 20 mm and 30 mm legs, radius 5: lines 15 and 25, a quarter circle.
    path = one([(0, 0, 0), (20, 0, 0), (20, 30, 0)], 5)
    np.testing.assert_allclose(path.pieces[0], [15.0, 5 * math.pi / 2, 25.0])
    points, arc = sample_paths(path, 2001)
    np.testing.assert_allclose(points[0, 0], [0, 0, 0])
    np.testing.assert_allclose(points[0, -1], [20, 30, 0])
    on_arc = (arc[0] > 15) & (arc[0] < 15 + 5 * math.pi / 2)
    np.testing.assert_allclose(np.linalg.norm(points[0, on_arc] - [15, 5, 0], axis=1), 5.0, atol=1e-9)
    chords = np.linalg.norm(np.diff(points[0], axis=0), axis=1)
    assert chords.sum() == pytest.approx(path.lengths()[0], rel=1e-6)
    assert chords.max() == pytest.approx(chords.min(), rel=1e-4)


@pytest.mark.parametrize("seed", range(20))
def test_random_paths_are_smooth_and_bent_no_tighter_than_their_radius(seed):
    rng = np.random.default_rng(seed)
    corners = np.cumsum(rng.normal(size=(40, 5, 3)) * 30, axis=1)
    paths = make_paths(corners, np.full(40, 4.0))
    paths = paths.only(paths.valid)
    assert len(paths.valid)
    points, arc = sample_paths(paths, 1500)
    # Three points on a circle: the radius is exact on an arc and larger across its ends.
    assert (least_bend_radius_mm(points) > 4.0 - 1e-3).all()
    steps = np.linalg.norm(np.diff(points, axis=1), axis=2)
    np.testing.assert_allclose(steps, np.diff(arc, axis=1), rtol=2e-3)
    for path, rough in zip(points, rough_points(paths), strict=True):
        for point in rough[:: max(1, len(rough) // 20)]:
            assert np.linalg.norm(path - point, axis=1).min() < 0.51 * steps.max()


def test_short_legs_and_sharp_turns_are_not_valid():
    assert not one([(0, 0, 0), (4, 0, 0), (4, 30, 0)], 5).valid[0]
    assert one([(0, 0, 0), (5, 0, 0), (5, 5, 0)], 5).valid[0]
    assert not one([(0, 0, 0), (30, 0, 0), (0, 1, 0)], 1).valid[0]


def test_a_straight_path_has_no_arc():
    path = one([(0, 0, 0), (3, 0, 0), (10, 0, 0)], 5)
    np.testing.assert_allclose(path.pieces[0], [3, 0, 7], atol=1e-12)
    points, _ = sample_paths(path, 11)
    np.testing.assert_allclose(points[0], np.column_stack([np.arange(11.0), np.zeros(11), np.zeros(11)]), atol=1e-12)


def test_the_first_corner_lies_one_tangent_length_ahead():
    target = np.array([[10.0, 40.0, 0.0], [60.0, 5.0, 0.0]])
    radius = np.full(2, 6.0)
    corner = start_corner(np.zeros(3), np.array([1.0, 0, 0]), target, radius, np.array([0.0, 2.0]))
    for at, goal, extra in zip(corner, target, (0.0, 2.0), strict=True):
        leg = goal - at
        turn = math.atan2(leg[1], leg[0])
        assert at[0] == pytest.approx(extra + 6.0 * math.tan(turn / 2), abs=2e-3)
        assert at[1] == at[2] == 0.0
    vertices = np.stack([np.zeros((2, 3)), corner, target], axis=1)
    assert make_paths(vertices, radius).valid.all()


def test_the_least_bend_radius_of_a_circle_and_a_line():
    turn = np.linspace(0, 2, 50)
    circle = np.column_stack([7 * np.cos(turn), 7 * np.sin(turn), 0 * turn])
    line = np.column_stack([turn, 2 * turn, 0 * turn])
    found = least_bend_radius_mm(np.stack([circle, line]))
    assert found[0] == pytest.approx(7.0, rel=1e-9) and found[1] > 1e6
