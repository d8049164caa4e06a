"""Sections in closed form against polygons drawn with shapely: where the centre of area lies, and when auto is roofed."""

import math

import numpy as np
import pytest
from shapely.geometry import Point, Polygon, box

from morph.body.section import SectionRule, reach_mm, roof_radius_ratio, roof_share, section_centroid_mm
from morph.settings.job import SectionShape

pytestmark = pytest.mark.quick

FLAT = np.array([1.0, 0.0, 0.0])


def drawn(shape, angle_deg, share=1.0):
    """The section of radius 1 that lies flat, drawn: the circle and its tangent roof, or two arcs."""
    circle = Point(0, 0).buffer(1.0, quad_segs=3000)
    b = math.radians(angle_deg)
    if shape is SectionShape.ARCHED:
        k = 1.0 / (1.0 - math.sin(b))
        arcs = [Point(sign * (k - 1.0), 0).buffer(k, quad_segs=3000) for sign in (-1.0, 1.0)]
        return arcs[0].intersection(arcs[1]).intersection(box(-2, 0, 2, 9)).union(circle)
    q = float(roof_radius_ratio(np.array([share]), SectionRule(shape, angle_deg))[0])
    x, y = q * math.sin(b), q * math.cos(b)
    return circle.union(Polygon([(-x, y), (x, y), (0.0, q / math.cos(b))]))


@pytest.mark.parametrize("angle_deg", [30.0, 47.0, 60.0])
@pytest.mark.parametrize("shape", [SectionShape.ROOFED, SectionShape.ARCHED])
def test_the_centre_of_area_is_that_of_the_drawn_section(shape, angle_deg):
    found = section_centroid_mm(5.0, FLAT, SectionRule(shape, angle_deg))
    np.testing.assert_allclose(found, [0.0, 0.0, 2.5 * drawn(shape, angle_deg).centroid.y], atol=1e-5)


@pytest.mark.parametrize("bore_mm", [4.5, 5.2, 5.5, 5.8, 6.5])
def test_the_centre_of_area_of_a_fading_roof(bore_mm):
    rule = SectionRule(SectionShape.AUTO, 47.0, free_span_mm=5.85)
    share = float(roof_share(np.array([bore_mm]), rule)[0])
    wanted = 0.5 * bore_mm * drawn(SectionShape.AUTO, 47.0, share).centroid.y
    assert section_centroid_mm(bore_mm, FLAT, rule)[2] == pytest.approx(wanted, abs=1e-5)


def test_the_centre_of_area_of_a_channel_that_climbs_is_on_its_centreline():
    for shape in SectionShape:
        assert not section_centroid_mm(5.0, np.array([0.0, 0.0, 1.0]), SectionRule(shape)).any()
    # the roof of 47 degrees is gone once the channel climbs at 47 degrees
    steep = np.array([math.cos(math.radians(48.0)), 0.0, math.sin(math.radians(48.0))])
    np.testing.assert_allclose(section_centroid_mm(5.0, steep, SectionRule(SectionShape.ROOFED, 47.0)), 0.0, atol=1e-9)


@pytest.mark.parametrize("angle_deg", [35.0, 45.0, 50.0])
def test_auto_leaves_no_ceiling_wider_than_the_free_span(angle_deg):
    """Straight, a round ceiling flatter than b spans bore sin b; across a cross, the circle through its corners, sqrt 2 of it."""
    rule = SectionRule(SectionShape.AUTO, angle_deg + 2.0, free_span_mm=6.0)
    bores = np.linspace(1.0, 12.0, 400)
    shares = roof_share(bores, rule)
    assert (np.diff(shares) >= 0.0).all()
    assert (shares[bores < 5.1] == 0.0).all() and (shares[bores >= 6.0] == 1.0).all()
    widest_round = bores[shares == 0.0].max()
    assert math.sqrt(2.0) * widest_round * math.sin(math.radians(angle_deg)) <= 6.0


def test_the_reach_of_auto_grows_with_the_bore_without_a_step():
    """What caps and walls count: from bore / 2 to bore / (2 cos b) upwards, never falling."""
    rule = SectionRule(SectionShape.AUTO, 47.0, free_span_mm=5.85)
    bores = np.linspace(3.0, 9.0, 6001)
    reach = reach_mm(bores, rule.up[None, :], rule)
    assert reach[0] == pytest.approx(1.5)
    assert reach[-1] == pytest.approx(4.5 / math.cos(math.radians(47.0)))
    steps = np.diff(reach)
    assert steps.min() > 0.0 and steps.max() < 0.004
