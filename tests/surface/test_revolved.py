"""The revolved carrier against cylinder, cone, sphere and torus in closed form, differences and planted faults."""

import math

import numpy as np
import pytest

from morph.core.errors import MorphError
from morph.settings.job import (
    CarrierSettings,
    ConeMap,
    ConeSettings,
    Metal,
    RevolvedSettings,
    Seam,
    SeenFrom,
    TrueAt,
)
from morph.surface.cone import make_cone
from morph.surface.cylinder import make_cylinder
from morph.surface.revolved import make_revolved
from tests.surface.bodies import bottle_radius

pytestmark = pytest.mark.quick

SIZE, DEPTH_MM = (60.0, 40.0), 8.0
HEIGHTS = np.linspace(-50.0, 50.0, 41)
WAYS = [(metal, seen, true) for metal in Metal for seen in SeenFrom for true in TrueAt]


def rows(radius):
    return tuple((float(r), float(z)) for r, z in zip(radius, HEIGHTS, strict=True))


BOTTLE = rows(bottle_radius(HEIGHTS))


def places(count=200, seed=3):
    return np.random.default_rng(seed).uniform((0.0, 0.0), SIZE, (count, 2))


def carrier(
    profile=BOTTLE,
    metal=Metal.TOWARD_AXIS,
    seen=SeenFrom.PART,
    true=TrueAt.DEPTH,
    size=SIZE,
    depth=DEPTH_MM,
    seam=Seam.OPEN,
):
    return make_revolved(RevolvedSettings(profile, metal, depth, true_at=true), size, seen, depth, seam)


@pytest.mark.parametrize(("metal", "seen", "true"), WAYS)
def test_a_straight_profile_is_the_cylinder(metal, seen, true):
    it = carrier(((30.0, -50.0), (30.0, 50.0)), metal, seen, true)
    exact = make_cylinder(CarrierSettings(30.0, metal, DEPTH_MM, true_at=true), SIZE, seen, DEPTH_MM)
    for depth in (0.0, DEPTH_MM):
        np.testing.assert_allclose(it.point_mm(places(), depth), exact.point_mm(places(), depth), atol=1e-9)
        np.testing.assert_allclose(it.jacobian(places(), depth), exact.jacobian(places(), depth), atol=1e-9)
    np.testing.assert_allclose(it.shape_operator(places()), exact.shape_operator(places()), atol=1e-9)


@pytest.mark.parametrize(("metal", "seen", "true"), WAYS)
def test_a_leaning_profile_is_the_polar_cone(metal, seen, true):
    slope = math.tan(math.radians(12.0))
    it = carrier(rows(35.0 + slope * HEIGHTS), metal, seen, true)
    exact = make_cone(ConeSettings(35.0, 12.0, metal, DEPTH_MM, true_at=true, map=ConeMap.POLAR), SIZE, seen, DEPTH_MM)
    for depth in (0.0, DEPTH_MM):
        np.testing.assert_allclose(it.point_mm(places(), depth), exact.point_mm(places(), depth), atol=1e-8)
        np.testing.assert_allclose(it.jacobian(places(), depth), exact.jacobian(places(), depth), atol=1e-8)


def test_a_circle_is_the_sphere():
    """Sphere of R = 60: meridian lengths kept at depth, parallels shrink by the cosine of the latitude."""
    latitude = np.linspace(-1.0, 1.0, 201)
    profile = tuple((60.0 * math.cos(a), 60.0 * math.sin(a)) for a in latitude)
    it, sheet = carrier(profile), places()
    deep = it.point_mm(sheet, DEPTH_MM)
    np.testing.assert_allclose(np.linalg.norm(deep, axis=1), 52.0, atol=1e-6)
    at = (sheet[:, 1] - 20.0) / 52.0
    np.testing.assert_allclose(deep[:, 2], 52.0 * np.sin(at), atol=1e-6)
    slope = it.jacobian(sheet, DEPTH_MM)
    np.testing.assert_allclose(np.linalg.norm(slope[:, :, 0], axis=1), np.cos(at), atol=1e-6)
    np.testing.assert_allclose(np.linalg.norm(slope[:, :, 1], axis=1), 1.0, atol=1e-6)
    np.testing.assert_allclose(it.shape_operator(sheet), np.broadcast_to(np.eye(2) / 60.0, (200, 2, 2)), atol=1e-5)


@pytest.mark.parametrize(("metal", "seen", "true"), WAYS)
def test_a_bottle_agrees_with_differences_and_develops_back(metal, seen, true):
    it, h = carrier(BOTTLE, metal, seen, true), 1e-4
    sheet = 0.5 + places() * 0.98
    for depth in (0.0, DEPTH_MM):
        steps = [np.array([h, 0.0]), np.array([0.0, h])]
        differences = np.stack(
            [(it.point_mm(sheet + e, depth) - it.point_mm(sheet - e, depth)) / (2 * h) for e in steps], 2
        )
        np.testing.assert_allclose(it.jacobian(sheet, depth), differences, atol=1e-6)
        through = it.jacobian(sheet, 0.0) @ (np.eye(2) - depth * it.shape_operator(sheet))
        np.testing.assert_allclose(it.jacobian(sheet, depth), through, atol=1e-12)
    face, deep = it.point_mm(sheet, 0.0), it.point_mm(sheet, 5.0)
    np.testing.assert_allclose(deep, face + 5.0 * it.into_metal(sheet), atol=1e-12)
    np.testing.assert_allclose(it.distance_mm(deep), 5.0, atol=1e-9)
    np.testing.assert_allclose(it.develop(deep), np.column_stack([sheet, np.full(200, 5.0)]), atol=1e-8)


def test_the_centre_lies_on_plus_x_at_height_zero_and_up_is_up():
    it = carrier()
    np.testing.assert_allclose(it.point_mm(np.array([[30.0, 20.0]]), 0.0)[0], [bottle_radius(0.0), 0.0, 0.0], atol=1e-3)
    low, high = it.point_mm(np.array([[30.0, 5.0], [30.0, 35.0]]), DEPTH_MM)
    assert high[2] > low[2] + 25.0


def test_a_full_wrap_closes():
    turn = carrier().turn_mm
    it = carrier(size=(turn * 1.0005, 40.0), seam=Seam.JOINED)
    left, right = it.point_mm(np.array([[0.0, 9.0], [turn * 1.0005, 9.0]]), DEPTH_MM)
    np.testing.assert_allclose(left, right, atol=1e-9)


TIGHT = tuple((30.0 + 6.0 * math.exp(-(z**2) / 20.0), float(z)) for z in np.linspace(-50, 50, 201))
WAIST = tuple((10.0 + z * z / 300.0, float(z)) for z in np.linspace(-50, 50, 41))


@pytest.mark.parametrize(
    ("code", "changed"),
    [
        ("profile-not-a-curve", {"profile": ((30.0, 0.0),)}),
        ("profile-not-a-curve", {"profile": ((30.0, -9.0), (0.0, 9.0))}),
        ("profile-not-a-curve", {"profile": ((30.0, 9.0), (31.0, -9.0))}),
        ("profile-not-a-curve", {"profile": ((30.0, -9.0), (30.0, -9.0), (30.0, 9.0))}),
        ("profile-not-a-curve", {"profile": ((30.0, -9.0), (math.nan, 9.0))}),
        ("profile-misses-centre", {"profile": ((30.0, 5.0), (30.0, 90.0))}),
        ("sheet-past-profile", {"size": (60.0, 120.0)}),
        ("depth-past-focus", {"profile": TIGHT}),
        ("depth-past-axis", {"profile": WAIST, "depth": 9.0}),
        ("sheet-wraps-past-itself", {"size": (300.0, 40.0)}),
        ("seam-width", {"seam": Seam.JOINED}),
        ("carrier-not-positive", {"depth": 0.0}),
    ],
)
def test_what_cannot_be_is_refused(code, changed):
    with pytest.raises(MorphError) as caught:
        carrier(**changed)
    assert caught.value.code == code, caught.value


def test_a_disc_thinner_than_the_depth_is_refused():
    """A core with a groove from z = -6 to 6 and a disc 4 mm thick beside it: the sheet runs up the groove's flanks."""
    z = np.linspace(-30.0, 30.0, 3001)
    radius = 28.0 + 6.0 * (np.tanh((np.abs(z) - 6.0) / 0.8) - np.tanh((np.abs(z) - 10.0) / 0.8))
    profile = tuple(zip(radius.tolist(), z.tolist(), strict=True))
    with pytest.raises(MorphError) as caught:
        carrier(profile, size=(60.0, 22.0), depth=3.0)
    assert caught.value.code == "depth-meets-other-face"
    assert abs(float(caught.value.found.split("one ")[1].split(" mm")[0]) - 1.0) < 0.3
