"""How far the channels depart from the drawing, and leads against their ports: areas worked out by hand."""

import dataclasses

import numpy as np
import pytest

from morph.body.finish import Finish, ThreadHole
from morph.body.plan import Cap
from morph.body.thread import make_thread
from morph.check.as_drawn import check_as_drawn, drawn_bore_mm, measure_departure
from morph.check.capped import check_capped
from morph.check.centreline import make_centrelines
from morph.check.lead_narrow import check_leads, lead_shares
from morph.core.verdict import Outcome
from morph.geometry.curve import Curve
from morph.layout.graph import Branch, ChannelGraph, Dropped, DropReason, Node, NodeKind
from tests.solid.plans import branch, plan_of, sampled, straight_pipe

pytestmark = pytest.mark.quick

SHEET_MM = (60.0, 40.0)


def drawn(name, start, end, points, bore_mm) -> Branch:
    points = np.asarray(points, float)[:, :2]
    bore = np.broadcast_to(np.asarray(bore_mm, float), (len(points),))
    control = points[0] + np.linspace(0.0, 1.0, 4)[:, None] * (points[-1] - points[0])
    length = float(np.linalg.norm(points[-1] - points[0]))
    parameter = np.linspace(0.0, 1.0, len(points))
    return Branch(name, start, end, Curve([0] * 4 + [1] * 4, control), parameter, points, bore, length, 0.0)


def graph_of(branches, coolant_mm2, dropped=()) -> ChannelGraph:
    place = {}
    for item in branches:
        place.setdefault(item.start, item.sheet_mm[0])
        place.setdefault(item.end, item.sheet_mm[-1])
    nodes = tuple(Node(name, NodeKind.JUNCTION, None, at) for name, at in sorted(place.items()))
    return ChannelGraph(
        SHEET_MM, 0.5, coolant_mm2 / (SHEET_MM[0] * SHEET_MM[1]), nodes, tuple(branches), tuple(dropped)
    )


def run(wanted_mm, bore_mm, y=10.0, name="B1", nodes=("A", "B")):
    """A straight run of 40 mm as built."""
    path = sampled([(5.0, y, 15.0), (45.0, y, 15.0)], 2.0)
    built = branch(name, *nodes, path, bore_mm)
    wanted = np.broadcast_to(np.asarray(wanted_mm, float), (len(path),))
    return dataclasses.replace(built, wanted_mm=wanted, capped=built.bore_mm < wanted)


def test_each_part_of_the_departure_is_its_own_area():
    """40 mm long runs: 8 drawn, 6 allowed, 5 fits; 2 drawn, 3 allowed. Loses 80 and 40 mm2, gains 40 mm2."""
    wide, thin = run(6.0, 5.0), run(3.0, 3.0, 30.0, "B2", ("C", "D"))
    graph = graph_of([drawn("B1", "A", "B", wide.xyz_mm, 8.0), drawn("B2", "C", "D", thin.xyz_mm, 2.0)], 400.0)
    found = measure_departure(plan_of([wide, thin]), graph)
    assert (found.lowered_mm2, found.raised_mm2, found.capped_mm2) == pytest.approx((80.0, 40.0, 40.0))
    assert found.share == pytest.approx(160.0 / 400.0) and [b.id for b in found.branches] == ["B1", "B2"]
    row = check_as_drawn(found)[0]
    assert row.outcome is Outcome.WATCH and row.value == pytest.approx(0.4) and row.branch_ids == ("B1", "B2")
    assert "40.0 %" in row.text and "80.0 mm2 (20.0 %) lowered" in row.text and "bore_range_mm" in row.hint
    assert "hardly" not in row.text


def test_a_drawing_kept_is_a_pass_and_a_scale_asked_for_is_no_departure():
    built = run(6.0, 6.0)
    graph = graph_of([drawn("B1", "A", "B", built.xyz_mm, 4.0)], 160.0)
    row = check_as_drawn(measure_departure(plan_of([built]), graph, 1.5))[0]
    assert row.outcome is Outcome.PASS and row.value == 0.0 and row.hint == ""
    assert check_as_drawn(measure_departure(plan_of([built]), graph))[0].value == pytest.approx(0.5)


def test_hardly_the_drawing_asks_for_channel_level_and_size():
    built = run(4.0, 4.0)
    row = check_as_drawn(
        measure_departure(plan_of([built]), graph_of([drawn("B1", "A", "B", built.xyz_mm, 20.0)], 800.0))
    )
    assert row[0].value == pytest.approx(0.8) and row[0].outcome is Outcome.WATCH
    assert all(word in row[0].text for word in ("channel", "level", "size_mm"))


def test_a_large_piece_left_out_is_a_watch_and_specks_are_not():
    """Bore 4: a piece above 16 mm2 counts as large; a pinhole is metal and no coolant."""
    built = run(4.0, 4.0)
    line = drawn("B1", "A", "B", built.xyz_mm, 4.0)

    def row(*dropped):
        return check_as_drawn(measure_departure(plan_of([built]), graph_of([line], 2000.0, dropped)))[0]

    piece = Dropped(DropReason.NO_PORT, (30.0, 30.0), 20.0)
    specks = (Dropped(DropReason.ISLAND, (3.0, 3.0), 3.0), Dropped(DropReason.SPUR, (4.0, 3.0), 2.0))
    pinhole = Dropped(DropReason.PINHOLE, (8.0, 3.0), 30.0)
    assert row(piece).outcome is Outcome.WATCH and row(piece).value == pytest.approx(0.01)
    small = row(*specks, pinhole)
    assert small.outcome is Outcome.PASS and small.value == 0.0 and "5.0 mm2" in small.text


def test_drawn_bore_at_the_samples_between():
    """The plan keeps every sample of the layout and adds some: bores between run evenly."""
    fine = np.column_stack([np.linspace(0.0, 8.0, 9), np.zeros(9), np.zeros(9)])
    line = drawn("B1", "A", "B", fine[[0, 2, 6, 8]], [4.0, 6.0, 2.0, 2.0])
    built = branch("B1", "A", "B", fine, 4.0)
    assert drawn_bore_mm(built, line).tolist() == [4.0, 5.0, 6.0, 5.0, 4.0, 3.0, 2.0, 2.0, 2.0]
    moved = branch("B1", "A", "B", np.add(fine[::2], [0.0, 0.01, 0.0]), 4.0)
    assert drawn_bore_mm(moved, line) == pytest.approx([4.0, 6.0, 4.0, 2.0, 2.0])


def test_capped_does_not_deny_what_the_range_lowered():
    plan = straight_pipe()
    assert "No bore had to be lowered" in check_capped(plan)[0].text and "range" not in check_capped(plan)[0].text
    assert "range had lowered bores by 12.0 mm2" in check_capped(plan, 12.0)[0].text
    with_cap = dataclasses.replace(plan, caps=(Cap("B1", 3.0, 2.0, "face:+z"),))
    assert check_capped(with_cap, 12.0)[0].outcome is Outcome.WATCH


def narrowed(bore_mm):
    base = straight_pipe(6.0)
    items = [
        dataclasses.replace(b, bore_mm=np.minimum(b.bore_mm, bore_mm)) if b.id == "L-return" else b
        for b in base.branches
    ]
    return dataclasses.replace(base, branches=tuple(items))


@pytest.mark.parametrize(("bore_mm", "outcome"), [(6.0, Outcome.PASS), (4.9, Outcome.PASS), (4.7, Outcome.WATCH)])
def test_a_lead_much_narrower_than_its_port(bore_mm, outcome):
    row = check_leads(make_centrelines(narrowed(bore_mm)))[0]
    assert row.outcome is outcome and row.value == pytest.approx(bore_mm / 6.0)
    if outcome is Outcome.WATCH:
        assert row.branch_ids == ("L-return",) and row.xyz_mm is not None and row.hint


def test_the_pilot_of_a_thread_is_not_the_lead():
    """A pilot of 4 mm over the last 6 mm, then 4 mm of taper: a lead of 15 mm is full before that."""
    base = straight_pipe(6.0)
    lead = next(b for b in base.branches if b.id == "L-feed")
    way = np.linalg.norm(lead.xyz_mm - lead.xyz_mm[-1], axis=1)
    detail = ThreadHole(make_thread("G1/8"), 4.0, 2.0, 0.2)
    finish = Finish(detail, pilot_mm=4.0, cut_mm=9.728, cut_depth_mm=6.0, land_mm=14.0)
    items = [
        dataclasses.replace(b, bore_mm=finish.bore_mm(b.bore_mm, way, 0.5)) if b.id == "L-feed" else b
        for b in base.branches
    ]
    exits = [dataclasses.replace(e, finish=finish) if e.lead == "L-feed" else e for e in base.exits]
    plan = dataclasses.replace(base, branches=tuple(items), exits=tuple(exits))
    assert min(b.bore_mm.min() for b in plan.branches) == pytest.approx(4.0)
    assert [share for share, _ in lead_shares(make_centrelines(plan))] == pytest.approx([1.0, 1.0])
