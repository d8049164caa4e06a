"""The cone's distance, normal and crossings against brute force over its meridian."""

import math

import numpy as np
import pytest

from morph.geometry.cone import Cone

pytestmark = pytest.mark.quick

CONES = [Cone(30.0, math.radians(20.0)), Cone(30.0, math.radians(-20.0)), Cone(12.0, math.radians(70.0))]


def nearest_by_search(cone, point):
    """Least distance of a point from the meridian in its own half plane, refined twice around the best place."""
    r, z = math.hypot(point[0], point[1]), point[2]
    low, high = sorted((cone.apex_mm, cone.apex_mm + math.copysign(500.0, cone.half_angle_rad)))
    for _ in range(6):
        heights = np.linspace(low, high, 4001)
        away = np.hypot(cone.radius_mm + heights * math.tan(cone.half_angle_rad) - r, heights - z)
        best, step = heights[away.argmin()], heights[1] - heights[0]
        low, high = max(low, best - step), min(high, best + step)
    return float(away.min())


@pytest.mark.parametrize("cone", CONES)
def test_distance_is_the_least_over_the_whole_surface(cone):
    points = np.random.default_rng(4).uniform((-70, -70, -130), (70, 70, 130), (150, 3))
    signed = cone.outside_mm(points)
    np.testing.assert_allclose(np.abs(signed), [nearest_by_search(cone, p) for p in points], atol=1e-6)
    within = np.hypot(points[:, 0], points[:, 1]) < cone.radius_mm + points[:, 2] * math.tan(cone.half_angle_rad)
    assert ((signed < 0) == within).all() and within.any() and not within.all()


@pytest.mark.parametrize("cone", CONES)
def test_normals_lead_to_the_surface_and_are_the_gradient(cone):
    points = np.random.default_rng(5).uniform((-70, -70, -130), (70, 70, 130), (200, 3))
    foot = points - cone.outside_mm(points)[:, None] * cone.outward(points)
    radius = cone.radius_mm + foot[:, 2] * math.tan(cone.half_angle_rad)
    np.testing.assert_allclose(np.hypot(foot[:, 0], foot[:, 1]), radius, atol=1e-9)
    step = 1e-5
    slope = [(cone.outside_mm(points + step * e) - cone.outside_mm(points - step * e)) / (2 * step) for e in np.eye(3)]
    np.testing.assert_allclose(cone.outward(points), np.transpose(slope), atol=1e-6)


@pytest.mark.parametrize("cone", CONES)
def test_an_offset_cone_lies_at_that_distance(cone):
    points = np.random.default_rng(6).uniform((-70, -70, -10), (70, 70, 10), (50, 3))
    points = points[~cone.past_apex(points) & ~cone.offset(4.0).past_apex(points)]
    np.testing.assert_allclose(cone.offset(4.0).outside_mm(points), cone.outside_mm(points) - 4.0, atol=1e-12)


@pytest.mark.parametrize("cone", CONES)
def test_line_crossings_are_where_the_side_changes(cone):
    rng = np.random.default_rng(7)
    found = 0
    for _ in range(120):
        start, axis = rng.uniform(-60, 60, 3), rng.normal(size=3)
        axis /= np.linalg.norm(axis)
        way = np.linspace(-400, 400, 40001)
        side = cone.outside_mm(start + way[:, None] * axis) > 0
        changes = way[:-1][side[1:] != side[:-1]] + 0.01
        crossings = [t for t in cone.line_crossings_mm(start, axis) if abs(t) < 399]
        # Two crossings within one step of the search show no change of side.
        if len(crossings) == 2 and crossings[1] - crossings[0] < 0.03:
            continue
        np.testing.assert_allclose(crossings, changes[np.abs(changes) < 399], atol=0.0101)
        found += len(crossings)
    assert found > 30


def test_special_lines():
    cone = Cone(30.0, math.radians(45.0))
    assert cone.line_crossings_mm(np.array([10.0, 0.0, 0.0]), np.array([0.0, 0.0, 1.0])) == pytest.approx([-20.0])
    # A generator direction meets the cone once; one in the surface itself never crosses.
    along = np.array([1.0, 0.0, 1.0]) / math.sqrt(2)
    assert cone.line_crossings_mm(np.array([-20.0, 0.0, 0.0]), along) == pytest.approx([-5.0 * math.sqrt(2)])
    assert cone.line_crossings_mm(np.array([30.0, 0.0, 0.0]), along) == []
    assert cone.line_crossings_mm(np.array([0.0, 100.0, 0.0]), np.array([1.0, 0.0, 0.0])) == []


def test_on_the_axis_the_normal_is_a_unit_vector():
    np.testing.assert_allclose(np.linalg.norm(CONES[0].outward(np.zeros((1, 3))), axis=1), 1.0)
