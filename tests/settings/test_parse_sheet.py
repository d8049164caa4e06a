"""[[accept]] and [[keep_out]]: what is taken, and what is refused with its own code."""

import pytest

from morph.core.errors import SettingError
from morph.settings.parse_sheet import parse_accepts, parse_keep_outs

pytestmark = pytest.mark.quick


@pytest.mark.parametrize(
    ("table", "bridge", "trim", "at_mm"),
    [
        ({"bridge": "G2"}, "G2", None, None),
        ({"trim": "D12"}, None, "D12", None),
        ({"bridge": "G2", "at_mm": [1, 2.5]}, "G2", None, (1.0, 2.5)),
        ({"bridge": True, "at_mm": [1, 2]}, True, None, (1.0, 2.0)),
        ({"trim": [3.0, 4.0]}, None, True, (3.0, 4.0)),
    ],
)
def test_accepts_by_id_and_by_place(table, bridge, trim, at_mm):
    (found,) = parse_accepts([table], "job.toml")
    assert (found.bridge, found.trim, found.at_mm) == (bridge, trim, at_mm)


@pytest.mark.parametrize(
    ("table", "code"),
    [
        ({}, "accept-what"),
        ({"at_mm": [1, 2]}, "accept-what"),
        ({"bridge": "G1", "trim": "D1"}, "accept-what"),
        ({"bridge": "D1"}, "accept-id"),
        ({"trim": "G1"}, "accept-id"),
        ({"bridge": "G0"}, "accept-id"),
        ({"bridge": "G1 or 1=1"}, "accept-id"),
        ({"bridge": 2}, "accept-id"),
        ({"bridge": True}, "accept-id"),
        ({"bridge": False, "at_mm": [1, 2]}, "accept-id"),
        ({"bridge": [1.0]}, "setting-type"),
        ({"bridge": [1.0, float("nan")]}, "setting-not-finite"),
        ({"bridge": [1.0, 2.0], "at_mm": [1, 2]}, "setting-conflict"),
        ({"brigde": "G1"}, "setting-unknown"),
        (3, "setting-type"),
    ],
)
def test_accepts_that_mean_nothing_are_refused(table, code):
    with pytest.raises(SettingError) as caught:
        parse_accepts([table], "job.toml")
    assert caught.value.code == code


def test_keep_outs_are_discs_or_polygons():
    disc, polygon = parse_keep_outs(
        [
            {"at_mm": [5, 6], "diameter_mm": 4, "clearance_mm": 1.5},
            {"name": "boss", "polygon_mm": [[0, 0], [4, 0], [4, 4], [0, 4], [0, 0]]},
        ],
        "job.toml",
    )
    assert (disc.name, disc.at_mm, disc.diameter_mm, disc.clearance_mm) == ("keep-out-1", (5.0, 6.0), 4.0, 1.5)
    assert polygon.polygon_mm == ((0.0, 0.0), (4.0, 0.0), (4.0, 4.0), (0.0, 4.0)) and polygon.clearance_mm == 0.0


BOW_TIE = [[0, 0], [4, 4], [4, 0], [0, 4]]


@pytest.mark.parametrize(
    ("tables", "code"),
    [
        ([{}], "keep-out-shape"),
        ([{"diameter_mm": 3}], "keep-out-shape"),
        ([{"at_mm": [1, 1]}], "setting-missing"),
        ([{"at_mm": [1, 1], "diameter_mm": 0}], "setting-range"),
        ([{"at_mm": [1, 1], "diameter_mm": 3, "clearance_mm": -1}], "setting-range"),
        ([{"at_mm": [1, 1], "polygon_mm": [[0, 0], [1, 0], [0, 1]]}], "setting-conflict"),
        ([{"polygon_mm": BOW_TIE}], "keep-out-outline"),
        ([{"polygon_mm": [[0, 0], [1, 0], [2, 0]]}], "keep-out-outline"),
        ([{"polygon_mm": [[0, 0], [1, 0], [0, 0]]}], "keep-out-outline"),
        ([{"polygon_mm": [[0, 0], [1, 0]]}], "setting-type"),
        ([{"polygon_mm": [[0, 0], [1, 0], "x"]}], "setting-type"),
        ([{"polygon_mm": [[0, 0], [1, 0], [1e30, 1]]}], "setting-range"),
        ([{"name": "../x", "at_mm": [1, 1], "diameter_mm": 3}], "keep-out-name"),
        ([{"name": "A", "at_mm": [1, 1], "diameter_mm": 3}, {"name": "a", "at_mm": [9, 1], "diameter_mm": 3}], "keep-out-name-twice"),
    ],
)  # fmt: skip
def test_keep_outs_that_are_none_are_refused(tables, code):
    with pytest.raises(SettingError) as caught:
        parse_keep_outs(tables, "job.toml")
    assert caught.value.code == code
