"""A body with a flange: where its faces end, distances by brute force over its outline, and what is refused."""

import math

import numpy as np
import pytest
from scipy.spatial import cKDTree

from morph.body.blank import make_blank
from morph.body.exit import list_sites, project_to_face
from morph.body.room import measure_room
from morph.core.errors import SettingError
from morph.geometry.mesh import measure_condition, mesh_volume_mm3
from morph.settings.job import (
    BlankSettings,
    BoxBlankSettings,
    CarrierBlankSettings,
    CarrierSettings,
    ConeSettings,
    CylinderBlankSettings,
    FlangeSettings,
    Metal,
    SectionSettings,
    SectionShape,
    SeenFrom,
    ServiceSettings,
)
from morph.solid.blank import blank_mesh
from morph.surface.make import make_carrier
from tests.body import measure
from tests.body.scenes import Scene
from tests.surface.graphs import straight_line

SIZE = (40.0, 30.0)
CYLINDER = CarrierSettings(30.0, Metal.TOWARD_AXIS, depth_mm=8.0)
CONE = ConeSettings(30.0, 15.0, Metal.TOWARD_AXIS, depth_mm=8.0)
JACKET = CarrierSettings(22.0, Metal.AWAY_FROM_AXIS, depth_mm=8.0)


ROUND = SectionSettings(SectionShape.ROUND, bore_range_mm=(3.0, 12.0))
"""Without a roof, so that room is worked by hand."""


def blank(settings=CYLINDER, flange=(45.0, 12.0), shape=None, **more):
    carrier = make_carrier(settings, SIZE, SeenFrom.PART, 8.0)
    thick = 20.0 if settings.metal is Metal.AWAY_FROM_AXIS else None
    shape = shape or CarrierBlankSettings((20.0, 10.0), thick)
    made = BlankSettings(shape, flange=FlangeSettings(*flange), **more)
    return make_blank(made, (), carrier, SIZE, ServiceSettings())


def outline(it, settings):
    """The round outside of the finished body, written out again: named stretches as (r, z) points 0.02 mm apart."""
    low, high = it.z_mm
    top, slope = low + 12.0, math.tan(math.radians(getattr(settings, "half_angle_deg", 0.0)))
    core = 42.0 if settings is JACKET else 30.0
    name = "outer" if settings is JACKET else "carrier"

    def line(a, b):
        n = int(math.dist(a, b) / 0.02) + 2
        return np.linspace(a, b, n)

    at_top = core + slope * top
    return {
        name: line((at_top, top), (core + slope * high, high)),
        "flange": line((at_top, top), (45.0, top)),
        "rim": line((45.0, low), (45.0, top)),
    }


@pytest.mark.parametrize("settings", [CYLINDER, CONE, JACKET], ids=["cylinder", "cone", "jacket"])
def test_distances_are_those_to_the_outline(settings):
    it = blank(settings)
    stretches = outline(it, settings)
    points = np.random.default_rng(2).uniform((-55, -55, it.z_mm[0] + 0.1), (55, 55, it.z_mm[1] - 0.1), (800, 3))
    flat = np.column_stack([np.hypot(points[:, 0], points[:, 1]), points[:, 2]])
    slope = math.tan(math.radians(getattr(settings, "half_angle_deg", 0.0)))
    core = (42.0 if settings is JACKET else 30.0) + slope * flat[:, 1]
    inside = (flat[:, 0] < core) | ((flat[:, 0] < 45.0) & (flat[:, 1] < it.z_mm[0] + 12.0))
    for name, line in stretches.items():
        reference = cKDTree(line).query(flat)[0]
        face = it.face(name)
        found = face.distance_mm(points)
        # Reference points lie 0.02 mm apart.
        np.testing.assert_allclose(np.abs(found), reference, atol=0.011)
        assert ((found > 0) == inside).all()
        foot = project_to_face(face, points)
        np.testing.assert_allclose(np.abs(face.distance_mm(foot)), 0.0, atol=1e-9)
        np.testing.assert_allclose(np.linalg.norm(foot - points, axis=1), np.abs(found), atol=1e-9)


def test_on_its_faces_the_normals_are_those_of_the_faces():
    it = blank()
    z = it.z_mm[0]
    np.testing.assert_allclose(it.face("rim").outward(np.array([[0.0, 45.0, z + 5.0]])), [[0, 1, 0]], atol=1e-12)
    np.testing.assert_allclose(it.face("flange").outward(np.array([[0.0, 38.0, z + 12.0]])), [[0, 0, 1]], atol=1e-12)
    np.testing.assert_allclose(it.face("carrier").outward(np.array([[30.0, 0.0, 0.0]])), [[1, 0, 0]], atol=1e-12)
    assert [face.name for face in it.faces] == ["carrier", "foot", "top", "flange", "rim"]


def test_a_channel_in_the_flange_has_the_room_of_the_flange():
    """At r = 38 in the middle of a flange 12 mm high a bore keeps 3 mm to foot and upper side: 6 mm less bands."""
    scene = Scene(straight_line(), section=ROUND)
    it = blank()
    room = measure_room(it, scene.limits, np.array([[38.0, 0.0, it.z_mm[0] + 6.0], [38.0, 0.0, 0.0]]))
    band = scene.limits.band_mm
    assert room.room_mm[0] == pytest.approx(2 * (6.0 - band - 3.0)) and room.room_mm[1] < 0


@pytest.mark.parametrize(("settings", "genus"), [(CYLINDER, 0), (CONE, 0), (JACKET, 1)])
def test_volume_and_stock_by_closed_form(settings, genus):
    it = blank(settings, stock_mm=(("rim", 1.0), ("flange", 0.5), ("foot", 2.0)))
    low, high = it.z_mm
    slope = math.tan(math.radians(getattr(settings, "half_angle_deg", 0.0)))

    def volume(low, top, wide):
        ends = [(42.0 if settings is JACKET else 30.0) + slope * z for z in (top, high)]
        core = math.pi / 3 * (high - top) * (ends[0] ** 2 + ends[0] * ends[1] + ends[1] ** 2)
        bore = math.pi * 22.0**2 * (high - low) if settings is JACKET else 0.0
        return core + math.pi * wide**2 * (top - low) - bore

    for printed, wanted in ((False, volume(low, low + 12.0, 45.0)), (True, volume(low - 2.0, low + 12.5, 46.0))):
        mesh = blank_mesh(it, printed=printed)
        assert mesh_volume_mm3(mesh) == pytest.approx(wanted, rel=4e-6)
        condition = measure_condition(mesh)
        assert condition.closed and condition.genus == genus and condition.bodies == 1


@pytest.mark.parametrize("name", ["rim", "flange"])
def test_ports_may_come_out_of_the_flange(name):
    it = blank(port_faces=(name,))
    scene = Scene(straight_line(), section=ROUND)
    sites = list_sites(it, it.face(name), np.array([22.0, 0.0, it.z_mm[0] + 8.0]), 4.0, None, scene.limits)
    assert len(sites.xyz_mm) > 10
    np.testing.assert_allclose(it.face(name).distance_mm(sites.xyz_mm), 0.0, atol=1e-9)


def refused(**changed):
    with pytest.raises(SettingError) as caught:
        blank(**changed)
    assert caught.value.code == "flange-misfit"
    return caught.value


def test_a_flange_that_does_not_fit_is_refused():
    assert "30.000" in refused(flange=(30.0, 12.0)).expected
    assert "20.000" in refused(flange=(45.0, 20.5)).expected
    box = BoxBlankSettings((-25, -25, -35), (25, 25, 25))
    assert "box" in refused(shape=box).found
    refused(settings=CONE, shape=CylinderBlankSettings(34.0, (-35.0, 30.0)))


def test_walls_of_leads_hold_in_a_plan_with_a_flange():
    import dataclasses

    scene = Scene(straight_line(), shape=CarrierBlankSettings((22.0, 15.0)))
    carrier = scene.carrier
    made = BlankSettings(scene.shape, ("carrier",), ("foot",), flange=FlangeSettings(50.0, 14.0))
    it = make_blank(made, (), carrier, scene.graph.size_mm, scene.service)

    class Flanged(Scene):
        blank = it

    flanged = Flanged(**{f.name: getattr(scene, f.name) for f in dataclasses.fields(scene)})
    plan = flanged.plan()
    for branch in plan.branches:
        for face in it.faces:
            if face.name in {"flange", "rim"}:
                points, bore, _ = measure.dense(branch)
                assert (face.distance_mm(points) - bore / 2 >= 3.0).all()
