"""Coolants against the international formulation of water, published tables and a property library."""

import iapws
import pytest

from morph.core.errors import FlowError
from morph.flow.fluid import make_fluid, water_vapour_pa
from morph.settings.job import FluidKind, FluidSettings, OwnFluid

pytestmark = pytest.mark.quick

WATER = FluidSettings()


@pytest.mark.parametrize(
    ("temperature", "density", "viscosity", "conductivity", "capacity"),
    [
        (10.0, 999.70, 1.3059, 0.5788, 4195.2),
        (20.0, 998.21, 1.0016, 0.5980, 4184.1),
        (25.0, 997.05, 0.8900, 0.6065, 4181.3),
        (40.0, 992.22, 0.6527, 0.6285, 4179.4),
        (60.0, 983.20, 0.4660, 0.6510, 4185.0),
        (80.0, 971.79, 0.3540, 0.6670, 4196.8),
    ],
)
def test_water_at_1_bar(temperature, density, viscosity, conductivity, capacity):
    """IAPWS-95 with R12-08 and R15-11, two implementations."""
    got = make_fluid(WATER, temperature)
    assert got.density_kg_m3 == pytest.approx(density, rel=1e-4)
    assert 1e3 * got.viscosity_pa_s == pytest.approx(viscosity, rel=2e-3)
    assert got.conductivity_w_mk == pytest.approx(conductivity, rel=2e-3)
    assert got.heat_capacity_j_kgk == pytest.approx(capacity, rel=1e-3)


@pytest.mark.parametrize("temperature", [1.0, 17.0, 55.0, 98.0, 121.0, 150.0, 179.0])
def test_water_against_the_industrial_formulation(temperature):
    boiling = iapws.IAPWS97(T=temperature + 273.15, x=0)
    other = iapws.IAPWS97(T=temperature + 273.15, P=max(0.1, 1.0001 * boiling.P))
    got = make_fluid(WATER, temperature)
    assert got.density_kg_m3 == pytest.approx(other.rho, rel=5e-4)
    assert got.viscosity_pa_s == pytest.approx(other.mu, rel=5e-4)
    assert got.conductivity_w_mk == pytest.approx(other.k, rel=5e-4)
    assert got.heat_capacity_j_kgk == pytest.approx(1e3 * other.cp, rel=5e-4)
    assert got.vapour_pa == pytest.approx(1e6 * boiling.P, rel=5e-4)


@pytest.mark.parametrize(
    ("kind", "percent", "density", "viscosity", "conductivity", "capacity"),
    [
        (FluidKind.ETHYLENE_GLYCOL, 20.0, 1024.1, 1.662, 0.5077, 3896.0),
        (FluidKind.ETHYLENE_GLYCOL, 30.0, 1038.0, 2.166, 0.4649, 3718.0),
        (FluidKind.ETHYLENE_GLYCOL, 40.0, 1051.9, 2.819, 0.4253, 3519.0),
        (FluidKind.PROPYLENE_GLYCOL, 30.0, 1023.8, 2.965, 0.4444, 3857.0),
    ],
)
def test_glycol_at_20_c(kind, percent, density, viscosity, conductivity, capacity):
    """Melinder's mixes as the CoolProp library gives them (the printed table was not seen)."""
    got = make_fluid(FluidSettings(kind, percent), 20.0)
    assert got.density_kg_m3 == pytest.approx(density, rel=1e-3)
    assert 1e3 * got.viscosity_pa_s == pytest.approx(viscosity, rel=5e-3)
    assert got.conductivity_w_mk == pytest.approx(conductivity, rel=1e-3)
    assert got.heat_capacity_j_kgk == pytest.approx(capacity, rel=1e-3)


@pytest.mark.parametrize(("percent", "density"), [(20.0, 1030.0), (30.0, 1046.0), (40.0, 1063.0)])
def test_pure_glycol_is_near_the_inhibited_kind_of_an_open_table(percent, density):
    assert make_fluid(FluidSettings(FluidKind.ETHYLENE_GLYCOL, percent), 20.0).density_kg_m3 == pytest.approx(
        density, rel=0.012
    )


@pytest.mark.parametrize(("kind", "name"), [(FluidKind.ETHYLENE_GLYCOL, "MEG"), (FluidKind.PROPYLENE_GLYCOL, "MPG")])
@pytest.mark.parametrize(
    ("percent", "temperature"), [(10.0, 5.0), (25.0, 95.0), (33.0, 40.0), (52.0, -25.0), (60.0, 80.0)]
)
def test_glycol_against_the_library(kind, name, percent, temperature):
    coolprop = pytest.importorskip("CoolProp.CoolProp")
    mix = f"INCOMP::{name}[{0.01 * percent}]"
    got = make_fluid(FluidSettings(kind, percent), temperature)
    for figure, value in (
        ("D", got.density_kg_m3),
        ("V", got.viscosity_pa_s),
        ("L", got.conductivity_w_mk),
        ("C", got.heat_capacity_j_kgk),
    ):
        assert value == pytest.approx(coolprop.PropsSI(figure, "T", temperature + 273.15, "P", 2e5, mix), rel=6e-3)


def test_water_boils_at_100_c_under_an_atmosphere():
    assert water_vapour_pa(99.974) == pytest.approx(101_325.0, rel=1e-3)


def test_glycol_boils_later_than_water():
    mix = make_fluid(FluidSettings(FluidKind.ETHYLENE_GLYCOL, 50.0), 90.0)
    assert 0.7 * water_vapour_pa(90.0) < mix.vapour_pa < 0.85 * water_vapour_pa(90.0)


def test_own_numbers_come_back():
    oil = make_fluid(FluidSettings(FluidKind.OWN, own=OwnFluid(870.0, 12.0, 0.13, 1900.0, -20.0, 250.0)), 180.0)
    assert (oil.density_kg_m3, oil.viscosity_pa_s, oil.vapour_pa) == (870.0, 0.012, None)


@pytest.mark.parametrize(
    ("settings", "temperature", "code"),
    [
        (WATER, 0.0, "coolant-freezes"),
        (WATER, 181.0, "coolant-too-hot"),
        (FluidSettings(FluidKind.PROPYLENE_GLYCOL, 30.0), -15.0, "coolant-freezes"),
        (FluidSettings(FluidKind.PROPYLENE_GLYCOL, 30.0), 101.0, "coolant-too-hot"),
        (FluidSettings(FluidKind.OWN, own=OwnFluid(870.0, 12.0, 0.13, 1900.0, 5.0)), 4.0, "coolant-freezes"),
    ],
)
def test_out_of_range(settings, temperature, code):
    with pytest.raises(FlowError) as caught:
        make_fluid(settings, temperature)
    assert caught.value.code == code
