"""The [carrier] tables of revolved and free-form surfaces: what is read, and what is refused."""

import math
from pathlib import Path

import pytest

from morph.core.errors import SettingError
from morph.settings.job import Least, Metal, TrueAt
from morph.settings.parse_surface import parse_freeform, parse_revolved

pytestmark = pytest.mark.quick

REVOLVED = {
    "kind": "revolved",
    "profile_mm": [[30.0, -40.0], [32, 0], [30.0, 40.0]],
    "metal": "toward-axis",
    "depth_mm": 8.0,
}
FREEFORM = {
    "kind": "freeform",
    "file": "core.stl",
    "anchor_mm": [40.0, 0.0, 5.0],
    "up": [0, 0, 2],
    "metal_at_mm": [30.0, 0.0, 0.0],
    "wall_to_face_mm": 5.0,
}


def test_a_revolved_table_is_read():
    read = parse_revolved(REVOLVED, "job.toml")
    assert read.profile_mm == ((30.0, -40.0), (32.0, 0.0), (30.0, 40.0))
    assert (read.metal, read.depth_mm, read.wall_to_face_mm, read.true_at) == (
        Metal.TOWARD_AXIS,
        8.0,
        None,
        TrueAt.DEPTH,
    )


def test_a_freeform_table_is_read():
    read = parse_freeform(FREEFORM, "job.toml", Path("jobs"))
    assert read.file == Path("jobs/core.stl") and read.anchor_mm == (40.0, 0.0, 5.0)
    assert read.up == (0.0, 0.0, 2.0) and read.least is Least.RMS and read.wall_to_face_mm == 5.0


def test_up_may_be_a_second_point():
    values = {key: value for key, value in FREEFORM.items() if key != "up"} | {"up_at_mm": [40.0, 0.0, 25.0]}
    assert parse_freeform(values, "job.toml", Path()).up == (0.0, 0.0, 20.0)


@pytest.mark.parametrize(
    ("code", "changed"),
    [
        ("setting-type", {"profile_mm": 3}),
        ("setting-type", {"profile_mm": [[30.0, 0.0]]}),
        ("setting-type", {"profile_mm": [[30.0, 0.0], [30.0]]}),
        ("setting-type", {"profile_mm": [[30.0, 0.0], "up"]}),
        ("setting-type", {"profile_mm": [[30.0, 0.0]] * 2001}),
        ("setting-not-finite", {"profile_mm": [[30.0, 0.0], [30.0, math.inf]]}),
        ("setting-range", {"profile_mm": [[30.0, 0.0], [30.0, 1e9]]}),
        ("depth-choice", {"wall_to_face_mm": 3.0}),
        ("setting-unknown", {"profil_mm": []}),
        ("setting-choice", {"metal": "inside"}),
    ],
)
def test_a_wrong_revolved_table_is_refused(code, changed):
    with pytest.raises(SettingError) as caught:
        parse_revolved(REVOLVED | changed, "job.toml")
    assert caught.value.code == code, caught.value


@pytest.mark.parametrize(
    ("code", "changed"),
    [
        ("setting-type", {"anchor_mm": [1.0, 2.0]}),
        ("setting-range", {"metal_at_mm": [1e7, 0, 0]}),
        ("setting-range", {"up": [0.0, 0.0, 0.0]}),
        ("up-choice", {"up_at_mm": [1.0, 2.0, 3.0]}),
        ("setting-text", {"file": ""}),
        ("setting-choice", {"least": "mean"}),
        ("depth-choice", {"depth_mm": 3.0}),
        ("setting-unknown", {"radius_mm": 3.0}),
    ],
)
def test_a_wrong_freeform_table_is_refused(code, changed):
    with pytest.raises(SettingError) as caught:
        parse_freeform(FREEFORM | changed, "job.toml", Path())
    assert caught.value.code == code, caught.value


def test_a_heading_must_be_given():
    with pytest.raises(SettingError) as caught:
        parse_freeform({key: value for key, value in FREEFORM.items() if key != "up"}, "job.toml", Path())
    assert caught.value.code == "up-choice" and caught.value.found == "neither"
