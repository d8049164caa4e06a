"""Lengths, depth and distortion of a wrapped graph against closed forms."""

import itertools
import math

import numpy as np
import pytest
from scipy.integrate import quad

from morph.core.errors import MorphError
from morph.geometry.curve import curve_at
from morph.settings.job import CarrierSettings, Metal, SectionSettings, SeenFrom, ServiceSettings, TrueAt
from morph.surface.cylinder import make_cylinder
from morph.surface.wrap import choose_depth_mm, wrap_graph
from tests.surface.graphs import cross, letter_f, make_graph, make_profile, straight_line

pytestmark = pytest.mark.quick

SIZE = (60.0, 40.0)


def wrapped(graph, metal=Metal.TOWARD_AXIS, true=TrueAt.DEPTH, radius=30.0, depth=8.0):
    settings = CarrierSettings(radius, metal, depth_mm=depth, true_at=true)
    return wrap_graph(graph, make_cylinder(settings, graph.size_mm, SeenFrom.PART, depth), depth)


def slanted(dx, dy):
    return make_graph(SIZE, {"N1": (10.0, 5.0, "a"), "N2": (10.0 + dx, 5.0 + dy, "b")}, [("N1", "N2", 4.0)])


@pytest.mark.parametrize("metal", list(Metal))
@pytest.mark.parametrize(("dx", "dy"), [(40.0, 0.0), (0.0, 30.0), (40.0, 30.0), (12.3, -4.5 + 9.0)])
def test_a_straight_line_keeps_its_length_at_depth(metal, dx, dy):
    """A cylinder unrolls isometrically: the helix is as long as the line (Pythagoras), to 1e-9 relative."""
    result = wrapped(slanted(dx, dy), metal)
    assert result.branches[0].length_mm == pytest.approx(math.hypot(dx, dy), rel=1e-9)
    assert result.graph.branches[0].length_mm == pytest.approx(result.branches[0].length_mm, rel=1e-9)


@pytest.mark.parametrize(("metal", "deep"), [(Metal.TOWARD_AXIS, 22.0), (Metal.AWAY_FROM_AXIS, 38.0)])
def test_the_face_scale_is_the_ratio_of_radii(metal, deep):
    at_depth = wrapped(slanted(40.0, 0.0), metal)
    assert at_depth.distortion.face_scale == pytest.approx(30.0 / deep, rel=1e-9)
    at_face = wrapped(slanted(40.0, 0.0), metal, TrueAt.FACE)
    assert at_face.distortion.face_scale == pytest.approx(1.0, rel=1e-9)
    assert at_face.branches[0].length_mm == pytest.approx(40.0 * deep / 30.0, rel=1e-9)


def test_a_slanted_line_true_at_the_face_by_pythagoras():
    result = wrapped(slanted(40.0, 30.0), true=TrueAt.FACE)
    assert result.branches[0].length_mm == pytest.approx(math.hypot(40.0 * 22.0 / 30.0, 30.0), rel=1e-9)


def test_curved_lengths_agree_with_adaptive_quadrature():
    """The reference integrates the speed of the 3D curve by scipy's adaptive quadrature, span by span."""
    result = wrapped(cross(), true=TrueAt.FACE)
    scale = 22.0 / 30.0
    for branch, laid in zip(result.graph.branches, result.branches, strict=True):

        def speed(u, curve=branch.curve):
            dx, dy = curve_at(curve, np.array([u]), 1)[0]
            return math.hypot(scale * dx, dy)

        breaks = np.unique(branch.curve.knots)
        reference = sum(quad(speed, a, b, epsabs=1e-12)[0] for a, b in itertools.pairwise(breaks))
        # The longest span of these curves is a whole branch that turns by about 40 degrees.
        assert laid.length_mm == pytest.approx(reference, rel=1e-9)


def test_points_tangents_and_normals_follow_the_sheet():
    result = wrapped(cross())
    carrier = result.carrier
    for branch, laid in zip(result.graph.branches, result.branches, strict=True):
        np.testing.assert_allclose(laid.xyz_mm, carrier.point_mm(branch.sheet_mm, 8.0), atol=1e-9)
        np.testing.assert_allclose(np.linalg.norm(laid.tangent, axis=1), 1.0, atol=1e-12)
        np.testing.assert_allclose((laid.tangent * laid.into_metal).sum(axis=1), 0.0, atol=1e-12)
        chords = np.diff(laid.xyz_mm, axis=0)
        turned = (chords * laid.tangent[:-1]).sum(axis=1) / np.linalg.norm(chords, axis=1)
        assert turned.min() > 0.99
    for node, place in zip(result.graph.nodes, result.nodes_mm, strict=True):
        np.testing.assert_allclose(place, carrier.point_mm(node.sheet_mm[None], 8.0)[0], atol=1e-9)


def test_distortion_is_nil_at_depth_and_the_closed_form_at_the_face():
    exact = wrapped(letter_f()).distortion
    assert max(exact.length_error_max, exact.length_error_rms, exact.area_error_max) < 1e-12
    assert exact.angle_error_max_deg < 1e-5
    off = wrapped(letter_f(), true=TrueAt.FACE).distortion
    scale = 22.0 / 30.0
    assert off.length_error_max == pytest.approx(1.0 - scale, rel=1e-9)
    # Half of the two principal stretches is 1, half is the scale.
    assert off.length_error_rms == pytest.approx((1.0 - scale) / math.sqrt(2.0), rel=1e-9)
    assert off.area_error_max == pytest.approx(1.0 - scale, rel=1e-9)
    # Tissot: sin(angle / 2) = (a - b) / (a + b).
    angle = math.degrees(2.0 * math.asin((1.0 - scale) / (1.0 + scale)))
    assert off.angle_error_max_deg == pytest.approx(angle, rel=1e-9)


def depth(carrier, bore=5.0, section=None, graph=None):
    graph = graph or straight_line(bore=bore)
    return choose_depth_mm(carrier, graph, section or SectionSettings(), ServiceSettings(), make_profile())


def test_depth_is_taken_as_given_or_from_the_widest_bore():
    assert depth(CarrierSettings(30.0, Metal.TOWARD_AXIS, depth_mm=7.5)) == 7.5
    wall = CarrierSettings(30.0, Metal.TOWARD_AXIS, wall_to_face_mm=4.0)
    assert depth(wall, bore=5.0) == pytest.approx(6.5)
    assert depth(wall, bore=5.0, section=SectionSettings(bore_scale=1.2)) == pytest.approx(7.0)
    # Clamped to the range before it counts: 12 mm is the process's largest bore, 3 mm + 0.2 band + 0.07 of meshing the least.
    assert depth(wall, bore=40.0) == pytest.approx(10.0)
    assert depth(wall, bore=1.0) == pytest.approx(4.0 + 3.27 / 2)
    assert depth(wall, bore=9.0, section=SectionSettings(bore_range_mm=(2.0, 6.0))) == pytest.approx(7.0)


@pytest.mark.parametrize("carrier", [{}, {"depth_mm": 5.0, "wall_to_face_mm": 3.0}])
def test_depth_wants_exactly_one_way(carrier):
    with pytest.raises(MorphError) as caught:
        depth(CarrierSettings(30.0, Metal.TOWARD_AXIS, **carrier))
    assert caught.value.code == "depth-not-one-way"


@pytest.mark.parametrize(
    "allowed", [(5.0, 3.0), (0.0, 4.0), (0.49, 4.0), (-1.0, 4.0), (math.nan, 4.0), (3.0, math.inf)]
)
def test_a_bore_range_must_hold_a_bore(allowed):
    with pytest.raises(MorphError) as caught:
        depth(
            CarrierSettings(30.0, Metal.TOWARD_AXIS, wall_to_face_mm=4.0),
            section=SectionSettings(bore_range_mm=allowed),
        )
    assert caught.value.code == "bore-range-empty"


def test_a_service_that_wants_more_than_the_process_prints_is_refused():
    wall = CarrierSettings(30.0, Metal.TOWARD_AXIS, wall_to_face_mm=4.0)
    with pytest.raises(MorphError) as caught:
        choose_depth_mm(
            wall, straight_line(), SectionSettings(), ServiceSettings(smallest_bore_mm=20.0), make_profile()
        )
    assert caught.value.code == "bore-range-empty"
