"""Holes: clipped to the body, exact distance to their wall."""

import numpy as np
import pytest
from scipy.spatial import cKDTree

from morph.body.hole import Hole, distance_to_hole_mm
from morph.core.errors import MorphError
from morph.settings.job import CarrierBlankSettings, FlangeSettings, HoleSettings, Metal, ServiceSettings
from tests.body.scenes import Scene
from tests.surface.graphs import straight_line

pytestmark = pytest.mark.quick


def clipped(hole, **more):
    return Scene(straight_line(), holes=(hole,), **more).blank.holes[0]


def ends(hole):
    return hole.start_mm, hole.start_mm + hole.length_mm * hole.axis


def test_a_through_hole_runs_from_face_to_face():
    # Body: radius 34, z from -35 to 35.
    hole = clipped(HoleSettings((5.0, 0.0, -35.0), (0, 0, 2), 6.0))
    assert hole.id == "H1" and hole.wall_mm == 3.0
    np.testing.assert_allclose(ends(hole), [[5, 0, -35], [5, 0, 35]], atol=1e-9)


def test_a_through_hole_that_starts_in_the_metal_reaches_back_to_the_face():
    hole = clipped(HoleSettings((0.0, 0.0, 3.0), (1, 0, 0), 6.0, wall_mm=1.0))
    np.testing.assert_allclose(ends(hole), [[-34, 0, 3], [34, 0, 3]], atol=1e-9)
    assert hole.wall_mm == 1.0


@pytest.mark.parametrize(
    ("at", "axis", "start", "end"),
    [
        ((40.0, 0.0, -35.0), (0, 0, 1), (40, 0, -35), (40, 0, -25)),  # through the flange alone
        ((5.0, 0.0, -35.0), (0, 0, 1), (5, 0, -35), (5, 0, 35)),  # through the core
        ((0.0, -48.0, -30.0), (0, 1, 0), (0, -48, -30), (0, 48, -30)),  # across the flange
        ((0.0, -34.0, 10.0), (0, 1, 0), (0, -34, 10), (0, 34, 10)),  # across the core above it
    ],
)
def test_a_hole_in_a_flanged_body_ends_where_the_metal_does(at, axis, start, end):
    # Body: radius 34, z from -35 to 35; flange: radius 48, z from -35 to -25.
    hole = clipped(HoleSettings(at, axis, 4.0), flange=FlangeSettings(48.0, 10.0))
    np.testing.assert_allclose(ends(hole), [start, end], atol=1e-9)


def test_a_blind_hole_stops_at_its_depth_and_at_the_body():
    hole = clipped(HoleSettings((0.0, 0.0, -40.0), (0, 0, 1), 6.0, depth_mm=20.0))
    np.testing.assert_allclose(ends(hole), [[0, 0, -35], [0, 0, -20]], atol=1e-9)
    long = clipped(HoleSettings((0.0, 0.0, -40.0), (0, 0, 1), 6.0, depth_mm=500.0))
    np.testing.assert_allclose(ends(long), [[0, 0, -35], [0, 0, 35]], atol=1e-9)


def test_a_through_hole_in_a_jacket_stays_in_the_first_wall():
    ring = {"metal": Metal.AWAY_FROM_AXIS, "shape": CarrierBlankSettings((15.0, 15.0), thickness_mm=16.0)}
    hole = clipped(HoleSettings((60.0, 0.0, 0.0), (-1, 0, 0), 6.0), **ring)
    np.testing.assert_allclose(ends(hole), [[50, 0, 0], [34, 0, 0]], atol=1e-9)
    through_both = clipped(HoleSettings((60.0, 0.0, 0.0), (-1, 0, 0), 6.0, depth_mm=200.0), **ring)
    np.testing.assert_allclose(ends(through_both), [[50, 0, 0], [-50, 0, 0]], atol=1e-9)


@pytest.mark.parametrize(
    "hole",
    [
        HoleSettings((0.0, 0.0, 35.0), (0, 0, 1), 6.0),
        HoleSettings((40.0, 0.0, 0.0), (0, 0, 1), 6.0),
        HoleSettings((0.0, 0.0, -60.0), (0, 0, 1), 6.0, depth_mm=20.0),
    ],
)
def test_a_hole_that_misses_the_body_is_refused(hole):
    with pytest.raises(MorphError) as caught:
        clipped(hole)
    assert caught.value.code == "hole-misses-body" and "number 1" in caught.value.where


@pytest.mark.parametrize(
    "hole",
    [
        HoleSettings((0.0, 0.0, 0.0), (0, 0, 0), 6.0),
        HoleSettings((0.0, 0.0, 0.0), (0, 0, 1), 0.0),
        HoleSettings((0.0, 0.0, 0.0), (0, 0, 1), 6.0, depth_mm=0.0),
        HoleSettings((0.0, 0.0, 0.0), (0, 0, 1), 6.0, wall_mm=-1.0),
    ],
)
def test_a_hole_must_be_a_hole(hole):
    with pytest.raises(MorphError) as caught:
        clipped(hole)
    assert caught.value.code == "hole-not-a-hole"


def test_distance_to_a_flat_ended_cylinder():
    hole = Hole("H1", np.zeros(3), np.array([0.0, 0.0, 1.0]), 10.0, 4.0, 3.0)
    points = np.array([[5, 0, 5], [0, 0, 13], [5, 0, 14], [0, 0, -2], [1, 0, 5], [0, 0, 9.5]], dtype=float)
    # beside 5 - 2; above 3; corner 3-4-5 triangle: hypot(3, 4); below 2; inside: 1 to the side, 0.5 to the end.
    np.testing.assert_allclose(distance_to_hole_mm(hole, points), [3.0, 3.0, 5.0, 2.0, -1.0, -0.5], atol=1e-12)


def test_distance_agrees_with_dense_surface_points():
    axis = np.array([1.0, 2.0, -0.5]) / np.linalg.norm([1.0, 2.0, -0.5])
    hole = Hole("H1", np.array([3.0, -2.0, 1.0]), axis, 12.0, 5.0, 3.0)
    across = np.linalg.svd(axis[None])[2][1:]
    turn, along, radius = np.linspace(0, 2 * np.pi, 721), np.linspace(0, 12, 241), np.linspace(0, 2.5, 51)
    ring = np.cos(turn)[:, None] * across[0] + np.sin(turn)[:, None] * across[1]
    side = (2.5 * ring[:, None] + along[None, :, None] * axis).reshape(-1, 3)
    caps = [(radius[None, :, None] * ring[:, None] + end * axis).reshape(-1, 3) for end in (0.0, 12.0)]
    surface = hole.start_mm + np.concatenate([side, *caps])
    points = np.random.default_rng(2).uniform(-15, 20, (200, 3))
    reference = cKDTree(surface).query(points)[0]
    # Surface points are at most 0.05 mm apart.
    np.testing.assert_allclose(np.abs(distance_to_hole_mm(hole, points)), reference, atol=0.02)


def test_the_service_gives_the_wall_a_hole_does_not_name():
    hole = clipped(HoleSettings((5.0, 0.0, -35.0), (0, 0, 1), 6.0), service=ServiceSettings(wall_hole_mm=2.5))
    assert hole.wall_mm == 2.5
