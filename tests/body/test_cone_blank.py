"""Blanks on a cone: which faces they have, exact distances, and what is refused."""

import math

import numpy as np
import pytest
from scipy.spatial import cKDTree

from morph.body.blank import make_blank
from morph.body.face import ConeFace, FaceRole
from morph.body.hole import make_hole
from morph.core.errors import MorphError
from morph.geometry.cone import Cone
from morph.settings.job import (
    BlankSettings,
    BoxBlankSettings,
    CarrierBlankSettings,
    ConeMap,
    ConeSettings,
    CylinderBlankSettings,
    HoleSettings,
    Metal,
    SeenFrom,
    ServiceSettings,
)
from morph.surface.cone import make_cone

pytestmark = pytest.mark.quick

SIZE = (40.0, 30.0)
CORE, JACKET = Metal.TOWARD_AXIS, Metal.AWAY_FROM_AXIS
TANGENT, SINE, COSINE = (f(math.radians(15.0)) for f in (math.tan, math.sin, math.cos))


def carrier(metal=CORE, angle=15.0, radius=30.0):
    settings = ConeSettings(radius, angle, metal, depth_mm=8.0, map=ConeMap.POLAR)
    return make_cone(settings, SIZE, SeenFrom.PART, 8.0)


def blank(shape, metal=CORE, angle=15.0, radius=30.0, **more):
    return make_blank(BlankSettings(shape, **more), (), carrier(metal, angle, radius), SIZE, ServiceSettings())


def inside(it, points):
    return np.min([face.distance_mm(np.asarray(points, dtype=float)) for face in it.faces], axis=0) > 0


def names(it):
    return [face.name for face in it.faces]


def test_a_solid_core_keeps_its_margins_beyond_face_and_channels():
    it = blank(CarrierBlankSettings((10.0, 12.0)))
    assert names(it) == ["carrier", "foot", "top"] and it.outer_radius_mm is None
    # The sheet runs 15 mm up and down the meridian; the channels lie 8 sin a above the face.
    np.testing.assert_allclose(it.z_mm, (-15 * COSINE - 10.0, 15 * COSINE + 8 * SINE + 12.0), atol=1e-12)
    r = 30.0 + 20.0 * TANGENT
    assert inside(it, [[r - 0.01, 0, 20.0], [0, 0, 0]]).all() and not inside(it, [[r + 0.01, 0, 20.0]]).any()


def test_a_shell_is_that_thick_square_to_its_face():
    it = blank(CarrierBlankSettings((10.0, 10.0), thickness_mm=18.0))
    assert names(it) == ["carrier", "foot", "top", "inner"]
    face = np.array([[30.0 + 5.0 * TANGENT, 0.0, 5.0]])
    deep = face - 18.0 * np.array([COSINE, 0.0, -SINE])
    np.testing.assert_allclose(it.face("inner").distance_mm(deep), 0.0, atol=1e-12)
    np.testing.assert_allclose(it.face("inner").distance_mm(face), 18.0, atol=1e-12)
    np.testing.assert_allclose(it.face("inner").outward(deep), [[-COSINE, 0.0, SINE]], atol=1e-12)


def test_a_jacket_has_a_conical_outside():
    it = blank(CarrierBlankSettings((10.0, 10.0), thickness_mm=20.0), JACKET)
    assert names(it) == ["carrier", "foot", "top", "outer"]
    out = np.array([[30.0 + 20.0 / COSINE, 0.0, 0.0]])
    np.testing.assert_allclose(it.face("outer").distance_mm(out), 0.0, atol=1e-12)
    assert inside(it, [[30.1, 0, 0], [50.6, 0, 0]]).all() and not inside(it, [[29.9, 0, 0], [50.8, 0, 0]]).any()


def test_a_cylinder_and_a_box_are_cut_to_the_cone():
    assert names(blank(CylinderBlankSettings(45.0, (-30.0, 30.0)))) == ["carrier", "foot", "top"]
    # The cone reaches 38.04 mm at the top: a cylinder of 37 mm cuts it there and is a face of its own.
    assert names(blank(CylinderBlankSettings(37.0, (-30.0, 30.0)))) == ["carrier", "foot", "top", "outer"]
    assert names(blank(CylinderBlankSettings(60.0, (-30.0, 30.0)), JACKET)) == ["carrier", "foot", "top", "outer"]
    box = BoxBlankSettings((-50, -36, -30), (50, 50, 30))
    assert names(blank(box, JACKET)) == ["carrier", "foot", "top", "-x", "+x", "-y", "+y"]
    assert names(blank(box)) == ["carrier", "foot", "top", "-y"]


def test_distance_of_a_cone_face_by_brute_force():
    cone = Cone(30.0, math.radians(15.0))
    angle, z = np.meshgrid(np.radians(np.arange(0, 360, 0.5)), np.arange(-60, 60, 0.2))
    r = 30.0 + z * TANGENT
    surface = np.column_stack([(r * np.cos(angle)).ravel(), (r * np.sin(angle)).ravel(), z.ravel()])
    points = np.random.default_rng(8).uniform((-50, -50, -35), (50, 50, 35), (300, 3))
    reference, _ = cKDTree(surface).query(points)
    for metal_inside in (True, False):
        face = ConeFace("carrier", FaceRole.PART, 0.0, cone, metal_inside)
        found = face.distance_mm(points)
        # Surface points lie 0.3 mm apart: the search reads high by at most 0.2^2 / 2 / distance, or 0.25 near it.
        assert (reference >= np.abs(found) - 1e-9).all() and (reference <= np.abs(found) + 0.25).all()
        within = np.hypot(points[:, 0], points[:, 1]) < 30.0 + points[:, 2] * TANGENT
        assert ((found > 0) == (within == metal_inside)).all()


def test_a_hole_ends_at_the_cone():
    faces = blank(CarrierBlankSettings((10.0, 10.0))).faces
    hole = make_hole(1, HoleSettings((60.0, 0.0, 10.0), (-1, 0, 0), 5.0), faces, ServiceSettings())
    np.testing.assert_allclose(hole.start_mm, [30.0 + 10.0 * TANGENT, 0.0, 10.0], atol=1e-9)
    assert hole.length_mm == pytest.approx(2 * (30.0 + 10.0 * TANGENT))


def refused(code, *args, **more):
    with pytest.raises(MorphError) as caught:
        blank(*args, **more)
    assert caught.value.code == code
    return caught.value


def test_a_body_past_the_apex_is_refused_with_the_height_that_fits():
    # 30 mm of radius are used up 111.96 mm below the sheet's centre, 28 mm 104.5 mm below.
    error = refused("blank-past-apex", CarrierBlankSettings((100.0, 10.0)))
    assert f"{-28.0 / TANGENT:.3f} mm" in error.expected and "foot" in error.found
    assert "top" in refused("blank-past-apex", CylinderBlankSettings(99.0, (-30.0, 120.0)), angle=-15.0).found
    low = -15 * COSINE
    assert blank(CarrierBlankSettings((28.0 / TANGENT + low - 1e-6, 10.0))).z_mm[0] < -100


def test_a_cavity_may_end_in_a_point_inside_a_box():
    it = blank(BoxBlankSettings((-60, -60, -140), (60, 60, 30)), JACKET)
    assert inside(it, [[0, 0, -130.0], [0, 0, -112.5], [1.0, 0, -112.0]]).all() and not inside(it, [[0, 0, -111.0]])[0]


@pytest.mark.parametrize(
    ("shape", "metal"),
    [
        (CarrierBlankSettings(thickness_mm=42.0), CORE),
        (CarrierBlankSettings(thickness_mm=0.0), JACKET),
        (CarrierBlankSettings((10.0, -1.0)), CORE),
    ],
)
def test_sizes_that_make_no_body_are_refused(shape, metal):
    refused("blank-not-a-body", shape, metal)


def test_a_cylinder_inside_its_cone_is_refused():
    narrow = 30.0 - 30.0 * TANGENT
    assert f"{narrow:.3f}" in refused("blank-inside-carrier", CylinderBlankSettings(21.9, (-30.0, 30.0))).expected
    wide = 30.0 + 30.0 * TANGENT
    assert f"{wide:.3f}" in refused("blank-inside-carrier", CylinderBlankSettings(38.0, (-30.0, 30.0)), JACKET).expected


def test_a_cylinder_that_cuts_the_face_under_the_sheet_is_refused():
    error = refused("blank-misses-carrier", CylinderBlankSettings(31.0, (-30.0, 40.0)))
    assert "'outer'" in error.found and f"{15 * SINE - 1.0:.3f}" in error.found


def test_other_refusals_hold_on_a_cone_too():
    refused("blank-thickness-missing", CarrierBlankSettings(), JACKET)
    refused("blank-too-large", CarrierBlankSettings((10.0, 6000.0)))
