"""Slips that a message should guess: width and height swapped, metres for millimetres."""

import pytest

from morph.core.errors import SettingError
from morph.settings.read_job import parse_job

pytestmark = pytest.mark.quick

JOB = """
name = "a-core"
[layout]
image = "d.npy"
size_mm = {size}
[[port]]
name = "feed"
role = "in"
at_mm = [0.0, 10.0]
[[port]]
name = "return"
role = "out"
at_mm = {at}
[carrier]
kind = "cylinder"
radius_mm = 30.0
metal = "toward-axis"
depth_mm = 8.0
"""


def refused(tmp_path, **values):
    with pytest.raises(SettingError) as caught:
        parse_job(JOB.format(**values).encode(), tmp_path / "job.toml")
    return caught.value


def test_swapped_size_is_guessed_only_when_it_would_help(tmp_path):
    swapped = refused(tmp_path, size="[40.0, 60.0]", at="[60.0, 30.0]")
    assert swapped.code == "port-outside" and "swapped" in str(swapped)
    neither = refused(tmp_path, size="[40.0, 60.0]", at="[70.0, 30.0]")
    assert neither.code == "port-outside" and "swapped" not in str(neither)


@pytest.mark.parametrize("size", ["[0.06, 0.04]", "[60.0, 0.9]"])
def test_a_sheet_below_a_millimetre_is_asked_about_metres(tmp_path, size):
    tiny = refused(tmp_path, size=size, at="[0.03, 0.02]")
    assert tiny.code == "setting-range" and "metres" in str(tiny)
