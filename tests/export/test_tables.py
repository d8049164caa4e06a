"""The text files: keys, rounding, and wall figures worked out by hand on the box 60 x 40 x 30 mm."""

import csv
import io
import json
import math

import numpy as np
import pytest

from morph.body.blank import Hole
from morph.body.finish import PLAIN, Finish, ThreadHole
from morph.body.thread import make_thread
from morph.core.verdict import Notice, Outcome, Verdict
from morph.export.numbers import json_bytes, plain, rounded
from morph.export.tables import graph_json, ports_csv, verdicts_csv
from morph.settings.job import FaceSealEnd

pytestmark = pytest.mark.quick


def rows_of(data: bytes):
    return list(csv.DictReader(io.StringIO(data.decode("utf-8"))))


def test_graph_keys_are_the_published_ones(plans):
    graph = json.loads(graph_json(plans.tee()))
    assert set(graph) == {"nodes", "branches"}
    assert set(graph["nodes"][0]) == {"id", "kind", "port", "sheet_mm", "xyz_mm"}
    wanted = {"id", "kind", "from", "to", "length_mm", "bore_mm", "sheet_mm", "xyz_mm", "bore_along_mm"}
    assert all(set(b) == wanted for b in graph["branches"])
    assert {n["kind"] for n in graph["nodes"]} == {"junction", "port", "exit", "dead-end"}
    assert {b["kind"] for b in graph["branches"]} == {"channel", "lead"}


def test_graph_arrays_have_equal_length_and_end_on_their_nodes(plans):
    graph = json.loads(graph_json(plans.ladder()))
    place = {n["id"]: n["xyz_mm"] for n in graph["nodes"]}
    for b in graph["branches"]:
        assert len(b["xyz_mm"]) == len(b["bore_along_mm"])
        assert b["sheet_mm"] is None if b["kind"] == "lead" else len(b["sheet_mm"]) == len(b["xyz_mm"])
        assert np.allclose(b["xyz_mm"][0], place[b["from"]], atol=2e-6)
        assert np.allclose(b["xyz_mm"][-1], place[b["to"]], atol=2e-6)


def test_mean_bore_is_weighted_by_length(plans):
    # 3 mm bore over the first 10 mm, rising evenly to 5 mm over the next 10 mm: mean (3 10 + 4 10) / 20
    xyz = [(0, 0, 0), (10, 0, 0), (20, 0, 0)]
    plan = plans.plan_of([plans.branch("B1", "N1", "N2", xyz, [3.0, 3.0, 5.0])])
    bore = json.loads(graph_json(plan))["branches"][0]["bore_mm"]
    assert bore == {"min": 3.0, "mean": 3.5, "max": 5.0}


def test_lengths_keep_six_decimals_and_others_nine_digits():
    value = {"length_mm": 1.23456789, "at_mm": [[1e-9, -2e-9]], "ratio": 1 / 3, "volume_mm3": 12345.678901234}
    assert json.loads(json_bytes(value)) == {
        "length_mm": 1.234568,
        "at_mm": [[0.0, 0.0]],
        "ratio": 0.333333333,
        "volume_mm3": 12345.6789,
    }


def test_json_has_sorted_keys_no_nan_and_no_minus_zero():
    data = json_bytes({"b": math.nan, "a": [-0.0, math.inf], "c": {"z": np.float64(2), "y": np.int64(3)}})
    assert data == b'{\n  "a": [0.0, null],\n  "b": null,\n  "c": {\n    "y": 3,\n    "z": 2.0\n  }\n}\n'
    assert rounded(-1e-12) == -1e-12 and rounded(-1e-12, True) == 0.0


def test_unknown_types_are_refused():
    with pytest.raises(TypeError, match="set"):
        plain({"a": {1, 2}})


def test_port_table_by_hand(plans):
    # bore 6 at y = 20, z = 15 in a 60 x 40 x 30 box: 15 - 3 = 12 mm to -z and +z, 20 - 3 to -y and +y
    blank = plans.box_blank(stock={"-x": 0.8})
    first, second = rows_of(ports_csv(plans.straight_pipe(6.0), blank))
    assert [first[k] for k in ("port", "role", "face", "end", "lead")] == ["feed", "in", "-x", "plain", "L-feed"]
    assert [float(first[f"exit_{k}_mm"]) for k in "xyz"] == [0.0, 20.0, 15.0]
    assert [float(first[f"leave_{k}"]) for k in "xyz"] == [-1.0, 0.0, 0.0]
    assert float(first["stock_mm"]) == 0.8 and float(second["stock_mm"]) == 0.0
    assert float(first["wall_around_mm"]) == pytest.approx(12.0) and first["wall_around_to"] == "face:+z"
    assert float(first["bore_mm"]) == 6.0 and float(first["drill_depth_mm"]) == pytest.approx(20.0)


def test_wall_around_sees_other_exits_and_holes(plans):
    from dataclasses import replace

    # two exits of bore 4 on the foot, 90 degrees apart at radius 24: chord 24 sqrt 2, less one bore;
    # the carrier at radius 30 is nearer: 30 - 24 - 2 = 4
    blank = plans.cylinder_blank(30.0)
    rows = rows_of(ports_csv(plans.ladder(), blank))
    assert [float(r["wall_around_mm"]) for r in rows] == pytest.approx([4.0, 4.0], abs=4e-4)
    assert rows[0]["wall_around_to"] == "face:carrier"
    wide = plans.cylinder_blank(60.0)
    rows = rows_of(ports_csv(plans.ladder(), wide))
    assert float(rows[0]["wall_around_mm"]) == pytest.approx(24 * math.sqrt(2) - 4, abs=2e-3)
    assert rows[0]["wall_around_to"] == "exit:return"
    # a 6 mm pin 10 mm beside the feed's exit: 10 - 3 - 2 = 5
    exit_mm = plans.ladder().exits[0].xyz_mm
    pin = Hole("H1", exit_mm + np.array([10.0, 0.0, -1.0]), np.array([0.0, 0.0, 1.0]), 20.0, 6.0, 3.0)
    rows = rows_of(ports_csv(plans.ladder(), replace(wide, holes=(pin,))))
    assert float(rows[0]["wall_around_mm"]) == pytest.approx(5.0, abs=1e-6)
    assert rows[0]["wall_around_to"] == "hole:H1"


def with_ends(plan, *finishes):
    from dataclasses import replace

    exits = tuple(replace(exit_, finish=finish) for exit_, finish in zip(plan.exits, finishes, strict=True))
    return replace(plan, exits=exits)


def test_a_thread_and_a_seal_groove_can_be_machined_from_the_table(plans):
    """G1/8 in the middle of a face 40 x 30 mm (ISO 228-1: major 9.728, minor 8.566): 15 - 4.864 mm to the part face."""
    thread = ThreadHole(make_thread("G1/8"), 17.5, 3.5, 0.3)
    seal = FaceSealEnd(12.0, 16.0, 1.5, 22.0)
    plan = with_ends(
        plans.straight_pipe(6.0), Finish(thread, 6.0, 9.728, 21.0, 15.6), Finish(seal, 0.0, 16.0, 1.5, 22.0)
    )
    first, second = rows_of(ports_csv(plan, plans.box_blank()))
    numbers = {
        "bore_mm": 6.0,
        "drill_mm": 8.8,
        "drill_depth_mm": 21.0,
        "drill_stock_mm": 0.3,
        "major_mm": 9.728,
        "minor_mm": 8.566,
        "thread_depth_mm": 17.5,
        "run_out_mm": 3.5,
        "land_mm": 15.6,
    }
    assert first["end"] == "thread" and first["designation"] == "G1/8"
    assert {key: float(first[key]) for key in numbers} == numbers
    assert first["groove_inner_mm"] == first["groove_depth_mm"] == ""
    assert float(first["wall_around_mm"]) == pytest.approx(15.0 - 4.864) and first["wall_around_to"] == "face:+z"
    groove = {"groove_inner_mm": 12.0, "groove_outer_mm": 16.0, "groove_depth_mm": 1.5, "land_mm": 22.0, "bore_mm": 6.0}
    assert second["end"] == "face-seal" and {key: float(second[key]) for key in groove} == groove
    assert second["drill_mm"] == second["designation"] == second["thread_depth_mm"] == ""
    assert float(second["wall_around_mm"]) == pytest.approx(15.0 - 8.0)


def test_the_wall_around_a_thread_counts_over_its_whole_depth(plans):
    """A pin across the exit's axis, 15 mm deep and 9 mm above it: 9 - 2 - 4.864 = 2.136 mm, although the rim is farther."""
    from dataclasses import replace

    thread = ThreadHole(make_thread("G1/8"), 17.5, 3.5, 0.3)
    plan = with_ends(plans.straight_pipe(6.0), Finish(thread, 6.0, 9.728, 21.0, 15.6), PLAIN)
    pin = Hole("H1", np.array([15.0, 0.0, 24.0]), np.array([0.0, 1.0, 0.0]), 40.0, 4.0, 3.0)
    first, _ = rows_of(ports_csv(plan, replace(plans.box_blank(), holes=(pin,))))
    assert float(first["wall_around_mm"]) == pytest.approx(2.136, abs=0.02) and first["wall_around_to"] == "hole:H1"


def test_drill_depth_stops_at_the_bend(plans):
    path = plans.sampled([(20, 20, 15), (20, 20, 25), (5, 20, 25), (0, 20, 25)], 4.0)
    items = [plans.branch("L-a", "N1", "X1", path, 4.0, lead=True)]
    plan = plans.plan_of(items, (("a", "in", "L-a", "-x", (-1, 0, 0), 0.0),))
    (row,) = rows_of(ports_csv(plan, plans.box_blank()))
    assert float(row["drill_depth_mm"]) == pytest.approx(20.0)


def test_verdicts_come_in_headline_order_with_notices_last():
    made = [
        Verdict("a", Outcome.PASS, "fine", 5.0, "mm", 3.0, "least", 0.1),
        Verdict("b", Outcome.FAIL, 'bad, "very"', -1.0, "mm", 3.0, xyz_mm=(-1.0, 2.0, 3.0), branch_ids=("B1", "B2")),
        Verdict("c", Outcome.WATCH, "near"),
        Verdict("d", Outcome.NOT_CHECKED, "unknown"),
    ]
    rows = rows_of(verdicts_csv(made, [Notice("n", "note", ("B3",), (1.0, 2.0))]))
    assert [r["code"] for r in rows] == ["b", "d", "c", "a", "n"]
    assert [r["verdict"] for r in rows] == ["fail", "not checked", "watch", "pass", "warning"]
    assert rows[0]["value"] == "-1.0" and rows[0]["branch_ids"] == "B1 B2" and rows[0]["text"] == 'bad, "very"'
    assert rows[0]["xyz_mm"] == "-1.0 2.0 3.0"
    assert rows[1]["value"] == "" and rows[4]["sheet_mm"] == "1.0 2.0"
    assert set(rows[0]) >= {
        *("code", "verdict", "value", "unit", "limit", "band", "source"),
        *("branch_ids", "sheet_mm", "xyz_mm", "hint"),
    }


@pytest.mark.parametrize("text", ["=1+1", "+f(1)", "-cmd|x", "@sum", "\tx"])
def test_text_that_a_spreadsheet_would_run_is_disarmed(text):
    rows = rows_of(verdicts_csv([Verdict("a", Outcome.WATCH, text)], []))
    assert rows[0]["text"] == "'" + text
