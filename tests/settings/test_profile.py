"""Process profiles: every number has unit, source and a sensible range."""

import dataclasses
from importlib import resources
from pathlib import Path

import pytest

from morph.core.errors import MorphError
from morph.settings.profile import Profile, Sourced, profile_names, read_profile

pytestmark = pytest.mark.quick

SHIPPED = (resources.files("morph.settings") / "profiles" / "steel-40um.toml").read_text()


def _all_numbers(profile):
    for field in dataclasses.fields(Profile):
        value = getattr(profile, field.name)
        if isinstance(value, Sourced):
            yield field.name, value
        elif isinstance(value, tuple):
            yield from ((field.name, item) for item in value)


@pytest.mark.parametrize("name", profile_names())
def test_every_shipped_number_has_unit_and_source(name):
    profile = read_profile(name, Path())
    numbers = list(_all_numbers(profile))
    assert profile.name == name and len(numbers) == 14
    assert all(len(value.source) > 10 and value.unit for _, value in numbers)


def test_the_tool_steel_profile_lies_in_the_ranges_of_the_trade():
    # loose checks only: 45 deg, 6-8 mm round, 1 mm design wall are common practice, no source;
    # density 8000-8100 kg/m3 of maraging 300 is from memory
    profile = read_profile("steel-40um", Path())
    assert profile.roof_angle_deg.value == 45.0 and "no source" in profile.roof_angle_deg.source
    assert 6.0 <= profile.free_span_mm.value <= 8.0 and 6.0 <= profile.largest_bore_mm.value <= 8.0
    assert 0.4 <= profile.wall_mm.value <= 1.0 and 1.5 <= profile.smallest_bore_mm.value <= 4.0
    assert 8000.0 <= profile.density_kg_m3.value <= 8100.0 and "memory" in profile.density_kg_m3.source


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
