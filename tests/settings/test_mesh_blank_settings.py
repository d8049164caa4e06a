"""[blank] kind = "mesh": its keys, and those that do not go with it."""

import pytest

from morph.core.errors import SettingError
from morph.read.mesh_file import LengthUnit
from morph.settings.job import MeshBlankSettings
from morph.settings.parse_shape import parse_blank

pytestmark = pytest.mark.quick


def parsed(tmp_path, **values):
    return parse_blank({"kind": "mesh", **values}, "job.toml", tmp_path)


def test_file_and_unit(tmp_path):
    assert parsed(tmp_path, file="a.stl").shape == MeshBlankSettings(tmp_path / "a.stl", None)
    made = parsed(tmp_path, file="in/a.3mf", unit="inch", part_faces=["carrier", "side"], port_faces=["back", "+y"])
    assert made.shape == MeshBlankSettings(tmp_path / "in/a.3mf", LengthUnit.INCH)
    assert made.part_faces == ("carrier", "side") and made.port_faces == ("back", "+y")


@pytest.mark.parametrize(
    ("values", "code", "words"),
    [
        ({}, "setting-missing", "file"),
        ({"file": 3}, "setting-type", "file"),
        ({"file": "a" * 300 + ".stl"}, "setting-text", "file"),
        ({"file": "a.stl", "unit": "yard"}, "setting-choice", "inch"),
        ({"file": "a.stl", "margin_mm": [1.0, 1.0]}, "setting-conflict", "margin_mm"),
        ({"file": "a.stl", "flange": {"radius_mm": 50.0, "height_mm": 5.0}}, "setting-conflict", "Draw the flange"),
        ({"file": "a.stl", "part_faces": ["side"]}, "part-faces-carrier", "carrier"),
    ],
)
def test_what_does_not_fit_is_refused(tmp_path, values, code, words):
    with pytest.raises(SettingError) as caught:
        parsed(tmp_path, **values)
    assert caught.value.code == code and words in caught.value.sentence()


def test_a_box_has_no_flange_and_says_why(tmp_path):
    box = {"kind": "box", "min_mm": [0.0] * 3, "max_mm": [9.0] * 3, "flange": {"radius_mm": 9.0, "height_mm": 1.0}}
    with pytest.raises(SettingError) as caught:
        parse_blank(box, "job.toml", tmp_path)
    assert caught.value.code == "setting-conflict" and "larger at its foot" in caught.value.do
