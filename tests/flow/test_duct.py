"""Laminar factors by finite elements against closed forms, series and published tables.

Shah & London 1978: R. K. Shah, A. L. London, Laminar Flow Forced Convection in Ducts (Advances in Heat Transfer,
supplement 1). Where a row says "own", the number was found by a separate finite-element program on triangles.
"""

import math

import numpy as np
import pytest

from morph.flow.duct import solve_duct
from morph.flow.duct_outline import arc, arched_outline, join_sides, line, roofed_outline

pytestmark = pytest.mark.quick

ORIGIN = np.zeros(2)


def polygon(*corners, n=12):
    return join_sides([line(a, b) for a, b in zip(corners, corners[1:] + corners[:1], strict=True)], n)


def rectangle(ratio, n=16):
    return polygon((-ratio, -1.0), (ratio, -1.0), (ratio, 1.0), (-ratio, 1.0), n=n)


def circle(n=4):
    return join_sides([arc(i * math.pi / 2, (i + 1) * math.pi / 2) for i in range(4)], n)


def ellipse(width, n=12):
    return join_sides([arc(i * math.pi / 2, (i + 1) * math.pi / 2, width) for i in range(4)], n)


def rectangle_series(ratio):
    """f Re of a rectangle, exact series (Shah & London 1978, eq. 333): the flow of -lap w = 1 between sides a, b."""
    a, b = 1.0, 1.0 / ratio
    n = np.arange(1, 400, 2)
    flow = a * b**3 / 12.0 * (1.0 - 192.0 / math.pi**5 * b / a * (np.tanh(n * math.pi * a / (2 * b)) / n**5).sum())
    diameter = 2.0 * a * b / (a + b)
    return 2.0 * diameter**2 * a * b / flow


@pytest.mark.parametrize(
    ("outline", "friction_re", "tolerance"),
    [
        (circle(), 64.0, 1e-4),  # exact
        (rectangle(1.0), 56.908, 1e-4),  # Shah & London 1978
        (rectangle(2.0), 62.192, 1e-4),
        (rectangle(4.0), 72.931, 1e-4),
        (rectangle(8.0), 82.340, 1e-4),
        (polygon((-1.0, -(3**-0.5)), (1.0, -(3**-0.5)), (0.0, 2 * 3**-0.5)), 160.0 / 3.0, 1e-4),  # equilateral, exact
        (polygon((-1.0, -0.41), (1.0, -0.41), (0.0, 0.59)), 52.61, 4e-3),  # right isosceles
        (ellipse(2.0), 67.29, 1e-4),
        (roofed_outline(math.radians(45.0), 0.0, 8), 62.02, 2e-3),  # own
        (roofed_outline(math.radians(60.0), 0.0, 8), 59.52, 2e-3),  # own
    ],
)
def test_friction_of_published_sections(outline, friction_re, tolerance):
    assert solve_duct(outline, ORIGIN).friction_re == pytest.approx(friction_re, rel=tolerance)


@pytest.mark.parametrize("ratio", [1.0, 1.5, 3.0, 6.0])
def test_friction_of_rectangles_against_the_exact_series(ratio):
    assert solve_duct(rectangle(ratio), ORIGIN).friction_re == pytest.approx(rectangle_series(ratio), rel=5e-5)


@pytest.mark.parametrize("width", [1.3, 2.0, 3.0])
def test_friction_of_ellipses_against_the_closed_form(width):
    """Shah & London 1978: f Re = 8 (1 + m^2) (pi / E(1 - m^2))^2, m = b / a; E from scipy."""
    from scipy.special import ellipe

    m = 1.0 / width
    exact = 8.0 * (1.0 + m * m) * (math.pi / ellipe(1.0 - m * m)) ** 2
    assert solve_duct(ellipse(width), ORIGIN).friction_re == pytest.approx(exact, rel=5e-5)


@pytest.mark.parametrize(
    ("outline", "h1", "t", "tolerance"),
    [
        (circle(), 48.0 / 11.0, 3.657, 2e-4),  # exact; Shah & London 1978
        (rectangle(1.0), 3.608, 2.976, 4e-3),
        (polygon((-1.0, -(3**-0.5)), (1.0, -(3**-0.5)), (0.0, 2 * 3**-0.5)), 28.0 / 9.0, 2.495, 4e-3),
        (ellipse(2.0), 4.558, 3.742, 5e-3),
        (roofed_outline(math.radians(45.0), 0.0, 8), 4.151, 3.464, 2e-3),  # own
        (roofed_outline(math.radians(60.0), 0.0, 8), 3.834, 3.162, 2e-3),  # own
    ],
)
def test_heat_transfer_of_published_sections(outline, h1, t, tolerance):
    found = solve_duct(outline, ORIGIN)
    assert found.nusselt_h1 == pytest.approx(h1, rel=tolerance)
    assert found.nusselt_t == pytest.approx(t, rel=tolerance)


@pytest.mark.parametrize("section", ["circle", "square", "roofed"])
def test_error_falls_with_the_fourth_power_of_the_element(section):
    make = {
        "circle": lambda n: (circle(n), 64.0),
        "square": lambda n: (rectangle(1.0, 2 * n), rectangle_series(1.0)),
        "roofed": lambda n: (roofed_outline(math.radians(45.0), 0.0, n), None),
    }[section]
    found = [solve_duct(make(n)[0], ORIGIN, 3 * n // 2).friction_re for n in (2, 4, 8, 16)]
    exact = make(2)[1]
    errors = np.abs(np.array(found) - exact) if exact is not None else np.abs(np.diff(found))
    orders = np.log2(errors[:-1] / errors[1:])
    assert orders[-1] > 3.0, (orders, errors)


def test_a_larger_section_has_the_same_factors():
    one, five = solve_duct(rectangle(2.0), ORIGIN), solve_duct(5.0 * rectangle(2.0) + 3.0, ORIGIN + 3.0)
    assert five.friction_re == pytest.approx(one.friction_re, rel=1e-9)
    assert five.nusselt_t == pytest.approx(one.nusselt_t, rel=1e-9)
    assert five.area == pytest.approx(25.0 * one.area, rel=1e-9)


def test_a_full_roof_has_the_area_and_perimeter_of_its_tangents():
    """Perimeter 2 A / r of an outline tangent to a circle; area r^2 (pi - b + tan b)."""
    found = solve_duct(roofed_outline(math.radians(50.0), 0.0, 8), ORIGIN)
    b = math.radians(50.0)
    assert found.area == pytest.approx(math.pi - b + math.tan(b), rel=1e-6)
    assert found.hydraulic_diameter == pytest.approx(2.0, rel=1e-6)


def test_an_arch_of_no_angle_is_a_circle_and_a_flat_one_has_its_corner():
    assert solve_duct(arched_outline(0.0, 1.0, 4), ORIGIN).friction_re == pytest.approx(64.0, rel=1e-4)
    outline = arched_outline(math.radians(30.0), 1.0, 4)
    assert outline[:, 1].max() == pytest.approx(math.sqrt(3.0), rel=1e-9)  # r sqrt(2 k - 1), k = 2


@pytest.mark.parametrize("outline", [circle()[::-1], circle()[:-1], circle() + 2.0])
def test_an_outline_that_does_not_go_around_its_centre_is_refused(outline):
    with pytest.raises(ValueError, match="outline"):
        solve_duct(outline, ORIGIN)
