"""Full wraps close exactly, and say which width they need."""

import math

import numpy as np
import pytest

from morph.core.errors import MorphError
from morph.settings.job import CarrierSettings, ConeMap, ConeSettings, Metal, Seam, SeenFrom, TrueAt
from morph.surface.make import make_carrier

pytestmark = pytest.mark.quick

TURN_MM = 2 * math.pi * 22.0
CONE_TURN_MM = 2 * math.pi * (30.0 - 8.0 * math.cos(math.radians(15.0)))
CYLINDER = CarrierSettings(30.0, Metal.TOWARD_AXIS, depth_mm=8.0)
CONE = ConeSettings(30.0, 15.0, Metal.TOWARD_AXIS, depth_mm=8.0, map=ConeMap.POLAR)
WAYS = [(CYLINDER, TURN_MM), (CONE, CONE_TURN_MM)]


def carrier(settings, width, seen=SeenFrom.PART):
    return make_carrier(settings, (width, 40.0), seen, 8.0, Seam.JOINED)


@pytest.mark.parametrize("seen", list(SeenFrom))
@pytest.mark.parametrize(("settings", "turn"), WAYS)
@pytest.mark.parametrize("off", [0.0, 9e-4, -9e-4])
def test_both_edges_are_one_line_and_the_map_goes_on_past_them(settings, turn, seen, off):
    it = carrier(settings, turn * (1 + off), seen)
    width, y = it.size_mm[0], np.linspace(0, 40, 9)
    left, right = (it.point_mm(np.column_stack([np.full(9, x), y]), 8.0) for x in (0.0, width))
    np.testing.assert_allclose(left, right, atol=1e-12)
    past = it.point_mm(np.column_stack([np.full(9, 1.25 * width), y]), 8.0)
    np.testing.assert_allclose(past, it.point_mm(np.column_stack([np.full(9, 0.25 * width), y]), 8.0), atol=1e-12)
    assert it.turn_mm == pytest.approx(width, rel=1e-15)
    # What it was stretched by to close shows in the length around, at the sheet's centre.
    stretch = np.linalg.norm(it.jacobian(np.array([[0.0, 20.0]]), 8.0)[0, :, 0])
    assert stretch == pytest.approx(1.0 / (1 + off), rel=1e-12)


@pytest.mark.parametrize(("settings", "turn"), WAYS)
@pytest.mark.parametrize("off", [0.0011, -0.0011, -0.5])
def test_another_width_is_refused_with_the_one_that_fits(settings, turn, off):
    with pytest.raises(MorphError) as caught:
        carrier(settings, turn * (1 + off))
    assert caught.value.code == "seam-width"
    assert f"{turn:.3f} mm" in caught.value.expected and f"{turn * (1 + off) / 2 / math.pi:.3f}" in caught.value.do


def test_lengths_true_at_the_face_ask_for_the_faces_turn():
    face = CarrierSettings(30.0, Metal.TOWARD_AXIS, depth_mm=8.0, true_at=TrueAt.FACE)
    assert carrier(face, 2 * math.pi * 30.0).true_radius_mm == pytest.approx(30.0)


def test_a_flat_cone_map_cannot_close():
    flat = ConeSettings(30.0, 15.0, Metal.TOWARD_AXIS, depth_mm=8.0)
    with pytest.raises(MorphError) as caught:
        carrier(flat, CONE_TURN_MM)
    assert caught.value.code == "seam-needs-polar"
