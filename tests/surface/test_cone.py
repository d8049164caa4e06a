"""The cone carrier against hand-worked places, closed forms and difference quotients."""

import itertools
import math

import numpy as np
import pytest

from morph.core.errors import MorphError
from morph.settings.job import ConeMap, ConeSettings, Metal, SeenFrom, TrueAt
from morph.surface.cone import make_cone
from morph.surface.wrap import wrap_graph
from tests.surface.graphs import letter_f
from tests.surface.test_cylinder import reads

pytestmark = pytest.mark.quick

SIZE = (60.0, 40.0)
RADIUS_MM, DEPTH_MM, ANGLE_DEG = 30.0, 8.0, 20.0
SINE, COSINE = math.sin(math.radians(ANGLE_DEG)), math.cos(math.radians(ANGLE_DEG))
CORE, JACKET = Metal.TOWARD_AXIS, Metal.AWAY_FROM_AXIS
WAYS = list(itertools.product((ANGLE_DEG, -ANGLE_DEG), Metal, SeenFrom, TrueAt, ConeMap))


def carrier(
    angle=ANGLE_DEG,
    metal=CORE,
    seen=SeenFrom.PART,
    true=TrueAt.DEPTH,
    lay=ConeMap.FLAT,
    radius=RADIUS_MM,
    depth=DEPTH_MM,
    size=SIZE,
):
    settings = ConeSettings(radius, angle, metal, depth_mm=depth, true_at=true, map=lay)
    return make_cone(settings, size, seen, depth)


def places(count=200, seed=3):
    return np.random.default_rng(seed).uniform((0.0, 0.0), SIZE, (count, 2))


@pytest.mark.parametrize("lay", list(ConeMap))
@pytest.mark.parametrize("angle", [ANGLE_DEG, -ANGLE_DEG])
def test_the_sheet_centre_lies_on_plus_x_at_height_zero_of_the_face(lay, angle):
    middle = np.array([[30.0, 20.0]])
    for metal in Metal:
        np.testing.assert_allclose(
            carrier(angle, metal, lay=lay).point_mm(middle, 0.0), [[RADIUS_MM, 0.0, 0.0]], atol=1e-12
        )
    # Along the inward normal of a cone that widens upwards the depth goes toward the axis and up.
    deep = carrier(angle, lay=lay).point_mm(middle, DEPTH_MM)
    np.testing.assert_allclose(deep, [[RADIUS_MM - 8 * COSINE, 0.0, math.copysign(8 * SINE, angle)]], atol=1e-12)


@pytest.mark.parametrize(("angle", "metal", "seen", "true", "lay"), WAYS)
def test_up_the_sheet_is_up_the_meridian(angle, metal, seen, true, lay):
    it = carrier(angle, metal, seen, true, lay)
    low, high = it.point_mm(np.array([[30.0, 10.0], [30.0, 35.0]]), DEPTH_MM)
    np.testing.assert_allclose(high - low, [math.copysign(25 * SINE, angle), 0.0, 25 * COSINE], atol=1e-12)


@pytest.mark.parametrize("true", list(TrueAt))
@pytest.mark.parametrize(("angle", "metal"), list(itertools.product((ANGLE_DEG, -ANGLE_DEG, 75.0), Metal)))
def test_the_flat_map_keeps_every_length_at_the_true_surface(angle, metal, true):
    """Isometric: both singular values of J are 1 (a cone is developable: do Carmo 1976, section 4.4)."""
    it = carrier(angle, metal, true=true, radius=50.0)
    depth = DEPTH_MM if true is TrueAt.DEPTH else 0.0
    stretch = np.linalg.svd(it.jacobian(places(), depth), compute_uv=False)
    np.testing.assert_allclose(stretch, 1.0, atol=1e-9)


def test_a_straight_line_of_the_sheet_keeps_its_length_in_space():
    """Sum of many chords of the mapped line against its length on the sheet: an independent check of the isometry."""
    it = carrier()
    line = np.array([2.0, 3.0]) + np.linspace(0, 1, 200_001)[:, None] * np.array([55.0, 34.0])
    chords = np.linalg.norm(np.diff(it.point_mm(line, DEPTH_MM), axis=0), axis=1).sum()
    assert chords == pytest.approx(math.hypot(55.0, 34.0), abs=1e-7)


def test_a_full_sector_of_the_development_closes_the_cone():
    """The unrolled cone is a sector of angle 2 pi sin a; for a = 20 degrees 2.148976 rad (handbook geometry)."""
    it = carrier(true=TrueAt.FACE)
    slant, sector = RADIUS_MM / SINE, 2.148976
    half = 0.5 * sector
    # A point at the same slant as the sheet's centre, half a sector away, lies opposite: angle pi, same radius.
    place = np.array([[30.0 + slant * math.sin(half), 20.0 + slant * (math.cos(half) - 1.0)]])
    np.testing.assert_allclose(it.point_mm(place, 0.0), [[-RADIUS_MM, 0.0, 0.0]], atol=5e-5)


@pytest.mark.parametrize("angle", [ANGLE_DEG, -ANGLE_DEG])
def test_edge_sag_by_the_closed_form_and_in_space(angle):
    it = carrier(angle)
    slant = (RADIUS_MM - 8 * COSINE) / SINE
    middle = [slant - 20.0, slant + 20.0] if angle > 0 else [slant + 20.0, slant - 20.0]
    sag = [math.copysign(math.hypot(30.0, m) - m, angle) for m in middle]
    np.testing.assert_allclose(it.edge_sag_mm(), sag, atol=1e-12)
    for y, rise in zip((0.0, 40.0), sag, strict=True):
        ends = it.point_mm(np.array([[0.0, y], [30.0, y], [60.0, y]]), DEPTH_MM)[:, 2]
        np.testing.assert_allclose(ends - ends[1], [rise * COSINE, 0.0, rise * COSINE], atol=1e-12)
    assert carrier(angle, lay=ConeMap.POLAR).edge_sag_mm() == (0.0, 0.0)


@pytest.mark.parametrize(("angle", "metal", "seen", "true", "lay"), WAYS)
def test_the_sheet_spans_the_heights_told(angle, metal, seen, true, lay):
    it = carrier(angle, metal, seen, true, lay)
    x, y = np.meshgrid(np.linspace(0, 60, 121), np.linspace(0, 40, 81))
    sheet = np.column_stack([x.ravel(), y.ravel()])
    z = np.concatenate([it.point_mm(sheet, d)[:, 2] for d in (0.0, DEPTH_MM)])
    np.testing.assert_allclose(it.sheet_z_mm(), (z.min(), z.max()), atol=1e-9)


@pytest.mark.parametrize("true", list(TrueAt))
@pytest.mark.parametrize(("angle", "metal"), list(itertools.product((ANGLE_DEG, -ANGLE_DEG), Metal)))
def test_polar_stretch_by_the_closed_form(angle, metal, true):
    """Around: radius over the true radius at the sheet's centre; along the meridian: 1."""
    it, sheet = carrier(angle, metal, true=true, lay=ConeMap.POLAR), places()
    side = 1.0 if metal is CORE else -1.0
    middle = RADIUS_MM - (side * DEPTH_MM * COSINE if true is TrueAt.DEPTH else 0.0)
    radius = RADIUS_MM - side * DEPTH_MM * COSINE + math.copysign(SINE, angle) * (sheet[:, 1] - 20.0)
    expected = np.sort(np.column_stack([radius / middle, np.ones(len(sheet))]), axis=1)
    stretch = np.linalg.svd(it.jacobian(sheet, DEPTH_MM), compute_uv=False)
    np.testing.assert_allclose(np.sort(stretch, axis=1), expected, rtol=1e-12)


def test_distortion_of_a_polar_wrap_is_its_stretch():
    graph = letter_f(SIZE)
    found = wrap_graph(graph, carrier(lay=ConeMap.POLAR), DEPTH_MM).distortion
    # The F reaches from y = 5 to 35 on a sheet 40 high: the radius changes by 15 sin a to either side.
    assert found.length_error_max == pytest.approx(15 * SINE / (RADIUS_MM - 8 * COSINE), rel=1e-6)
    assert wrap_graph(graph, carrier(), DEPTH_MM).distortion.length_error_max < 1e-9


@pytest.mark.parametrize(("angle", "metal", "seen", "true", "lay"), WAYS)
def test_jacobian_agrees_with_differences(angle, metal, seen, true, lay):
    it, sheet, h = carrier(angle, metal, seen, true, lay), places(60), 1e-3
    for depth in (0.0, DEPTH_MM):
        differences = np.stack(
            [
                (
                    8 * (it.point_mm(sheet + e, depth) - it.point_mm(sheet - e, depth))
                    - (it.point_mm(sheet + 2 * e, depth) - it.point_mm(sheet - 2 * e, depth))
                )
                / (12 * h)
                for e in (np.array([h, 0.0]), np.array([0.0, h]))
            ],
            axis=2,
        )
        # Five-point difference quotient: rounding of 60 mm / 1e-3 is the larger error.
        np.testing.assert_allclose(it.jacobian(sheet, depth), differences, atol=1e-10)


@pytest.mark.parametrize(("angle", "metal", "seen", "true", "lay"), WAYS)
def test_offset_jacobian_follows_from_the_shape_operator(angle, metal, seen, true, lay):
    """J_d = J (I - d S), the offset surface of differential geometry (for example do Carmo 1976, section 3.5)."""
    it, sheet = carrier(angle, metal, seen, true, lay), places(40)
    for depth in (5.0, DEPTH_MM):
        offset = it.jacobian(sheet, 0.0) @ (np.eye(2) - depth * it.shape_operator(sheet))
        np.testing.assert_allclose(it.jacobian(sheet, depth), offset, atol=1e-12)


def test_principal_curvatures_are_those_of_a_cone():
    """Cone: 1 / (s tan a) and 0 at slant s from the apex (differential geometry, for example do Carmo 1976)."""
    sheet = places(50)
    for metal, sign in ((CORE, 1.0), (JACKET, -1.0)):
        it = carrier(metal=metal, true=TrueAt.FACE)
        slant = np.hypot(sheet[:, 0] - 30.0, sheet[:, 1] - 20.0 + RADIUS_MM / SINE)
        found = np.linalg.eigvals(it.shape_operator(sheet))
        expected = sign / (slant * math.tan(math.radians(ANGLE_DEG)))
        np.testing.assert_allclose(found[np.arange(50), np.abs(found).argmax(axis=1)], expected, rtol=1e-9)
        np.testing.assert_allclose(np.abs(found).min(axis=1), 0.0, atol=1e-12)


@pytest.mark.parametrize(("angle", "metal", "seen", "true", "lay"), WAYS)
def test_points_lie_at_depth_along_the_normal_and_develop_back(angle, metal, seen, true, lay):
    it, sheet = carrier(angle, metal, seen, true, lay), places()
    face, deep = it.point_mm(sheet, 0.0), it.point_mm(sheet, DEPTH_MM)
    np.testing.assert_allclose(deep, face + DEPTH_MM * it.into_metal(sheet), atol=1e-12)
    np.testing.assert_allclose(it.distance_mm(deep), DEPTH_MM, atol=1e-12)
    np.testing.assert_allclose(it.distance_mm(face), 0.0, atol=1e-12)
    np.testing.assert_allclose(it.develop(deep), np.column_stack([sheet, np.full(len(sheet), DEPTH_MM)]), atol=1e-10)
    # The normal is square to both tangents.
    square = np.einsum("kij,ki->kj", it.jacobian(sheet, 0.0), it.into_metal(sheet))
    np.testing.assert_allclose(square, 0.0, atol=1e-12)


def test_each_point_can_have_its_own_depth():
    it, sheet = carrier(), places(5)
    depth = np.linspace(0.0, 10.0, 5)
    np.testing.assert_allclose(it.distance_mm(it.point_mm(sheet, depth)), depth, atol=1e-12)


@pytest.mark.parametrize("lay", list(ConeMap))
@pytest.mark.parametrize(("angle", "metal", "seen"), list(itertools.product((15.0, -15.0), Metal, SeenFrom)))
def test_letter_f_reads_right_from_the_declared_side(angle, metal, seen, lay):
    graph = letter_f(SIZE)
    wrapped = wrap_graph(graph, carrier(angle, metal, seen, lay=lay), DEPTH_MM)
    outside, inside = np.array([200.0, 0.0, 0.0]), np.zeros(3)
    part_side, metal_side = (outside, inside) if metal is CORE else (inside, outside)
    at = {node.id: k for k, node in enumerate(graph.nodes)}
    seen_as = reads(wrapped.nodes_mm, part_side if seen is SeenFrom.PART else metal_side)
    stem, low, high, arm_low, arm_high = (seen_as[at[n]] for n in ("N2", "N1", "N4", "N3", "N5"))
    assert arm_low[0] > stem[0] + 5 and arm_high[0] > arm_low[0] + 2
    assert low[1] < stem[1] < high[1]


def test_a_small_angle_is_nearly_the_cylinder():
    from morph.settings.job import CarrierSettings
    from morph.surface.cylinder import make_cylinder

    straight = make_cylinder(CarrierSettings(RADIUS_MM, CORE, depth_mm=DEPTH_MM), SIZE, SeenFrom.PART, DEPTH_MM)
    for lay in ConeMap:
        # Over 20 mm of height the radius changes by 0.0035 mm, the angle of the edge by 2e-4 rad.
        it = carrier(0.01, lay=lay)
        np.testing.assert_allclose(it.point_mm(places(), DEPTH_MM), straight.point_mm(places(), DEPTH_MM), atol=0.03)


def raises(code, **changed):
    with pytest.raises(MorphError) as caught:
        carrier(**changed)
    assert caught.value.code == code
    return caught.value


def test_a_sheet_past_the_apex_is_refused():
    # At 60 degrees the meridian of 20 mm takes 17.3 mm of radius.
    assert "lower edge" in raises("sheet-past-apex", angle=60.0, radius=19.0).found
    assert "upper edge" in raises("sheet-past-apex", angle=-60.0, radius=19.0).found
    assert raises("sheet-past-apex", angle=60.0, radius=19.0).found.startswith(f"{19 - 20 * math.sin(math.pi / 3):.3f}")


def test_a_depth_past_the_axis_is_refused_with_the_depth_that_fits():
    error = raises("depth-past-axis", depth=24.0)
    most = (RADIUS_MM - 20 * SINE - 2.0) / COSINE
    assert f"{most:.3f} mm" in error.expected
    assert carrier(depth=most - 1e-6, size=(5.0, 40.0)).depth_mm < most
    raises("depth-past-axis", depth=most + 1e-3, size=(5.0, 40.0))
    assert carrier(metal=JACKET, depth=60.0).depth_mm == 60.0


@pytest.mark.parametrize("angle", [ANGLE_DEG, -ANGLE_DEG])
def test_a_sheet_wider_than_one_turn_is_refused(angle):
    # Flat: the narrow edge of the sheet meets itself behind the axis when atan(W/2 / slant) = pi sin a.
    slant = (RADIUS_MM - 8 * COSINE) / SINE - 20.0
    most = 2 * slant * math.tan(math.pi * SINE)
    assert carrier(angle, size=(most - 0.01, 40.0)).size_mm[0] < most
    assert f"{most:.3f}" in raises("sheet-wraps-past-itself", angle=angle, size=(most + 0.01, 40.0)).expected
    turn = 2 * math.pi * (RADIUS_MM - 8 * COSINE)
    assert carrier(angle, lay=ConeMap.POLAR, size=(turn, 40.0)).size_mm[0] == turn
    error = raises("sheet-wraps-past-itself", angle=angle, lay=ConeMap.POLAR, size=(turn + 0.01, 40.0))
    assert f"{turn:.3f}" in error.expected


@pytest.mark.parametrize("changed", [{"radius": 0.0}, {"depth": float("nan")}, {"size": (0.0, 40.0)}])
def test_sizes_that_are_not_positive_are_refused(changed):
    raises("carrier-not-positive", **changed)
