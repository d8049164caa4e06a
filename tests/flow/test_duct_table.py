"""The looked-up factors against fresh solutions, and their agreement with the areas of body/section.py."""

import math

import numpy as np
import pytest

from morph.body.section import SectionRule, hydraulic_diameter_mm, roof_radius_ratio, roof_share, section_area_mm2
from morph.flow.duct import solve_duct
from morph.flow.duct_outline import arched_outline, roofed_outline
from morph.flow.duct_table import (
    ANGLES_DEG,
    RIDGES,
    SINES,
    friction_factor_re,
    kept_tables,
    laminar_nusselt,
    solve_arched,
    solve_roofed,
)
from morph.settings.job import SectionShape

pytestmark = pytest.mark.quick

ORIGIN = np.zeros(2)


def bore_of_share(rule, share):
    """The least bore of a fine scan with this much roof; 4 mm where the roof does not fade."""
    bores = np.linspace(1.0, 30.0, 29001)
    return float(bores[np.argmax(roof_share(bores, rule) >= share)]) if rule.shape is SectionShape.AUTO else 4.0


def along(sine):
    """A tangent whose angle with +z has this sine."""
    return np.array([[sine, 0.0, math.sqrt(1.0 - sine * sine)]])


def test_the_kept_numbers_are_those_of_the_finite_elements():
    roofed, arched = kept_tables()
    for i in range(0, len(ANGLES_DEG), 4):
        for j in range(0, len(RIDGES), 3):
            assert solve_roofed(ANGLES_DEG[i], RIDGES[j]) == pytest.approx(roofed[i, j], abs=2e-4)
        for j in range(0, len(SINES), 4):
            assert solve_arched(ANGLES_DEG[i], SINES[j]) == pytest.approx(arched[i, j], abs=2e-4)


@pytest.mark.parametrize("shape", [SectionShape.ROOFED, SectionShape.AUTO, SectionShape.ARCHED])
@pytest.mark.parametrize("angle_deg", [33.0, 47.0, 62.5, 71.0])
def test_between_knots_and_against_area_and_hydraulic_diameter(shape, angle_deg):
    """A finer solution on an outline built here from the same bore, direction and rule."""
    rule = SectionRule(shape, angle_deg, free_span_mm=6.0)
    for sine, wanted in ((1.0, 0.0), (1.0, 0.1), (0.93, 1.0), (0.9, 0.5), (0.71, 0.9), (0.3, 0.7)):
        bore = bore_of_share(rule, wanted)
        bores, tangent = np.array([bore]), along(sine)
        if shape is SectionShape.ARCHED:
            outline = arched_outline(math.radians(angle_deg), sine, 8)
        else:
            radius = float(roof_radius_ratio(roof_share(bores, rule), rule)[0])
            lean, cut = math.acos(min(rule.roof_cosine / sine, 1.0)), math.acos(radius)
            outline = roofed_outline(lean, min(cut, lean), 12)
        exact = solve_duct(outline, ORIGIN, 16)
        found = float(friction_factor_re(bores, tangent, rule)[0])
        # 0.05 %: the spline between knots, the largest part of it in arches
        assert found == pytest.approx(exact.friction_re, rel=5e-4), (sine, bore)
        assert float(laminar_nusselt(bores, tangent, rule)[0]) == pytest.approx(exact.nusselt_h1, rel=1e-3)
        t = float(laminar_nusselt(bores, tangent, rule, uniform_wall=True)[0])
        assert t == pytest.approx(exact.nusselt_t, rel=1e-3)
        # 0.02 %: section.py takes the area of arches from 7200 directions, and its corner falls between two
        assert float(section_area_mm2(bores, tangent, rule)[0]) == pytest.approx(0.25 * bore**2 * exact.area, rel=2e-4)
        diameter = 0.5 * bore * exact.hydraulic_diameter
        assert float(hydraulic_diameter_mm(bores, tangent, rule)[0]) == pytest.approx(diameter, rel=2e-4)


def test_published_teardrops_and_circles():
    """Rows found with a separate finite-element program: 62.02 at 45 degrees, 59.52 at 60; the circle exact."""
    flat = along(1.0)
    for angle, friction in ((45.0, 62.02), (60.0, 59.52)):
        found = friction_factor_re(np.array([4.0]), flat, SectionRule(SectionShape.ROOFED, angle))
        assert float(found[0]) == pytest.approx(friction, rel=2e-3)
    for shape in SectionShape:
        upright = friction_factor_re(np.array([4.0]), along(0.0), SectionRule(shape, 47.0))
        assert float(upright[0]) == pytest.approx(64.0, rel=1e-5), shape
    assert friction_factor_re(np.array([4.0]), flat, SectionRule()).tolist() == [64.0]


@pytest.mark.parametrize("shape", list(SectionShape))
def test_a_branch_at_once_is_its_samples_one_by_one(shape):
    rule = SectionRule(shape, 47.0, free_span_mm=6.0)
    sines = np.linspace(0.0, 1.0, 40)
    tangents = np.concatenate([along(sine) for sine in sines])
    bores = np.linspace(2.0, 10.0, 40)
    found = friction_factor_re(bores, tangents, rule)
    single = [float(friction_factor_re(bores[i : i + 1], tangents[i : i + 1], rule)[0]) for i in range(40)]
    assert found.shape == (40,) and found.tolist() == single


@pytest.mark.parametrize("angle_deg", [20.0, 47.0, 70.0])
def test_the_factor_moves_smoothly_with_the_bore_of_an_auto_section(angle_deg):
    """Sizing differentiates through it: no step, and no slope that jumps, while the roof fades."""
    rule = SectionRule(SectionShape.AUTO, angle_deg, free_span_mm=6.0)
    bores = np.linspace(0.99 * bore_of_share(rule, 1e-9), 1.01 * bore_of_share(rule, 1.0), 2001)
    found = friction_factor_re(bores, np.repeat(along(1.0), 2001, axis=0), rule)
    slope = np.diff(found)
    assert np.abs(slope).max() < 0.05 and np.abs(np.diff(slope)).max() < 0.05 * np.abs(slope).max()


def test_the_steepest_roof_stays_finite():
    for shape in (SectionShape.ROOFED, SectionShape.ARCHED, SectionShape.AUTO):
        found = friction_factor_re(np.array([4.0]), along(1.0), SectionRule(shape, 89.9, free_span_mm=1.0))
        assert 40.0 < float(found[0]) < 70.0
