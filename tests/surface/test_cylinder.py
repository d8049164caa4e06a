"""The cylinder carrier against coordinates worked out by hand, difference quotients and closed forms."""

import math

import numpy as np
import pytest

from morph.core.errors import MorphError
from morph.settings.job import CarrierSettings, Metal, SeenFrom, TrueAt
from morph.surface.cylinder import make_cylinder
from morph.surface.wrap import wrap_graph
from tests.surface.graphs import letter_f

pytestmark = pytest.mark.quick

SIZE = (60.0, 40.0)
RADIUS_MM, DEPTH_MM = 30.0, 8.0
WAYS = [(metal, seen, true) for metal in Metal for seen in SeenFrom for true in TrueAt]


def carrier(
    metal=Metal.TOWARD_AXIS, seen=SeenFrom.PART, true=TrueAt.DEPTH, radius=RADIUS_MM, depth=DEPTH_MM, size=SIZE
):
    return make_cylinder(CarrierSettings(radius, metal, depth_mm=depth, true_at=true), size, seen, depth)


def places(count=200, seed=3):
    return np.random.default_rng(seed).uniform((0.0, 0.0), SIZE, (count, 2))


def test_the_sheet_centre_lies_on_plus_x_at_height_zero():
    for metal, radius in ((Metal.TOWARD_AXIS, 22.0), (Metal.AWAY_FROM_AXIS, 38.0)):
        point = carrier(metal).point_mm(np.array([[30.0, 20.0]]), DEPTH_MM)
        np.testing.assert_allclose(point, [[radius, 0.0, 0.0]], atol=1e-12)


@pytest.mark.parametrize(
    ("metal", "seen", "sign"),
    [
        (Metal.TOWARD_AXIS, SeenFrom.PART, 1.0),
        (Metal.TOWARD_AXIS, SeenFrom.METAL, -1.0),
        (Metal.AWAY_FROM_AXIS, SeenFrom.PART, -1.0),
        (Metal.AWAY_FROM_AXIS, SeenFrom.METAL, 1.0),
    ],
)
def test_a_place_right_of_the_centre_by_hand(metal, seen, sign):
    # 11 pi mm right of the centre on a radius of 22 mm is 90 degrees; on 38 mm it is 19 pi mm.
    true = 22.0 if metal is Metal.TOWARD_AXIS else 38.0
    point = carrier(metal, seen, size=(2 * math.pi * true, 40.0)).point_mm(
        np.array([[1.5 * math.pi * true, 31.0]]), DEPTH_MM
    )
    np.testing.assert_allclose(point, [[0.0, sign * true, 11.0]], atol=1e-12)


def reads(points, eye, up=(0.0, 0.0, 1.0)):
    """What an eye at `eye` looking at the origin's side sees: (right, up) of each point."""
    forward = points.mean(axis=0) - eye
    forward = forward / np.linalg.norm(forward)
    right = np.cross(forward, up)
    right /= np.linalg.norm(right)
    return np.column_stack([(points - eye) @ right, points @ np.asarray(up)])


@pytest.mark.parametrize(("metal", "seen"), [(metal, seen) for metal in Metal for seen in SeenFrom])
def test_letter_f_reads_right_from_the_declared_side(metal, seen):
    """The stem is left of both arms and the longer arm is on top, for an eye on the side the drawing is read from."""
    graph = letter_f(SIZE)
    wrapped = wrap_graph(graph, carrier(metal, seen), DEPTH_MM)
    outside, inside = np.array([200.0, 0.0, 0.0]), np.array([0.0, 0.0, 0.0])
    part_side = outside if metal is Metal.TOWARD_AXIS else inside
    metal_side = inside if metal is Metal.TOWARD_AXIS else outside
    at = {node.id: k for k, node in enumerate(graph.nodes)}
    seen_as = reads(wrapped.nodes_mm, part_side if seen is SeenFrom.PART else metal_side)
    stem, low, high, arm_low, arm_high = (seen_as[at[n]] for n in ("N2", "N1", "N4", "N3", "N5"))
    assert arm_low[0] > stem[0] + 5 and arm_high[0] > arm_low[0] + 2
    assert low[1] < stem[1] < high[1]
    assert abs(arm_high[1] - high[1]) < 1e-9
    # Seen from the other side it is a mirror image.
    mirrored = reads(wrapped.nodes_mm, metal_side if seen is SeenFrom.PART else part_side)
    assert mirrored[at["N3"]][0] < mirrored[at["N2"]][0]


def test_letter_f_lands_on_coordinates_worked_out_by_hand():
    # Core R 30, depth 8: radius 22. N1 at sheet (20, 5): angle (20 - 30) / 22, height 5 - 20.
    graph = letter_f(SIZE)
    core = wrap_graph(graph, carrier(), DEPTH_MM)
    angle = -10.0 / 22.0
    np.testing.assert_allclose(core.nodes_mm[0], [22 * math.cos(angle), 22 * math.sin(angle), -15.0], atol=1e-12)
    # Jacket R 30, depth 8: radius 38, the angle turned over. N5 at (40, 35).
    jacket = wrap_graph(graph, carrier(Metal.AWAY_FROM_AXIS), DEPTH_MM)
    angle = -10.0 / 38.0
    np.testing.assert_allclose(jacket.nodes_mm[4], [38 * math.cos(angle), 38 * math.sin(angle), 15.0], atol=1e-12)


@pytest.mark.parametrize(("metal", "seen", "true"), WAYS)
def test_jacobian_agrees_with_differences(metal, seen, true):
    it, sheet, h = carrier(metal, seen, true), places(), 1e-3
    for depth in (0.0, 3.0, DEPTH_MM):
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
        # Five-point difference quotient: rounding of 40 mm / 1e-3 is the larger error.
        np.testing.assert_allclose(it.jacobian(sheet, depth), differences, atol=5e-11)


@pytest.mark.parametrize(("metal", "seen", "true"), WAYS)
def test_offset_jacobian_follows_from_the_shape_operator(metal, seen, true):
    """J_d = J (I - d S), the offset surface of differential geometry (for example do Carmo 1976, section 3.5)."""
    it, sheet = carrier(metal, seen, true), places(20)
    for depth in (0.0, 5.0, DEPTH_MM):
        offset = it.jacobian(sheet, 0.0) @ (np.eye(2) - depth * it.shape_operator(sheet))
        np.testing.assert_allclose(it.jacobian(sheet, depth), offset, atol=1e-13)


def test_principal_curvature_is_one_over_the_radius_toward_the_axis():
    """Cylinder: 1 / R and 0; positive where the face is convex seen from outside the metal."""
    np.testing.assert_allclose(carrier().shape_operator(places(1))[0], [[1 / 30.0, 0.0], [0.0, 0.0]])
    np.testing.assert_allclose(
        carrier(Metal.AWAY_FROM_AXIS).shape_operator(places(1))[0], [[-1 / 30.0, 0.0], [0.0, 0.0]]
    )


@pytest.mark.parametrize(("metal", "seen", "true"), WAYS)
def test_points_lie_at_depth_along_the_normal_and_develop_back(metal, seen, true):
    it, sheet = carrier(metal, seen, true), places()
    face, deep = it.point_mm(sheet, 0.0), it.point_mm(sheet, DEPTH_MM)
    np.testing.assert_allclose(deep, face + DEPTH_MM * it.into_metal(sheet), atol=1e-12)
    np.testing.assert_allclose(it.distance_mm(deep), DEPTH_MM, atol=1e-12)
    np.testing.assert_allclose(it.develop(deep), np.column_stack([sheet, np.full(len(sheet), DEPTH_MM)]), atol=1e-11)


def test_each_point_can_have_its_own_depth():
    it, sheet = carrier(), places(5)
    depth = np.linspace(0.0, 10.0, 5)
    np.testing.assert_allclose(it.distance_mm(it.point_mm(sheet, depth)), depth, atol=1e-12)


def raises(code, **changed):
    with pytest.raises(MorphError) as caught:
        carrier(**changed)
    assert caught.value.code == code
    return caught.value


def test_a_depth_past_the_axis_is_refused():
    error = raises("depth-past-axis", depth=30.0)
    assert "30.000 mm" in error.found and "28.000 mm" in error.expected
    raises("depth-past-axis", depth=28.5)
    raises("depth-past-axis", depth=300.0)


def test_a_jacket_may_be_deeper_than_its_radius():
    assert carrier(Metal.AWAY_FROM_AXIS, depth=31.0).true_radius_mm == 61.0


@pytest.mark.parametrize("true", list(TrueAt))
def test_a_sheet_wider_than_one_turn_is_refused(true):
    turn = 2 * math.pi * (22.0 if true is TrueAt.DEPTH else 30.0)
    assert carrier(true=true, size=(turn, 40.0)).size_mm[0] == turn
    error = raises("sheet-wraps-past-itself", true=true, size=(turn + 0.01, 40.0))
    assert f"{turn:.3f}" in error.expected


@pytest.mark.parametrize(
    "changed",
    [
        {"radius": 0.0},
        {"radius": -3.0},
        {"radius": math.nan},
        {"depth": 0.0},
        {"size": (0.0, 4.0)},
        {"size": (4.0, -1.0)},
    ],
)
def test_sizes_that_are_not_positive_are_refused(changed):
    raises("carrier-not-positive", **changed)
