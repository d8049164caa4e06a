"""Friction and bend factors against closed forms, published examples and the fluids library."""

import fluids
import numpy as np
import pytest

from morph.flow.friction import (
    bend_90,
    churchill,
    critical_reynolds,
    turbulent_only,
    white_ratio,
)
from morph.flow.grid import make_grid
from morph.flow.pipe_law import PipeLaw, Segments, straight_pipes
from morph.flow.solve import solve_grid

pytestmark = pytest.mark.quick

STEP = 1e-6


def one(value):
    return np.array([float(value)])


def darcy(re, ratio=0.0, laminar=64.0):
    return float(churchill(one(re), one(ratio), one(laminar)).value[0])


@pytest.mark.parametrize("re", [1.0, 500.0, 2500.0, 3000.0, 4000.0, 1e4, 1e5, 1e7])
@pytest.mark.parametrize("ratio", [0.0, 1e-3, 0.05])
def test_churchill_equals_the_library(re, ratio):
    assert darcy(re, ratio) == pytest.approx(fluids.friction.Churchill_1977(re, ratio), rel=1e-9)


@pytest.mark.parametrize(
    ("re", "ratio", "colebrook"),
    [
        (1e4, 0.0, 0.030883),
        (1e5, 0.0, 0.017990),
        (1e6, 0.0, 0.011645),
        (1e5, 1e-3, 0.022175),
        (1e6, 1e-3, 0.019943),
        (1e5, 1e-2, 0.038504),
    ],
)
def test_churchill_stays_near_colebrook(re, ratio, colebrook):
    """Colebrook 1939; Churchill's fit of it differs by up to 3 % (his own figure, from memory)."""
    assert darcy(re, ratio) == pytest.approx(colebrook, rel=0.03)


def test_laminar_factor_is_that_of_the_section():
    assert darcy(100.0) == pytest.approx(0.64, rel=1e-9)
    assert darcy(100.0, laminar=56.908) == pytest.approx(0.56908, rel=1e-9)  # square, Shah and London 1978


@pytest.mark.parametrize("re", [50.0, 2600.0, 3100.0, 1e4, 1e6])
@pytest.mark.parametrize("ratio", [1e-3, 0.04])
def test_slopes_of_churchill_are_differences(re, ratio):
    got = churchill(one(re), one(ratio), one(64.0))
    up, down = np.exp(STEP), np.exp(-STEP)
    for name, a, b in (
        ("by_log_re", (re * up, ratio, 64.0), (re * down, ratio, 64.0)),
        ("by_log_ratio", (re, ratio * up, 64.0), (re, ratio * down, 64.0)),
        ("by_log_laminar", (re, ratio, 64.0 * up), (re, ratio, 64.0 * down)),
    ):
        difference = (darcy(*a) - darcy(*b)) / (2.0 * STEP)
        assert float(getattr(got, name)[0]) == pytest.approx(difference, rel=1e-6, abs=1e-8 * float(got.value[0]))


def test_drop_grows_with_flow_through_every_regime():
    pipes = straight_pipes(np.full(400, 0.1), np.full(400, 0.004), np.full(400, 3e-5))
    flow = np.geomspace(1e-9, 1e-2, 400)
    drop, slope = PipeLaw(pipes, 998.2, 1e-3).drop(flow)
    assert (np.diff(drop) > 0.0).all() and (slope > 0.0).all()


def test_turbulent_law_alone_is_churchill_far_from_transition():
    assert float(turbulent_only(one(1e6), one(1e-3))[0]) == pytest.approx(darcy(1e6, 1e-3), rel=1e-6)


def test_white_1929_laminar_bends():
    dean = np.array([20.0, 50.0, 100.0, 300.0, 1000.0])
    assert white_ratio(dean)[0] == pytest.approx([1.0348, 1.2459, 1.5302, 2.2586, 3.6398], abs=1e-4)
    for de in (20.0, 300.0):
        straight = fluids.friction.friction_laminar(de)
        library = fluids.friction.helical_laminar_fd_White(Re=de, Di=1.0, Dc=1.0)
        assert float(white_ratio(one(de))[0][0]) == pytest.approx(library / straight, rel=1e-6)


def test_ito_1959_is_near_white_1929():
    """21.5 De / (1.56 + log10 De)^5.73, formula from memory: within 5 % of White."""
    dean = np.array([20.0, 50.0, 100.0, 300.0, 1000.0])
    assert white_ratio(dean)[0] == pytest.approx(21.5 * dean / (1.56 + np.log10(dean)) ** 5.73, rel=0.05)


def test_ito_1960_turbulent_bends():
    ratio = np.array([1.0, 1.5, 2.0, 3.0, 4.0, 6.0])
    got = bend_90(np.full(6, 1e5), ratio).value
    assert got == pytest.approx([0.2942, 0.2270, 0.2046, 0.2017, 0.2181, 0.2670], rel=3e-3)
    library = [fluids.fittings.bend_rounded(Di=1.0, angle=90.0, rc=r, Re=1e5, method="Ito") for r in ratio]
    assert got == pytest.approx(library, rel=3e-3)
    miller = [0.3083, 0.2449, 0.2187, 0.2103, 0.2280, 0.2807]  # Miller, Internal Flow Systems 1990, another method
    assert got == pytest.approx(miller, rel=0.2)


def test_critical_reynolds_number_of_a_bend():
    assert float(critical_reynolds(one(5.0))[0]) == pytest.approx(9573.0, rel=1e-4)  # Ito 1959, d/D = 0.1
    library = fluids.friction.helical_transition_Re_Ito(0.1, 1.0)
    assert float(critical_reynolds(one(5.0))[0]) == pytest.approx(library, rel=1e-6)
    assert float(critical_reynolds(one(1e5))[0]) == 2300.0


def bent_pipe(n, ratio, bore=0.01, turn=0.5 * np.pi):
    length = ratio * bore * turn
    whole = straight_pipes(np.full(n, length / n), np.full(n, bore))
    return Segments(
        first=np.array([0, n]),
        **{name: getattr(whole, name) for name in Segments.__slots__ if name not in ("first", "curvature_1_m")},
        curvature_1_m=np.full(n, 1.0 / (ratio * bore)),
    )


@pytest.mark.parametrize("ratio", [1.0, 2.0, 4.0, 6.0])
def test_a_turbulent_quarter_bend_costs_its_whole_coefficient(ratio):
    """Friction and excess of a 90 degree bend add up to the published total, however it is cut into segments."""
    law = PipeLaw(bent_pipe(40, ratio), 1000.0, 1e-3)
    flow = 1e5 * 1e-3 / 1000.0 / 0.01 * 0.25 * np.pi * 0.01**2
    velocity = 1e5 * 1e-3 / 1000.0 / 0.01
    total = float(law.drop(one(flow))[0][0]) / (500.0 * velocity**2)
    assert total == pytest.approx(
        fluids.fittings.bend_rounded(Di=1.0, angle=90.0, rc=ratio, Re=1e5, method="Ito"), rel=0.02
    )


def test_a_laminar_bend_costs_whites_ratio_more():
    bent, straight = bent_pipe(40, 5.0), straight_pipes(one(5.0 * 0.01 * 0.5 * np.pi), one(0.01))
    flow = one(500.0 * 1e-6 / 0.01 * 0.25 * np.pi * 0.01**2)
    ratio = PipeLaw(bent, 1000.0, 1e-3).drop(flow)[0] / PipeLaw(straight, 1000.0, 1e-3).drop(flow)[0]
    dean = 500.0 * np.sqrt(1.0 / 10.0)
    assert float(ratio[0]) == pytest.approx(
        fluids.friction.helical_laminar_fd_White(500.0, 1.0, 10.0) / (64.0 / 500.0), rel=1e-3
    )
    assert dean > 11.6


def pipe_drop_pa(length_m, bore_m, roughness_m, density, viscosity, flow_m3_s):
    law = PipeLaw(straight_pipes(one(length_m), one(bore_m), one(roughness_m)), density, viscosity)
    state = solve_grid(make_grid(2, [(0, 1)], [1]), law, np.zeros(1), np.array([flow_m3_s, 0.0]))
    return float(state.pressure[0])


def test_hagen_poiseuille():
    assert pipe_drop_pa(1.0, 0.01, 0.0, 1000.0, 1e-3, 1e-6) == pytest.approx(4.074367, rel=1e-6)


def test_white_example_6_7_oil_in_a_sloping_pipe():
    """F. M. White, Fluid Mechanics, 4th ed.: head loss 117 m, drop 265 kPa with the slope of 10 degrees down."""
    drop = pipe_drop_pa(500.0, 0.2, 0.26e-3, 900.0, 9e-3, 0.2)
    chart = 0.015  # what f read off the chart and Churchill's fit differ by; all of it goes into the head
    assert drop / (900.0 * 9.81) == pytest.approx(117.0, rel=chart)
    slope = 900.0 * 9.81 * 500.0 * np.sin(np.radians(10.0))
    assert drop - slope == pytest.approx(265e3, abs=chart * 117.0 * 900.0 * 9.81)
    re = 0.2 / (0.25 * np.pi * 0.2**2) * 0.2 / 1e-5
    assert re == pytest.approx(128_000.0, rel=0.01)
    assert darcy(re, 0.0013) == pytest.approx(0.0225, rel=0.02)  # Churchill lies 1.8 % above the chart here


def test_white_example_6_6_water_in_asphalted_iron():
    """After Moody 1944: 200 ft of 6 in pipe at 6 ft/s lose 4.5 ft."""
    foot = 0.3048
    flow = 6.0 * foot * 0.25 * np.pi * (0.5 * foot) ** 2
    drop = pipe_drop_pa(200.0 * foot, 0.5 * foot, 0.0004 * foot, 998.0, 1.0e-3, flow)
    assert drop / (998.0 * 9.81) / foot == pytest.approx(4.5, rel=0.02)


def test_white_laminar_incline():
    """rho 900, nu 2e-4 m2/s, d 6 cm, L 10 m, 4.9 m of head: 0.0076 m3/s, Re 810."""
    law = PipeLaw(straight_pipes(one(10.0), one(0.06)), 900.0, 0.18)
    state = solve_grid(make_grid(2, [(0, 1)], [0, 1]), law, np.array([4.9 * 900.0 * 9.81, 0.0]))
    assert float(state.flow[0]) == pytest.approx(0.0076, rel=0.01)
    assert float(law.reynolds(state.flow)[0]) == pytest.approx(810.0, rel=0.01)


def random_segments(seed):
    random = np.random.default_rng(seed)
    s = 60
    bent = random.uniform(0.0, 200.0, s) * (random.random(s) > 0.3)
    return Segments(
        np.arange(0, s + 1, 5),
        random.uniform(1e-3, 5e-3, s),
        random.uniform(5e-6, 30e-6, s),
        random.uniform(2e-3, 6e-3, s),
        random.uniform(56.0, 64.0, s),
        random.uniform(0.0, 1e-4, s),
        bent,
        random.uniform(0.0, 1.0, s),
        random.uniform(0.0, 1.0, s),
    )


@pytest.mark.parametrize("size", [1e-9, 1e-7, 1e-6, 1e-5, 3e-5, 1e-4, 1e-3])
def test_slopes_of_segments_are_differences(size):
    """In flow, area and hydraulic diameter, from creeping flow to Re 800 000."""
    from dataclasses import replace

    part = random_segments(1)
    flow = size * np.random.default_rng(2).uniform(-1.0, 1.0, part.n_pipes)

    def total(segments, at):
        cost = PipeLaw(segments, 998.0, 1e-3).cost(at)[1]
        return cost.friction + cost.bend + cost.minor

    law = PipeLaw(part, 998.0, 1e-3)
    cost, up, down = law.cost(flow)[1], 1.0 + STEP, 1.0 - STEP
    by_flow = (total(part, flow * up) - total(part, flow * down)) / (2.0 * STEP)
    wide = replace(part, area_m2=part.area_m2 * up), replace(part, area_m2=part.area_m2 * down)
    by_area = (total(wide[0], flow) - total(wide[1], flow)) / (2.0 * STEP)
    thick = replace(part, diameter_m=part.diameter_m * up), replace(part, diameter_m=part.diameter_m * down)
    by_diameter = (total(thick[0], flow) - total(thick[1], flow)) / (2.0 * STEP)
    scale = total(part, flow)
    assert np.abs((cost.by_log_flow - by_flow) / scale).max() < 1e-7
    assert np.abs((cost.by_log_area - by_area) / scale).max() < 1e-7
    assert np.abs((cost.by_log_diameter - by_diameter) / scale).max() < 1e-7
    drop, slope = law.drop(flow)
    difference = (law.drop(flow * up)[0] - law.drop(flow * down)[0]) / (2.0 * STEP * flow)
    assert np.abs(slope / difference - 1.0).max() < 1e-7
    assert (np.sign(drop) == np.sign(flow)).all()


def test_at_rest_the_drop_is_nothing_and_the_slope_finite():
    drop, slope = PipeLaw(random_segments(3), 998.0, 1e-3).drop(np.zeros(12))
    assert (drop == 0.0).all() and (slope > 0.0).all() and np.isfinite(slope).all()


def test_records_refuse_what_is_no_pipe():
    with pytest.raises(ValueError, match="area_m2"):
        straight_pipes(one(1.0), one(0.0))
    with pytest.raises(ValueError, match="length_m"):
        straight_pipes(one(np.nan), one(0.01))
    with pytest.raises(ValueError, match="first"):
        Segments([0, 0, 1], *[one(1.0)] * 8)
