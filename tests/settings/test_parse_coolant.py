"""The [coolant] table comes out as written; nonsense is refused with its own code, place and cure."""

from pathlib import Path

import pytest

from morph.core.errors import SettingError
from morph.settings.job import Balance, CoolantSettings, FluidKind, FluidSettings, OwnFluid, Supply
from morph.settings.parse_coolant import parse_coolant

pytestmark = pytest.mark.quick

FOLDER = Path("jobs")
OWN = {
    "fluid": "own",
    "density_kg_m3": 870.0,
    "viscosity_mpa_s": 12.0,
    "conductivity_w_mk": 0.13,
    "heat_capacity_j_kgk": 1900.0,
}


def parse(**values) -> CoolantSettings:
    return parse_coolant(values, "job.toml", FOLDER)


def test_defaults_are_plain_water_at_20_c():
    assert parse(flow_l_min=6) == CoolantSettings(flow_l_min=6.0)
    assert parse(flow_l_min=6).fluid == FluidSettings(FluidKind.WATER)
    assert parse(flow_l_min=6).inlet_c == 20.0


def test_every_key_comes_out_as_written():
    got = parse(
        fluid="ethylene-glycol-30",
        inlet_c=-5,
        pump="curves/pump.csv",
        supply="per-circuit",
        balance="by-heat",
        reversible=True,
        flux="flux.npy",
        check_3d=True,
        hose_mm=[9, 2500],
        pressure_bar=3.5,
        roughness_um=25,
    )
    assert got == CoolantSettings(
        fluid=FluidSettings(FluidKind.ETHYLENE_GLYCOL, 30.0),
        inlet_c=-5.0,
        pump=FOLDER / "curves/pump.csv",
        supply=Supply.PER_CIRCUIT,
        balance=Balance.BY_HEAT,
        reversible=True,
        flux=FOLDER / "flux.npy",
        check_3d=True,
        hose_mm=(9.0, 2500.0),
        pressure_bar=3.5,
        roughness_um=25.0,
    )


def test_own_fluid_needs_its_four_properties():
    assert parse(drop_bar=1.5, **OWN).fluid == FluidSettings(FluidKind.OWN, own=OwnFluid(870.0, 12.0, 0.13, 1900.0))
    missing = {key: value for key, value in OWN.items() if key != "viscosity_mpa_s"}
    with pytest.raises(SettingError) as caught:
        parse(drop_bar=1.5, **missing)
    assert (caught.value.code, caught.value.where) == ("setting-missing", "job.toml: [coolant] viscosity_mpa_s")


@pytest.mark.parametrize(
    ("code", "values"),
    [
        ("coolant-drive", {}),
        ("coolant-drive", {"flow_l_min": 6, "drop_bar": 1}),
        ("coolant-drive", {"pump": "a.csv", "drop_bar": 1}),
        ("fluid-unknown", {"flow_l_min": 6, "fluid": "wine"}),
        ("fluid-unknown", {"flow_l_min": 6, "fluid": "ethylene-glycol"}),
        ("setting-range", {"flow_l_min": 6, "fluid": "ethylene-glycol-5"}),
        ("setting-range", {"flow_l_min": 6, "fluid": "propylene-glycol-95"}),
        ("setting-range", {"flow_l_min": 0}),
        ("setting-range", {"flow_l_min": -1}),
        ("setting-range", {"drop_bar": 1e6}),
        ("setting-range", {"flow_l_min": 6, "inlet_c": 1000}),
        ("setting-range", {"flow_l_min": 6, "pressure_bar": -1.0}),
        ("setting-range", {"flow_l_min": 6, "roughness_um": -1.0}),
        ("setting-not-finite", {"flow_l_min": float("nan")}),
        ("setting-type", {"flow_l_min": "6"}),
        ("setting-type", {"flow_l_min": True}),
        ("setting-type", {"flow_l_min": 6, "reversible": 1}),
        ("setting-type", {"flow_l_min": 6, "check_3d": "yes"}),
        ("setting-type", {"flow_l_min": 6, "hose_mm": [9]}),
        ("setting-type", {"flow_l_min": 6, "hose_mm": 9}),
        ("setting-order", {"flow_l_min": 6, "hose_mm": [2500, 9]}),
        ("setting-range", {"flow_l_min": 6, "hose_mm": [0, 9]}),
        ("setting-choice", {"flow_l_min": 6, "balance": "equal"}),
        ("setting-choice", {"flow_l_min": 6, "supply": "mine"}),
        ("setting-conflict", {"flow_l_min": 6, "flux": "a.npy"}),
        ("setting-conflict", {"flow_l_min": 6, "density_kg_m3": 900.0}),
        ("setting-unknown", {"flow_l_min": 6, "inlet": 20}),
        ("setting-text", {"pump": ""}),
        ("setting-order", {"drop_bar": 1, **OWN, "freezes_c": 50, "boils_c": 20}),
    ],
)
def test_nonsense_is_refused(code, values):
    with pytest.raises(SettingError) as caught:
        parse(**values)
    assert caught.value.code == code
    assert caught.value.where.startswith("job.toml: [coolant]")
    assert caught.value.do
