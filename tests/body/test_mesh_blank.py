"""Mesh blanks: faces, part face, units, holes and room, against the same bodies drawn or worked by hand."""

import numpy as np
import pytest

from morph.body.blank import make_blank
from morph.body.carrier_face import carrier_face
from morph.body.exit import list_sites
from morph.body.face import FaceRole
from morph.body.mesh_blank import make_mesh_body
from morph.body.room import make_limits, measure_room
from morph.core.errors import MorphError
from morph.core.fingerprint import fingerprint
from morph.read.mesh_file import LengthUnit
from morph.settings.job import (
    BlankSettings,
    CarrierBlankSettings,
    CarrierSettings,
    ConeSettings,
    FlangeSettings,
    HoleSettings,
    MeshBlankSettings,
    Metal,
    SectionSettings,
    SeenFrom,
    ServiceSettings,
)
from morph.surface.make import make_carrier
from tests.body import mesh_bodies
from tests.surface.graphs import make_profile

SIZE_MM, DEPTH_MM = (60.0, 45.0), 9.0
FACET_MM = 0.004


def carrier_of(radius_mm=60.0, metal=Metal.TOWARD_AXIS, angle_deg=0.0, size_mm=SIZE_MM):
    settings = CarrierSettings(radius_mm, metal, depth_mm=DEPTH_MM)
    if angle_deg:
        settings = ConeSettings(radius_mm, angle_deg, metal, depth_mm=DEPTH_MM)
    return make_carrier(settings, size_mm, SeenFrom.PART, DEPTH_MM)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("meshes")


def blank_of(folder, body, carrier=None, unit=None, holes=(), up=(0.0, 0.0, 1.0), size_mm=SIZE_MM, **more):
    path = folder / "body.stl"
    body.export(path)
    settings = BlankSettings(MeshBlankSettings(path, unit), **more)
    return make_blank(settings, holes, carrier or carrier_of(size_mm=size_mm), size_mm, ServiceSettings(), up)


def refused(code, *arguments, **more):
    with pytest.raises(MorphError) as caught:
        blank_of(*arguments, **more)
    assert caught.value.code == code, caught.value.sentence()
    return caught.value


def test_faces_of_a_box_with_a_round_front_and_a_boss(folder):
    blank = blank_of(folder, mesh_bodies.round_front(), port_faces=("back", "top"), part_faces=("carrier", "side"))
    roles = {face.name: face.role for face in blank.faces}
    assert roles == {
        "carrier": FaceRole.PART,
        "foot": FaceRole.OUTER,
        "top": FaceRole.PORT,
        "back": FaceRole.PORT,
        "-y": FaceRole.OUTER,
        "+y": FaceRole.OUTER,
        "side": FaceRole.PART,
    }
    np.testing.assert_allclose(blank.face("back").normal, [-1.0, 0.0, 0.0], atol=1e-12)
    assert blank.z_mm == pytest.approx((-30.0, 45.0))
    # by hand: a point amid the box under the shoulder of z = 30, beside the boss of radius 11 at x = 30
    point = np.array([[10.0, 0.0, 22.0]])
    distances = {face.name: float(face.distance_mm(point)[0]) for face in blank.faces}
    expected = {"back": 10.0, "side": 8.0, "foot": 52.0, "top": 23.0, "-y": 38.0, "+y": 38.0, "carrier": 50.0}
    for name, mm in expected.items():
        assert distances[name] == pytest.approx(mm, abs=FACET_MM if name == "carrier" else 1e-5), name
    text = blank.notices[0].text
    assert blank.notices[0].code == "mesh-blank" and "60.000 x 76.000 x 75.000 mm" in text and "none" in text


def test_places_for_exits_lie_on_the_end_itself(folder):
    blank = blank_of(folder, mesh_bodies.round_front(), port_faces=("back", "top"))
    limits = make_limits(SectionSettings(), ServiceSettings(), make_profile())
    top = list_sites(blank, blank.face("top"), np.array([50.0, 3.0, 0.0]), 4.0, None, limits)
    # a bore of 4 mm with its outer wall of 3 mm and bands on a boss of radius 11 mm about (30, 0)
    reach = 11.0 - 2.0 - 3.0 - limits.band_mm
    away = np.hypot(top.xyz_mm[:, 0] - 30.0, top.xyz_mm[:, 1])
    assert len(away) > 5 and away.max() <= reach + 1e-6
    np.testing.assert_allclose(top.xyz_mm[:, 2], 45.0, atol=1e-5)
    back = list_sites(blank, blank.face("back"), np.array([50.0, 3.0, 0.0]), 4.0, None, limits)
    assert len(back.xyz_mm) > 50 and np.abs(back.xyz_mm[:, 1]).max() <= 38.0 - reach + 11.0
    assert any(np.allclose(place, [0.0, 3.0, 0.0], atol=1e-6) for place in back.xyz_mm)  # straight behind the port


def test_foot_and_top_follow_the_build_direction(folder):
    blank = blank_of(folder, mesh_bodies.round_front(), up=(0.0, 1.0, 0.0))
    np.testing.assert_allclose(blank.face("foot").normal, [0.0, -1.0, 0.0], atol=1e-12)
    assert {face.name for face in blank.faces} == {"carrier", "foot", "top", "back", "-z", "+z", "side"}


@pytest.mark.parametrize("kind", ["cylinder", "cone", "flange", "jacket"])
def test_room_is_that_of_the_same_body_drawn(folder, kind):
    metal = Metal.AWAY_FROM_AXIS if kind == "jacket" else Metal.TOWARD_AXIS
    carrier = carrier_of(40.0, metal, 12.0 if kind == "cone" else 0.0, (60.0, 40.0))
    flange = FlangeSettings(52.0, 8.0) if kind == "flange" else None
    shape = CarrierBlankSettings((22.0, 12.0), 30.0 if kind == "jacket" else None)
    drawn = make_blank(BlankSettings(shape, flange=flange), (), carrier, (60.0, 40.0), ServiceSettings())
    low, high = drawn.z_mm
    if kind == "cone":
        tan = np.tan(np.radians(12.0))
        steps = mesh_bodies.sections(52.0, FACET_MM)
        angle = 2.0 * np.pi * np.arange(steps) / steps
        rings = [
            np.column_stack([r * np.cos(angle), r * np.sin(angle), np.full(steps, z)])
            for r, z in ((40.0 + tan * low, low), (40.0 + tan * high, high))
        ]
        body = mesh_bodies.trimesh.convex.convex_hull(np.concatenate(rings))
    elif kind == "jacket":
        body = mesh_bodies.without(mesh_bodies.rod(70.0, low, high), mesh_bodies.rod(40.0, low - 1, high + 1))
    else:
        body = mesh_bodies.rod(40.0, low, high)
    if kind == "flange":
        body = mesh_bodies.united(body, mesh_bodies.rod(52.0, low, low + 8.0))
    given = blank_of(folder, body, carrier, size_mm=(60.0, 40.0))
    points = np.random.default_rng(2).uniform([-75, -75, low], [75, 75, high], (4000, 3))
    distance = [np.min([face.distance_mm(points) for face in blank.faces], axis=0) for blank in (drawn, given)]
    inside = np.minimum(*distance) > 0.1
    assert inside.sum() > 200
    np.testing.assert_allclose(distance[0][inside], distance[1][inside], atol=2.0 * FACET_MM)
    limits = make_limits(SectionSettings(), ServiceSettings(), make_profile())
    rooms = [measure_room(blank, limits, points[inside]).room_mm for blank in (drawn, given)]
    np.testing.assert_allclose(rooms[0], rooms[1], atol=0.02)


def test_a_hole_through_a_mesh_is_clipped_to_its_metal(folder):
    hole = HoleSettings((30.0, 0.0, 60.0), (0.0, 0.0, -1.0), 5.0)
    blank = blank_of(folder, mesh_bodies.round_front(), holes=(hole,))
    assert blank.holes[0].length_mm == pytest.approx(75.0, abs=1e-4)  # from the boss at z = 45 to the foot at z = -30
    assert blank.holes[0].start_mm[2] == pytest.approx(45.0, abs=1e-4)


def test_skin_off_the_carrier_is_named_with_figure_and_place(folder):
    groove = mesh_bodies.without(mesh_bodies.round_front(), mesh_bodies.rod(5.0, -50, 50, (60.0, 0.0)))
    error = refused("part-face-mismatch", folder, groove)
    # a groove of radius 5 about the front's middle: the carrier's middle lies 5 mm inside it
    assert "(60.000, 0.000," in error.where and "5.000 mm" in error.found and "inside the carrier" in error.found


def test_a_carrier_inside_the_metal_names_the_radius_that_fits(folder):
    error = refused("part-face-mismatch", folder, mesh_bodies.rod(40.0, -40, 40), carrier_of(39.0))
    assert "1.0" in error.found and "outside the carrier" in error.found and "radius_mm = 39.99" in error.do


def test_another_unit_is_recognised(folder):
    body = mesh_bodies.rod(40.0, -40, 40)
    body.apply_scale(1.0 / 25.4 * 12.0)  # 36 mm of 80: large enough to pass as mm
    error = refused("part-face-mismatch", folder, body, carrier_of(40.0 * 12.0))
    assert 'unit = "inch"' in error.do
    body.apply_scale(1.0 / 12.0)
    blank = blank_of(folder, body, carrier_of(40.0), LengthUnit.INCH)
    assert blank.z_mm == pytest.approx((-40.0, 40.0), abs=1e-4)


def test_a_mesh_that_stands_on_z_0_is_told_how_far_to_move(folder):
    # skin from z = 0 to 80 mm, the sheet from -22.5 to 22.5 mm
    error = refused("part-face-mismatch", folder, mesh_bodies.rod(40.0, 0.0, 80.0), carrier_of(40.0))
    assert "by -57.500 to -22.500 mm" in error.do


def test_a_coarse_export_of_the_right_shape_is_told_as_such(folder):
    body = mesh_bodies.rod(40.0, -40, 40, chord_mm=0.4)
    error = refused("part-face-mismatch", folder, body, carrier_of(40.0))
    assert "chord" in error.do and "inside the carrier" in error.found


def test_metal_on_the_other_side(folder):
    refused("part-face-other-side", folder, mesh_bodies.rod(40.0, -40, 40), carrier_of(40.0, Metal.AWAY_FROM_AXIS))


def test_ends_that_are_not_flat_are_refused_by_name(folder):
    round_end = mesh_bodies.rod(40.0, -40, 40)
    error = refused("mesh-face-not-flat", folder, round_end, carrier_of(40.0), port_faces=("back",))
    assert "foot, top" in error.found
    # the build direction leans: nothing lies flat on the plate
    refused("mesh-face-not-flat", folder, round_end, carrier_of(40.0), up=(0.0, 0.3, 1.0))


def test_ports_and_stock_need_a_flat_end(folder):
    body = mesh_bodies.round_front()
    refused("mesh-side-face", folder, body, port_faces=("side",))
    refused("mesh-side-face", folder, body, stock_mm=(("side", 1.0),))
    refused("blank-face-unknown", folder, body, port_faces=("rim",))
    refused("blank-stock-refused", folder, body, stock_mm=(("top", 1.0),), part_faces=("carrier", "top"))


def test_a_sheet_deeper_than_the_mesh_is_refused(folder):
    shell = mesh_bodies.without(mesh_bodies.rod(40.0, -40, 40), mesh_bodies.rod(33.0, -50, 50))
    error = refused("blank-misses-carrier", folder, shell, carrier_of(40.0))
    assert "face 'side'" in error.found


def test_the_same_file_gives_the_same_faces_twice(folder):
    body = mesh_bodies.round_front()
    body.export(folder / "twice.stl")
    settings = MeshBlankSettings(folder / "twice.stl")
    made = [make_mesh_body(settings, carrier_of(), SIZE_MM, (0.0, 0.0, 1.0)) for _ in range(2)]
    assert fingerprint(made[0].skin) == fingerprint(made[1].skin)


class Hidden:
    """A carrier that is a cylinder but does not say so: what any other surface offers."""

    def __init__(self, carrier):
        self._carrier = carrier

    def __getattr__(self, name):
        return getattr(self._carrier, name)


def test_a_carrier_of_any_kind_serves_by_its_own_distance(folder):
    body, carrier = mesh_bodies.round_front(), carrier_of()
    seen = blank_of(folder, body, carrier, port_faces=("back",))
    hidden = blank_of(folder, body, Hidden(carrier), port_faces=("back",))
    np.testing.assert_array_equal(seen.skin.region, hidden.skin.region)
    assert [face.name for face in seen.faces] == [face.name for face in hidden.faces]
    points = np.random.default_rng(3).uniform(-50.0, 50.0, (500, 3))
    points = points[np.hypot(points[:, 0], points[:, 1]) > 5.0]
    one, two = carrier_face(carrier), carrier_face(Hidden(carrier))
    np.testing.assert_allclose(one.distance_mm(points), two.distance_mm(points), atol=1e-12)
    np.testing.assert_allclose(one.outward(points), two.outward(points), atol=1e-6)


def test_a_drawn_blank_needs_a_round_carrier():
    with pytest.raises(MorphError) as caught:
        make_blank(BlankSettings(), (), Hidden(carrier_of()), SIZE_MM, ServiceSettings())
    assert caught.value.code == "blank-needs-mesh"


def test_another_surface_off_the_mesh_is_told_where_to_lie(folder):
    error = refused("part-face-mismatch", folder, mesh_bodies.rod(40.0, -40, 40), Hidden(carrier_of(38.0)))
    assert "own file" in error.do
