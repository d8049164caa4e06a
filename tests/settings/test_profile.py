"""Process profiles: every number has unit, source and a sensible range."""

import dataclasses
from importlib import resources
from pathlib import Path

import pytest

from morph.core.errors import MorphError
from morph.settings.profile import Profile, Sourced, SourcedRange, profile_names, read_profile

pytestmark = pytest.mark.quick

FOLDER = resources.files("morph.settings") / "profiles"
SHIPPED = (FOLDER / "steel-40um.toml").read_text()
N_NUMBERS = 17
HEDGES = ("common practice, no source", "from memory", "the layer thickness this profile stands for")
PUBLISHED = (
    "El Hassanin and Squillace 2022, Metals 12 2083",
    "Zhang et al. 2023, Mater. Chem. Phys.",
    "Rapid Prototyp. J. 2024",
    "grade pages of H13 to ASTM A681",
    "material sheets of 420 / 1.2083",
    "material sheets of 17-4PH / 1.4542",
    "open review of laser powder-bed fusion",
)
"""What was read on a page; every other number must say that it was not."""


def _all_numbers(profile):
    for field in dataclasses.fields(Profile):
        value = getattr(profile, field.name)
        if isinstance(value, Sourced | SourcedRange):
            yield field.name, value
        elif isinstance(value, tuple):
            yield from ((field.name, item) for item in value)


def shipped(name):
    return read_profile(name, Path())


def test_there_is_a_profile_for_every_family_of_insert_metal():
    alloys = " ".join(shipped(name).material for name in profile_names())
    assert len(profile_names()) >= 6
    for alloy in ("1.2709", "1.2344", "stainless", "CuCrZr", "AlSi10Mg"):
        assert alloy in alloys
    assert max(shipped(name).layer_um.value for name in profile_names()) >= 80.0


@pytest.mark.parametrize("name", profile_names())
def test_every_shipped_number_has_unit_and_source(name):
    profile = shipped(name)
    numbers = list(_all_numbers(profile))
    assert profile.name == name and len(numbers) == N_NUMBERS
    for key, number in numbers:
        assert len(number.source) > 10 and number.unit, key
        assert any(word in number.source for word in (*HEDGES, *PUBLISHED)), (key, number.source)


@pytest.mark.parametrize("name", profile_names())
def test_every_profile_lies_in_the_ranges_of_the_trade(name):
    # loose checks only: 45 deg, 6-8 mm round, 1 mm design wall, 3-4 mm for powder are common practice, no source
    profile = shipped(name)
    # level A: below 30 deg called not feasible in general (Han et al. 2018, quoted in a Design Society paper)
    assert 30.0 < profile.roof_angle_deg.value <= 60.0
    assert 4.0 <= profile.free_span_mm.value <= 8.0 and 6.0 <= profile.largest_bore_mm.value <= 8.0
    # level A: 0.2 mm walls with 25 um layers, 1.0 mm with 50 um layers (Ti6246, Metals 16 32)
    assert 0.2 <= profile.wall_mm.value <= 2.0 and 1.5 <= profile.smallest_bore_mm.value <= 4.0
    # level A: Ra 5 to 50 um as built, mostly below 20 (introduction of an open review)
    assert 5.0 <= profile.roughness_ra_um.low <= profile.roughness_ra_um.high <= 50.0
    assert profile.conductivity_as_printed_w_mk.low <= profile.conductivity_heat_treated_w_mk.low
    assert profile.conductivity_as_printed_w_mk.high <= profile.conductivity_heat_treated_w_mk.high


def test_a_coarser_layer_never_promises_more():
    fine, coarse = shipped("steel-40um"), shipped("steel-80um")
    assert coarse.layer_um.value > fine.layer_um.value and coarse.wall_mm.value > fine.wall_mm.value
    assert coarse.roof_angle_deg.value >= fine.roof_angle_deg.value
    assert coarse.free_span_mm.value <= fine.free_span_mm.value
    assert coarse.position_band_mm.value > fine.position_band_mm.value
    assert coarse.bore_band_mm.value > fine.bore_band_mm.value


DENSITY_KG_M3 = {
    "hotwork-40um": (7800.0, 7800.0),  # level A: H13 grade pages
    "stainless-40um": (7700.0, 7700.0),  # level A: 420 material sheets
    "precipitation-stainless-40um": (7750.0, 7800.0),  # level A: 17-4PH material sheets
    "steel-40um": (8000.0, 8100.0),  # from memory: loose range only
    "steel-80um": (8000.0, 8100.0),
    "copper-40um": (8800.0, 8900.0),
    "aluminium-30um": (2650.0, 2690.0),
}
CONDUCTIVITY_W_MK = {
    ("hotwork-40um", "heat_treated"): (22.0, 28.6),  # level A: sheets at room temperature; 24.3 at 215 and 475 C
    ("stainless-40um", "heat_treated"): (25.0, 27.0),  # level A: material sheets
    ("aluminium-30um", "as_printed"): (117.0 - 2.0, 136.0 + 2.0),  # level A: Rapid Prototyp. J. 2024
    # level A, recomputed: 62.1 % IACS (Zhang et al. 2023) by Wiedemann-Franz k = 2.44e-8 sigma T, 100 % = 58.0 MS/m
    ("copper-40um", "heat_treated"): (0.995 * 2.44e-8 * 0.621 * 58.0e6 * 293.15, 330.0),
}


@pytest.mark.parametrize("name", profile_names())
def test_densities_against_published_values(name):
    low, high = DENSITY_KG_M3[name]
    assert low <= shipped(name).density_kg_m3.value <= high


@pytest.mark.parametrize(("name", "state"), sorted(CONDUCTIVITY_W_MK))
def test_conductivities_against_published_values(name, state):
    low, high = CONDUCTIVITY_W_MK[name, state]
    found = getattr(shipped(name), f"conductivity_{state}_w_mk")
    assert low <= found.low <= found.high <= high
    assert found.middle == pytest.approx(0.5 * (found.low + found.high))


def test_what_is_not_confirmed_says_so():
    for name in ("hotwork-40um", "stainless-40um", "copper-40um"):
        assert "not confirmed" in shipped(name).conductivity_as_printed_w_mk.source


BAD = [
    ("setting-missing", "[wall_mm]\nvalue = 1.0", "[wall_mm]"),
    ("setting-choice", 'value = 1.0\nunit = "mm"', 'value = 1.0\nunit = "um"'),
    ("setting-range", "value = 45.0", "value = 90.0"),
    ("setting-range", "value = 8050.0", "value = 8.05"),
    ("setting-type", "value = 45.0", 'value = "45"'),
    ("setting-text", 'source = "common practice, no source"', 'source = ""'),
    ("setting-unknown", "[wall_mm]", "[wall]"),
    ("setting-unknown", "value = 45.0", "value = 45.0\nsources = 1"),
    ("setting-order", "value = 8.0", "value = 2.0"),
    ("setting-order", "low = 14.0", "low = 16.0"),
    ("setting-missing", "low = 14.0\n", ""),
    ("setting-conflict", "low = 14.0\n", "value = 14.5\n"),
    ("setting-range", "low = 14.0", "low = -14.0"),
    ("setting-choice", "W/mK", "W/cmK"),
    ("setting-missing", SHIPPED[SHIPPED.index("[roughness") :], ""),
    ("setting-type", SHIPPED[SHIPPED.index("[[machine_mm]]") : SHIPPED.index("[density")], "machine_mm = [1, 2]\n"),
    ("setting-type", SHIPPED[SHIPPED.rindex("[[machine_mm]]") : SHIPPED.index("[density")], ""),
]


@pytest.mark.parametrize(("code", "old", "new"), BAD, ids=range(len(BAD)))
def test_a_bad_profile_is_refused(tmp_path, code, old, new):
    assert old in SHIPPED
    text = SHIPPED.replace(old, "", 1) if "machine_mm" in old else SHIPPED.replace(old, new, 1)
    (tmp_path / "own.toml").write_text(new + text if "machine_mm" in old else text)
    with pytest.raises(MorphError) as caught:
        read_profile("own.toml", tmp_path)
    assert caught.value.code == code
    assert str(caught.value).startswith("own.toml")


def test_a_range_may_be_one_value(tmp_path):
    (tmp_path / "own.toml").write_text(SHIPPED.replace("low = 14.0\nhigh = 15.0\n", "value = 14.5\n", 1))
    found = read_profile("own.toml", tmp_path).conductivity_as_printed_w_mk
    assert (found.low, found.high) == (14.5, 14.5)
