"""Blanks of every kind: which faces they have, where the metal is, and what is refused."""

import numpy as np
import pytest
from scipy.spatial import cKDTree

from morph.body.blank import make_blank
from morph.body.face import FaceRole
from morph.core.errors import MorphError
from morph.settings.job import (
    BlankSettings,
    BoxBlankSettings,
    CarrierBlankSettings,
    CarrierSettings,
    CylinderBlankSettings,
    Metal,
    SeenFrom,
    ServiceSettings,
)
from morph.surface.cylinder import make_cylinder

pytestmark = pytest.mark.quick

SIZE = (60.0, 40.0)
CORE, JACKET = Metal.TOWARD_AXIS, Metal.AWAY_FROM_AXIS


def blank(shape, metal=CORE, size=SIZE, **more):
    carrier = make_cylinder(CarrierSettings(30.0, metal, depth_mm=8.0), size, SeenFrom.PART, 8.0)
    return make_blank(BlankSettings(shape, **more), (), carrier, size, ServiceSettings())


def inside(it, points):
    return np.min([face.distance_mm(np.asarray(points, dtype=float)) for face in it.faces], axis=0) > 0


def names(it):
    return [face.name for face in it.faces]


def test_a_solid_core():
    it = blank(CarrierBlankSettings((10.0, 12.0)))
    assert names(it) == ["carrier", "foot", "top"]
    assert it.z_mm == (-30.0, 32.0) and it.outer_radius_mm == 30.0 and it.inner_radius_mm is None
    assert inside(it, [[0, 0, 0], [29.9, 0, 0], [0, 0, -29.9], [0, 0, 31.9]]).all()
    assert not inside(it, [[30.1, 0, 0], [0, 0, -30.1], [0, 0, 32.1], [22, 22, 0]]).any()


def test_a_shell_of_a_core_has_an_inner_face():
    it = blank(CarrierBlankSettings((10.0, 10.0), thickness_mm=18.0))
    assert names(it) == ["carrier", "foot", "top", "inner"] and it.inner_radius_mm == 12.0
    assert inside(it, [[12.1, 0, 0], [29.9, 0, 0]]).all() and not inside(it, [[11.9, 0, 0], [0, 0, 0]]).any()


def test_a_ring_around_a_cavity():
    it = blank(CarrierBlankSettings((10.0, 10.0), thickness_mm=20.0), JACKET)
    assert names(it) == ["carrier", "foot", "top", "outer"]
    assert (it.inner_radius_mm, it.outer_radius_mm) == (30.0, 50.0)
    assert inside(it, [[30.1, 0, 0], [49.9, 0, 0]]).all() and not inside(it, [[29.9, 0, 0], [50.1, 0, 0]]).any()


def test_a_cylinder_is_cut_to_the_carrier():
    core = blank(CylinderBlankSettings(44.0, (-40.0, 35.0)))
    assert names(core) == ["carrier", "foot", "top"] and core.outer_radius_mm == 30.0
    assert core.z_mm == (-40.0, 35.0)
    jacket = blank(CylinderBlankSettings(44.0, (-40.0, 35.0)), JACKET)
    assert (jacket.inner_radius_mm, jacket.outer_radius_mm) == (30.0, 44.0)
    assert names(jacket) == ["carrier", "foot", "top", "outer"]


def test_a_box_around_a_cavity_has_six_sides_and_a_bore():
    it = blank(BoxBlankSettings((-50, -55, -40), (50, 55, 40)), JACKET)
    assert names(it) == ["carrier", "foot", "top", "-x", "+x", "-y", "+y"]
    assert it.outer_radius_mm is None and it.inner_radius_mm == 30.0
    assert inside(it, [[49.9, 0, 0], [30.1, 0, 0], [49, 54, 39]]).all()
    assert not inside(it, [[29.9, 0, 0], [50.1, 0, 0], [0, 55.1, 0]]).any()


def test_a_box_around_a_core_keeps_only_the_sides_that_cut_it():
    it = blank(BoxBlankSettings((-5, -80, -40), (80, 80, 40)), size=(40.0, 40.0))
    assert names(it) == ["carrier", "foot", "top", "-x"]
    assert inside(it, [[-4.9, 0, 0], [29.9, 0, 0]]).all() and not inside(it, [[-5.1, 0, 0], [30.1, 0, 0]]).any()


def test_distances_inside_are_distances_to_the_surface():
    """Inside a convex body the least face distance is the distance to its surface; checked by dense surface points."""
    it = blank(BoxBlankSettings((-5, -80, -40), (80, 80, 40)), size=(40.0, 40.0))
    rng = np.random.default_rng(5)
    points = rng.uniform((-5, -30, -40), (30, 30, 40), (4000, 3))
    points = points[inside(it, points)][:60]
    surface = rng.uniform((-5, -30, -40), (30, 30, 40), (60000, 3))
    surface = surface[inside(it, surface)]
    on = [p + f.distance_mm(p)[:, None] * f.outward(p) for f in it.faces for p in (surface,)]
    on = np.concatenate(on)
    on = on[np.min([f.distance_mm(on) for f in it.faces], axis=0) > -1e-9]
    reference = cKDTree(on).query(points)[0]
    least = np.min([f.distance_mm(points) for f in it.faces], axis=0)
    assert (reference >= least - 1e-9).all()
    # The surface points lie about 1 mm apart.
    np.testing.assert_allclose(reference, least, atol=0.35)


def test_roles_and_stock_are_given_by_either_name():
    it = blank(
        BoxBlankSettings((-50, -55, -40), (50, 55, 40)),
        JACKET,
        part_faces=("carrier", "+z"),
        port_faces=("-z", "-x"),
        stock_mm=(("foot", 1.0), ("+y", 0.5)),
    )
    roles = {face.name: face.role for face in it.faces}
    assert roles["top"] is roles["carrier"] is FaceRole.PART
    assert roles["foot"] is roles["-x"] is FaceRole.PORT
    assert roles["+y"] is roles["+x"] is FaceRole.OUTER
    assert {face.name: face.stock_mm for face in it.faces if face.stock_mm} == {"foot": 1.0, "+y": 0.5}


def refused(code, *args, **more):
    with pytest.raises(MorphError) as caught:
        blank(*args, **more)
    assert caught.value.code == code
    return caught.value


def test_unknown_faces_are_named_with_the_nearest():
    error = refused("blank-face-unknown", CarrierBlankSettings(), port_faces=("fot",))
    assert "'foot'" in error.do and "foot, top" in error.expected
    refused("blank-face-unknown", CarrierBlankSettings(), part_faces=("inner",))
    refused("blank-face-unknown", CarrierBlankSettings(), stock_mm=(("+x", 1.0),))


def test_a_face_is_part_or_port():
    refused("blank-face-twice", CarrierBlankSettings(), part_faces=("carrier", "foot"), port_faces=("-z",))


def test_a_port_face_is_needed():
    assert "foot, top" in refused("blank-no-port-face", CarrierBlankSettings(), port_faces=()).do


@pytest.mark.parametrize("stock", [("carrier", 0.5), ("top", 1.0), ("foot", -0.1), ("foot", float("nan"))])
def test_stock_on_finished_faces_is_refused(stock):
    refused("blank-stock-refused", CarrierBlankSettings(), part_faces=("carrier", "top"), stock_mm=(stock,))


def test_a_cavity_needs_an_outside():
    refused("blank-thickness-missing", CarrierBlankSettings(), JACKET)


@pytest.mark.parametrize(
    ("shape", "metal"),
    [
        (CarrierBlankSettings((-1.0, 5.0)), CORE),
        (CarrierBlankSettings(thickness_mm=0.0), CORE),
        (CarrierBlankSettings(thickness_mm=30.0), CORE),
        (CarrierBlankSettings(thickness_mm=-4.0), JACKET),
        (CylinderBlankSettings(40.0, (10.0, 10.0)), CORE),
        (CylinderBlankSettings(-40.0, (-30.0, 30.0)), CORE),
        (BoxBlankSettings((0, 0, 0), (10, 0, 10)), CORE),
    ],
)
def test_sizes_that_make_no_body_are_refused(shape, metal):
    refused("blank-not-a-body", shape, metal)


def test_a_cylinder_inside_its_carrier_is_refused():
    assert "30.000" in refused("blank-inside-carrier", CylinderBlankSettings(29.0, (-40.0, 40.0))).expected
    refused("blank-inside-carrier", CylinderBlankSettings(30.0, (-40.0, 40.0)), JACKET)
    assert blank(CylinderBlankSettings(30.0, (-40.0, 40.0))).outer_radius_mm == 30.0


def test_a_blank_that_misses_the_sheet_says_by_how_much():
    error = refused("blank-misses-carrier", CylinderBlankSettings(40.0, (-18.5, 40.0)))
    assert "1.500 mm outside face 'foot'" in error.found
    error = refused("blank-misses-carrier", CarrierBlankSettings(thickness_mm=7.0), JACKET)
    assert "1.000 mm outside face 'outer'" in error.found
    error = refused("blank-misses-carrier", CarrierBlankSettings(thickness_mm=7.5))
    assert "0.500 mm outside face 'inner'" in error.found
    # A box side that cuts the face under the sheet: the half-sheet spans 60/2/22 rad on the face.
    refused("blank-misses-carrier", BoxBlankSettings((10, -80, -40), (80, 80, 40)))
    # A box beside the core never meets it: 40 mm from the axis, the core has 30.
    error = refused("blank-misses-carrier", BoxBlankSettings((40, -40, -40), (80, 40, 40)))
    assert "40.000 mm" in error.found and "30.000 mm" in error.expected


def test_a_cylinder_larger_than_the_core_is_cut_and_said():
    (notice,) = blank(CylinderBlankSettings(44.0, (-40.0, 35.0))).notices
    assert notice.code == "blank-cut-to-carrier" and "44.000 mm" in notice.text and "30.000 mm" in notice.text
    assert blank(CylinderBlankSettings(30.0, (-40.0, 40.0))).notices == ()
    assert blank(CylinderBlankSettings(44.0, (-40.0, 35.0)), JACKET).notices == ()


@pytest.mark.parametrize(
    ("shape", "metal"),
    [
        (CarrierBlankSettings((10.0, 1e4)), CORE),
        (CarrierBlankSettings(thickness_mm=1e9), JACKET),
        (BoxBlankSettings((-50, -1e7, -40), (50, 55, 40)), JACKET),
        (CylinderBlankSettings(40.0, (-40.0, float("inf"))), CORE),
    ],
)
def test_a_body_larger_than_any_machine_is_refused(shape, metal):
    assert "3000 mm" in refused("blank-too-large", shape, metal).expected
