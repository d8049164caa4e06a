"""The summary's keys and figures, worked out on the hand-made core: 9 branches, 8 nodes, two loops, one dead end."""

import json
import math

import pytest

from morph.core.verdict import Outcome, Verdict, worst_outcome
from morph.report.headline import five_figures, sorted_verdicts
from morph.report.summary import make_summary, not_checked_rows

pytestmark = pytest.mark.quick

PUBLISHED = {
    "layout": {"components", "loops", "area_ratio", "dead_ends", "branches", "nodes", "dropped"},
    "carrier": {"length_error_max", "length_error_rms", "area_error_max", "angle_error_max_deg", "face_scale"},
    "solid": {"volume_mm3", "area_mm2", "triangles", "genus", "watertight", "bodies"},
    "insert": {"volume_mm3", "mass_g", "watertight", "genus", "openings", "openings_declared"},
    "print": {"verdicts"},
}


def test_every_published_key_is_there(summary):
    for block, keys in PUBLISHED.items():
        assert keys <= set(summary[block]), block
    assert summary["flow"] is None and summary["thermal"] is None
    assert {"versions", "fingerprints", "settings", "notices", "not_checked", "headline"} <= set(summary)
    row = {"code", "verdict", "value", "unit", "limit", "band", "source", "branch_ids", "sheet_mm", "xyz_mm", "hint"}
    assert all(row <= set(v) for v in summary["print"]["verdicts"])


def test_layout_by_hand(summary):
    layout = summary["layout"]
    assert [layout[k] for k in ("components", "loops", "dead_ends", "branches", "nodes")] == [1, 2, 1, 9, 8]
    (blind,) = layout["dead_end_places"]
    shown = {key: blind[key] for key in ("node", "branch", "length_mm", "sheet_mm")}
    assert shown == {"node": "N8", "branch": "B7", "length_mm": 12.0, "sheet_mm": [45.0, 38.0]}
    assert blind["id"] is None and blind["ahead"] is None  # this graph was made without records of its dead ends
    assert layout["dropped"] == [{"reason": "island", "sheet_mm": [70.0, 52.0], "area_mm2": 3.25}]
    # 2 x 15 + 60 + 2 x 20 + 60 + 12 + 2 sqrt(30^2 + 15^2)
    assert layout["length_mm"] == pytest.approx(202.0 + 2.0 * math.hypot(30, 15))


def test_insert_by_hand(summary, scene):
    insert = summary["insert"]
    # a circle of radius 30 in 128 chords: area 64 r^2 sin(2 pi / 128); printed height 85.5 mm with 0.5 mm of stock
    blank = 64 * 900 * math.sin(2 * math.pi / 128) * 85.5
    assert insert["blank_volume_mm3"] == pytest.approx(blank, rel=1e-9)
    # two loops and two openings: genus 2 + 2 - 1
    assert (insert["genus"], insert["watertight"], insert["bodies"]) == (3, True, 1)
    assert insert["mass_g"] == pytest.approx(insert["volume_mm3"] * 8000e-6)
    assert insert["volume_mm3"] == pytest.approx(blank - summary["solid"]["volume_mm3"], rel=2e-4)
    assert (insert["openings"], insert["openings_declared"]) == (2, 2)
    assert summary["carrier"]["face_scale"] == pytest.approx(30 / 22)


def test_nothing_of_this_machine_stands_in_it(records, summary):
    text = json.dumps(summary, sort_keys=True, allow_nan=False)
    assert "/somewhere" not in text and "else" not in text
    assert summary["settings"]["file"] == "job.toml" and summary["settings"]["layout"]["image"] == "density.npy"
    assert json.dumps(make_summary(records), sort_keys=True) == text


def test_what_was_not_checked_is_named_with_its_reason(summary):
    assert [row["what"] for row in summary["not_checked"]] == ["flow", "temperature"]
    assert all(row["reason"] for row in summary["not_checked"])
    alone = not_checked_rows((Verdict("genus", Outcome.NOT_CHECKED, "says nothing while open"),))
    assert [row["what"] for row in alone] == ["genus"]


def test_headline_order_and_worst(records):
    order = [v.outcome.value for v in sorted_verdicts(records.verdicts)]
    assert order == ["fail", "not checked", "not checked", "watch", "pass"]
    assert worst_outcome(records.verdicts) is Outcome.FAIL
    unchecked = tuple(v for v in records.verdicts if v.outcome in (Outcome.NOT_CHECKED, Outcome.PASS))
    assert worst_outcome(unchecked) is Outcome.NOT_CHECKED
    assert worst_outcome(v for v in unchecked if v.outcome is Outcome.PASS) is Outcome.PASS


def test_five_figures_by_hand(records):
    made = (
        *records.verdicts,
        Verdict(
            "ball-through", Outcome.PASS, "", 3.0, "mm", 1.5, "least", 0.15, branch_ids=("B6",), sheet_mm=(20.0, 35.0)
        ),
        Verdict("span", Outcome.FAIL, "", 7.0, "mm", 6.0, "most", 0.15, xyz_mm=(1.0, 2.0, 3.0)),
        Verdict("dead-ends", Outcome.WATCH, "", 1.0, "count", 0.0, "most", branch_ids=("B7",)),
    )
    wall, ball, idle, span, openings = five_figures(made, records.plan)
    assert (wall.shown, wall.limit, wall.outcome) == ("5.28 mm", "at least 5.20 mm", Outcome.WATCH)  # 5.40 less 0.12
    assert wall.value == pytest.approx(5.28) and wall.branch_ids == ("B9",) and wall.sheet_mm == (45.0, 50.0)
    assert (ball.shown, ball.limit) == ("3.00 mm", "at least 1.50 mm after a band of 0.15 mm")
    assert (idle.shown, idle.branch_ids) == ("1 of 11", ("B7",))  # nine channels and two leads
    assert (span.shown, span.limit, span.xyz_mm) == (
        "7.00 mm",
        "at most 6.00 mm after a band of 0.15 mm",
        (1.0, 2.0, 3.0),
    )
    assert (openings.shown, openings.outcome) == ("2 / 2", Outcome.PASS)


def test_figures_without_a_verdict_say_so(records):
    figures = five_figures((), records.plan)
    assert [f.outcome.value for f in figures] == ["not checked", "not checked", "watch", "not checked", "not checked"]
    assert figures[0].value is None and figures[2].shown == "1 of 11"


def test_a_thinner_but_milder_wall_is_told(records):
    rows = (
        Verdict("wall-face", Outcome.FAIL, "", 5.0, "mm", 6.0, xyz_mm=(0, 0, 0)),
        Verdict("wall-between", Outcome.PASS, "", 4.0, "mm", 3.0, xyz_mm=(0, 0, 0)),
    )
    figure = five_figures(rows, records.plan)[0]
    assert figure.shown == "5.00 mm" and "wall-between 4.00 mm" in figure.note


def test_fingerprints_follow_content(make_records, records, scene):
    one, two = make_summary(records)["fingerprints"], make_summary(make_records(job=scene.job("other")))["fingerprints"]
    assert one["settings"] != two["settings"] and one["insert"] == two["insert"]
    assert one["image"] == {"file": "density.npy", "content": "0123456789abcdef"}
