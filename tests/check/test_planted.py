"""Faults planted in inserts that are otherwise sound: each is found, within 0.1 mm, with the right neighbour named."""

import dataclasses
import re

import numpy as np
import pytest

from morph.body.hole import Hole
from morph.body.plan import Merge
from morph.check import check_insert, measure_fields, measure_insert
from morph.check.rows import MEASURE_MM
from morph.core.codes import explanations
from morph.core.verdict import Outcome
from tests.check.subjects import ALL_SIDES, rows, run_through, subject_of, with_machine
from tests.solid.plans import arc, box_blank, branch, cylinder_blank, ladder, plan_of, ring, sampled, straight_pipe, tee

FOUND_MM = 0.1
"""How near value and place of a planted fault must be found."""


def off_line(point, on, along) -> float:
    """Distance of a point from the line through `on` in direction `along`."""
    along = np.asarray(along, float) / np.linalg.norm(along)
    offset = np.subtract(point, on)
    return float(np.linalg.norm(offset - (offset @ along) * along))


@pytest.fixture(scope="module")
def sound():
    return subject_of(ring(), box_blank())


def test_a_sound_insert_passes_everything(sound):
    verdicts = check_insert(sound)
    assert {v.outcome for v in verdicts} == {Outcome.PASS}, [v.text for v in verdicts if v.outcome is not Outcome.PASS]
    expected = {
        "wall-face", "wall-outer", "wall-between", "openings", "bore-smallest", "ball-through", "capped", "ceiling",
        "span", "bend", "lead-narrow", "overhang-outside", "powder", "powder-on-plate", "dead-ends",
        "closed", "crossings", "bodies", "genus", "machine",
    }  # fmt: skip
    assert {v.code for v in verdicts} == expected
    for v in verdicts:
        assert v.source and v.text.endswith(".") and v.code in explanations(), v
        assert v.value is None or (np.isfinite(v.value) and v.unit), v


def test_measuring_once_gives_the_same(sound):
    shared = measure_insert(sound)
    assert check_insert(sound, measured=shared) == check_insert(sound)
    one, two = measure_fields(sound, shared), measure_fields(sound)
    assert (one.bore_mm == two.bore_mm).all() and (one.wall_mm == two.wall_mm).all()


def test_thin_wall_to_the_part_face():
    found = rows(subject_of(straight_pipe(z=24.5), box_blank()), "wall-face")
    assert [v.outcome for v in found] == [Outcome.FAIL]
    # 30 - 24.5 - 6 / 2; the service limit is one bore.
    assert found[0].value == pytest.approx(2.5, abs=FOUND_MM) and found[0].limit == 6.0
    assert off_line(found[0].xyz_mm, (0, 20, 28.75), (1, 0, 0)) < FOUND_MM
    assert (
        "+z" in found[0].text
        and "2.50 mm" in found[0].text
        and "6.00 mm" in found[0].text
        and "1.00 mm" in found[0].text
    )


def test_the_margin_counts_not_the_wall():
    """A bore of 8 mm with 7 mm of metal fails at one bore; a bore of 4 mm with 5 mm of metal beside it passes."""
    wide = run_through("W", [(0, 10, 19), (20, 10, 19), (40, 10, 19), (60, 10, 19)], 8.0, ("-x", "+x"))
    thin = run_through("T", [(0, 30, 23), (20, 30, 23), (40, 30, 23), (60, 30, 23)], 4.0, ("-x", "+x"))
    plan = plan_of(wide[0] + thin[0], wide[1] + thin[1])
    found = rows(subject_of(plan, box_blank()), "wall-face")[0]
    assert found.outcome is Outcome.FAIL and found.branch_ids[0].startswith(("W", "L-W"))
    assert found.value == pytest.approx(7.0, abs=FOUND_MM) and found.limit == 8.0


def crossing(height_mm: float):
    """A bore of 6 mm along x at z = 15 and one of 5 mm along y above it, crossing at x = 30, y = 20."""
    z = 15 + height_mm
    low = run_through("A", [(0, 20, 15), (20, 20, 15), (40, 20, 15), (60, 20, 15)], 6.0, ("-x", "+x"))
    high = run_through("B", [(30, 0, z), (30, 10, z), (30, 30, z), (30, 40, z)], 5.0, ("-y", "+y"))
    return plan_of(low[0] + high[0], low[1] + high[1])


BOX = {"low": (0, 0, 0), "high": (60, 40, 40), "port": ALL_SIDES}


def test_thin_wall_between_two_channels():
    found = rows(subject_of(crossing(7.5), box_blank(**BOX)), "wall-between")
    assert len(found) == 1 and found[0].outcome is Outcome.FAIL
    assert found[0].value == pytest.approx(7.5 - 5.5, abs=FOUND_MM)
    assert found[0].xyz_mm == pytest.approx((30.0, 20.0, 15.0 + 3.0 + 1.0), abs=FOUND_MM)
    assert set(found[0].branch_ids) == {"A-B1", "B-B1"}


def test_a_wall_that_holds_is_reported_too():
    found = rows(subject_of(crossing(9.5), box_blank(**BOX)), "wall-between")
    assert [v.outcome for v in found] == [Outcome.PASS] and found[0].value == pytest.approx(4.0, abs=FOUND_MM)


def test_merged_pair():
    subject = subject_of(crossing(5.0), box_blank(**BOX))
    found = rows(subject, "branches-merge")
    assert [v.outcome for v in found] == [Outcome.FAIL] and set(found[0].branch_ids) == {"A-B1", "B-B1"}
    assert found[0].value == pytest.approx(-0.5, abs=FOUND_MM)
    assert found[0].xyz_mm == pytest.approx((30.0, 20.0, 17.75), abs=FOUND_MM)
    # The written mesh says the same: one body for two circuits.
    assert {v.code for v in check_insert(subject) if v.outcome is Outcome.FAIL} >= {"bodies", "branches-merge"}


def test_merges_named_by_the_plan(sound):
    merges = (Merge(("B1", "B2"), (30.0, 8.0, 15.0), 0.4),)
    plan = dataclasses.replace(sound.plan, merges=merges)
    found = check_insert(dataclasses.replace(sound, plan=plan))
    merge = [v for v in found if v.code == "branches-merge"]
    assert [(v.outcome, v.value, v.branch_ids) for v in merge] == [(Outcome.FAIL, 0.4, ("B1", "B2"))]
    assert [v.outcome for v in found if v.code == "genus"] == [Outcome.NOT_CHECKED]


def test_a_merge_that_prints_is_a_thin_wall():
    """A pair the plan could not thin to the service wall but that prints is one row, not two."""
    plan = dataclasses.replace(crossing(7.5), merges=(Merge(("A-B1", "B-B1"), (30.0, 20.0, 19.0), 2.0),))
    subject = subject_of(plan, box_blank(**BOX))
    assert rows(subject, "branches-merge") == [] and rows(subject, "wall-between")[0].outcome is Outcome.FAIL


def test_hairpin_of_one_branch():
    """Two legs of one branch 7 mm apart with a bore of 5: 2 mm of metal between two runs of the same branch."""
    legs = np.concatenate(
        [
            sampled([(10, 13, 15), (45, 13, 15)], 5.0)[:-1],
            arc((45, 16.5, 15), 3.5, -90, 90, 5.0),
            sampled([(45, 20, 15), (10, 20, 15)], 5.0)[1:],
        ]
    )
    items = [
        branch("B1", "N1", "N2", legs, 5.0),
        branch("L-in", "N1", "X1", sampled([(10, 13, 15), (10, 0, 15)], 5.0), 5.0, lead=True),
        branch("L-out", "N2", "X2", sampled([(10, 20, 15), (10, 40, 15)], 5.0), 5.0, lead=True),
    ]
    exits = [("in", "in", "L-in", "-y", (0, -1, 0), 0.0), ("out", "out", "L-out", "+y", (0, 1, 0), 0.0)]
    found = rows(subject_of(plan_of(items, exits), box_blank(port=ALL_SIDES)), "wall-between")
    assert [v.outcome for v in found] == [Outcome.FAIL] and found[0].branch_ids == ("B1",)
    assert found[0].value == pytest.approx(2.0, abs=FOUND_MM)
    assert off_line(found[0].xyz_mm, (0, 16.5, 15), (1, 0, 0)) < FOUND_MM and "two runs of B1" in found[0].text


def test_blind_branch():
    subject = subject_of(tee(), box_blank())
    trapped, idle = rows(subject, "powder"), rows(subject, "dead-ends")
    assert trapped[0].outcome is Outcome.FAIL and trapped[0].branch_ids == ("B3",) and "B3" in trapped[0].text
    assert idle[0].outcome is Outcome.WATCH and idle[0].branch_ids == ("B3",) and "1 of 5" in idle[0].text
    assert trapped[0].xyz_mm == pytest.approx((30.0, 21.0, 15.0), abs=1.0)


def test_port_closed_by_the_plate():
    """One port on the side, one on the foot: nothing drains on the plate, everything after cutting off."""
    items, exits = run_through("", [(0, 20, 15), (20, 20, 15), (40, 20, 15), (40, 20, 0)], 6.0, ("-x", "-z"))
    subject = subject_of(plan_of(items, exits), box_blank(port=("-x", "-z")))
    on_plate, after = rows(subject, "powder-on-plate")[0], rows(subject, "powder")[0]
    assert on_plate.outcome is Outcome.WATCH and set(on_plate.branch_ids) == {"B1", "L-in", "L-out"}
    assert "face -z" in on_plate.text and "(out)" in on_plate.text
    assert after.outcome is Outcome.PASS and after.branch_ids == ()
    upside_down = dataclasses.replace(subject, build_direction=(0.0, 0.0, -1.0))
    assert rows(upside_down, "powder-on-plate")[0].outcome is Outcome.PASS
    leaning = dataclasses.replace(subject, build_direction=(0.0, 0.3, 1.0))
    assert rows(leaning, "powder-on-plate")[0].outcome is Outcome.PASS


def test_flat_roof():
    """A level round bore of 10 mm: below 45 degrees its cap is 10 sin(45) = 7.07 mm wide; 6 mm print freely."""
    subject = subject_of(straight_pipe(bore_mm=10.0), box_blank())
    span, area = rows(subject, "span")[0], rows(subject, "ceiling")[0]
    assert span.outcome is Outcome.FAIL and area.outcome is Outcome.WATCH
    assert span.value == pytest.approx(10.0 * np.sin(np.pi / 4), abs=FOUND_MM)
    assert off_line(span.xyz_mm, (0, 20, 20), (1, 0, 0)) < FOUND_MM
    # A quarter of the round wall lies within 45 degrees of level.
    assert area.value == pytest.approx(0.25 * np.pi * 10.0 * 60.0, rel=0.03)
    standing = rows(dataclasses.replace(subject, build_direction=(1.0, 0.0, 0.0)), "span")[0]
    assert standing.outcome is Outcome.PASS and standing.value == 0.0


def test_break_out_into_the_part():
    rise = arc((30, 20, 8), 20.0, 160, 20, 6.0, u=(1, 0, 0), v=(0, 0, 1))
    ends = [(0, 20, rise[0][2]), *rise, (60, 20, rise[-1][2])]
    items, exits = run_through("", ends, 6.0, ("-x", "+x"))
    subject = subject_of(plan_of(items, exits), box_blank())
    broken, openings, wall = (
        rows(subject, "breaks-into-part"),
        rows(subject, "openings")[0],
        rows(subject, "wall-face")[0],
    )
    assert [v.outcome for v in broken] == [Outcome.FAIL] and broken[0].branch_ids == ("B1",)
    assert broken[0].xyz_mm == pytest.approx((30.0, 20.0, 30.0), abs=FOUND_MM) and "+z" in broken[0].text
    assert openings.outcome is Outcome.FAIL and (openings.value, openings.limit) == (3.0, 2.0)
    assert wall.outcome is Outcome.FAIL and wall.value == pytest.approx(30 - 28 - 3, abs=FOUND_MM)


def test_hole_too_close():
    hole = Hole("H1", np.array([33.0, 26.0, 30.0]), np.array([0.0, 0.0, -1.0]), 30.0, 4.0, 3.0)
    far = Hole("H2", np.array([33.0, 32.0, 30.0]), np.array([0.0, 0.0, -1.0]), 30.0, 4.0, 3.0)
    subject = subject_of(straight_pipe(), dataclasses.replace(box_blank(), holes=(hole, far)))
    found = rows(subject, "wall-hole")
    assert [v.outcome for v in found] == [Outcome.FAIL, Outcome.PASS]
    assert found[0].value == pytest.approx(6.0 - 3.0 - 2.0, abs=FOUND_MM)
    assert found[0].xyz_mm == pytest.approx((33.0, 23.5, 15.0), abs=FOUND_MM)
    assert "H1" in found[0].text and found[0].branch_ids == ("B1",)
    assert found[1].value == pytest.approx(12.0 - 3.0 - 2.0, abs=FOUND_MM)


def test_wall_that_is_thin_after_stock_is_removed():
    subject = subject_of(straight_pipe(y=5.0), box_blank(stock={"-y": 4.0}))
    stock = rows(subject, "wall-stock")
    assert [v.outcome for v in stock] == [Outcome.FAIL] and stock[0].value == pytest.approx(2.0, abs=FOUND_MM)
    printed, after = (float(word) for word in re.findall(r"(\d+\.\d\d) mm (?:as printed|after)", stock[0].text))
    assert (printed, after) == (pytest.approx(6.0, abs=MEASURE_MM), pytest.approx(2.0, abs=MEASURE_MM))
    assert printed - after == pytest.approx(4.0, abs=0.011) and "-y" in stock[0].text
    assert off_line(stock[0].xyz_mm, (0, 1, 15), (1, 0, 0)) < FOUND_MM
    outer = {v.text.split("face '")[1].split("'")[0]: v for v in rows(subject, "wall-outer")}
    assert outer["-y"].outcome is Outcome.FAIL and outer["-y"].value == pytest.approx(2.0, abs=FOUND_MM)


def test_stock_on_a_port_face_leaves_the_openings_right():
    subject = subject_of(straight_pipe(stock_mm=3.0), box_blank(stock={"-x": 3.0, "+x": 3.0}))
    assert rows(subject, "openings")[0].outcome is Outcome.PASS
    assert {v.outcome for v in check_insert(subject)} == {Outcome.PASS}


def test_thin_outer_wall_away_from_the_exit():
    """A channel 4 mm above the foot that leaves through a side: 1.5 mm to the foot, its own exit on -x is no fault."""
    found = {
        v.text.split("face '")[1].split("'")[0]: v
        for v in rows(subject_of(straight_pipe(5.0, z=4.0), box_blank()), "wall-outer")
    }
    assert found["-z"].outcome is Outcome.FAIL and found["-z"].value == pytest.approx(1.5, abs=FOUND_MM)
    assert {name for name, v in found.items() if v.outcome is not Outcome.PASS} == {"-z"}


def test_missing_opening():
    """The insert was cut with a lead that stops 8 mm short of its exit: one opening for two ports, and a closed end."""
    short = run_through("", [(0, 20, 15), (20, 20, 15), (40, 20, 15), (52, 20, 15)], 6.0, ("-x", "+x"))
    cut = plan_of(short[0], short[1][:1])
    subject = subject_of(cut, box_blank(), judged=straight_pipe())
    found = rows(subject, "openings")[0]
    assert found.outcome is Outcome.FAIL and (found.value, found.limit) == (1.0, 2.0) and "return" in found.text
    assert rows(subject, "genus", Outcome.FAIL)


def test_piece_that_fits_no_machine(sound):
    """60 x 40 x 30 mm in a machine of 50 x 50 x 50: 10 mm too long however it is turned about the build axis."""
    tight = rows(dataclasses.replace(sound, profile=with_machine(50, 50, 50)), "machine")[0]
    assert tight.outcome is Outcome.FAIL and tight.value == pytest.approx(-10.0, abs=FOUND_MM)
    assert "60.0 x 40.0 x 30.0 mm" in tight.text
    assert rows(dataclasses.replace(sound, profile=with_machine(45, 65, 35)), "machine")[0].outcome is Outcome.PASS
    assert rows(dataclasses.replace(sound, profile=with_machine(65, 45, 25)), "machine")[0].outcome is Outcome.FAIL


def test_neck_in_one_of_two_ways():
    """The lower half of the ring narrows to 2.4 mm: that is its ball; the best way from in to out is the other half."""
    plan = ring()
    lower = plan.branches[0]
    along = np.linspace(-1, 1, len(lower.xyz_mm))
    necked = dataclasses.replace(lower, bore_mm=5.0 - 2.6 * np.exp(-((along / 0.25) ** 2)))
    subject = subject_of(dataclasses.replace(plan, branches=(necked, *plan.branches[1:])), box_blank())
    bore, ball = rows(subject, "bore-smallest")[0], rows(subject, "ball-through")[0]
    assert (
        bore.outcome is Outcome.FAIL and bore.value == pytest.approx(2.4, abs=FOUND_MM) and bore.branch_ids == ("B1",)
    )
    assert bore.xyz_mm == pytest.approx((30.0, 8.0, 15.0), abs=1.0)
    assert ball.outcome is Outcome.PASS and ball.value == pytest.approx(2.4, abs=FOUND_MM)
    best = float(ball.text.split("from in to out ")[1].split()[0])
    assert best == pytest.approx(5.0, abs=FOUND_MM)


def test_fields_of_a_cylinder_core():
    subject = subject_of(ladder(), cylinder_blank())
    fields = measure_fields(subject)
    assert [f.id for f in fields.branches] == [b.id for b in subject.plan.branches]
    for field in fields.branches:
        assert field.bore_mm == pytest.approx(4.0, abs=FOUND_MM) and field.wall_mm == pytest.approx(4.0, abs=FOUND_MM)
    n = len(subject.solid.trimmed.vertices_mm)
    assert len(fields.bore_mm) == len(fields.wall_mm) == len(fields.ceiling_deg) == n
    # A 4 mm bore 6 mm below the face leaves 4 mm, on the far side of the bore too.
    assert fields.wall_mm == pytest.approx(4.0, abs=FOUND_MM)
    assert fields.ceiling_deg.min() < 15.0 and fields.ceiling_deg.max() > 165.0
