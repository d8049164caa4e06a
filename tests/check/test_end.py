"""Ends on written meshes: the pilot with its roof inside the minor circle, and walls counted from what is cut later."""

import dataclasses

import numpy as np
import pytest

from morph.body.end import make_finish
from morph.body.hole import Hole
from morph.body.plan import Exit
from morph.body.section import SectionRule
from morph.check import CheckSubject, measure_insert
from morph.check.end import check_ends
from morph.core.verdict import Outcome
from morph.settings.job import FaceSealEnd, PortSettings, Role, SectionShape, ServiceSettings, ThreadEnd
from morph.solid.channel import make_channel_solid
from morph.solid.cut import make_insert
from tests.solid import plans
from tests.surface.graphs import make_profile

PROFILE = make_profile(smallest_bore_mm=1.0)
BAND_MM = 0.2
"""Position band 0.1 mm and half the bore band of 0.2 mm."""
SERVICE = ServiceSettings(smallest_bore_mm=1.0)
LENGTH_MM, BORE_MM = 80.0, 5.0
DEPTH_MM, RUN_OUT_MM = 9.0, 3.0


def up_for(angle_deg):
    """The build direction in which an exit along x stands at `angle_deg` to the plate."""
    a = np.radians(angle_deg)
    return (float(np.sin(a)), 0.0, float(np.cos(a)))


def threaded_pipe(end, shape=SectionShape.ROUND, angle_deg=0.0, size_mm=60.0, at=None, holes=()):
    """A straight channel along x through a box, both ends finished as `end`; plan, blank and build direction."""
    y, z = at or (size_mm / 2, size_mm / 2)
    rule = SectionRule(shape, 47.0, np.array(up_for(angle_deg)))
    items, ends = [], []
    for port, role, start, stop, face, side in (
        ("in", Role.IN, 32.0, 0.0, "-x", -1.0),
        ("out", Role.OUT, LENGTH_MM - 32.0, LENGTH_MM, "+x", 1.0),
    ):
        leave = np.array([side, 0.0, 0.0])
        finish = make_finish(PortSettings(port, role, (0.0, 0.0), end=end), leave, rule, SERVICE, PROFILE)
        path = plans.sampled([(start, y, z), (stop, y, z)], 2.0)
        bore = finish.bore_mm(np.full(len(path), BORE_MM), np.abs(path[:, 0] - stop), 0.5)
        items.append(plans.branch(f"L-{port}", f"N-{port}", f"X-{port}", path, bore, lead=True))
        ends.append((port, role, items[-1], leave, face, finish))
    middle = plans.sampled([(32.0, y, z), (LENGTH_MM - 32.0, y, z)], BORE_MM)
    channel = plans.branch("B1", "N-in", "N-out", middle, BORE_MM)
    plan = plans.plan_of([channel, *items], [(p, r, lead.id, f, leave, 0.0) for p, r, lead, leave, f, _ in ends])
    exits = tuple(
        dataclasses.replace(exit_, finish=finish) for exit_, (*_, finish) in zip(plan.exits, ends, strict=True)
    )
    blank = plans.box_blank(high=(LENGTH_MM, size_mm, size_mm))
    return dataclasses.replace(plan, exits=exits, section=rule), dataclasses.replace(blank, holes=holes)


def built(plan, blank, h_mm=0.3, **service):
    solid = make_channel_solid(plan, blank, h_mm)
    settings = dataclasses.replace(SERVICE, **service)
    return CheckSubject(make_insert(solid, blank, plan), solid, blank, plan, PROFILE, settings, tuple(plan.section.up))


def ends_of(subject):
    measured = measure_insert(subject)
    return check_ends(subject, measured.lines, measured.wall)


def reach_on_mesh_mm(mesh, exit_: Exit):
    """Twice the farthest vertex of the written insert from the exit's axis, over the drill's depth, outer faces left out."""
    offset = mesh.vertices_mm - exit_.xyz_mm
    depth = -(offset @ exit_.leave)
    aside = np.linalg.norm(offset + depth[:, None] * exit_.leave, axis=1)
    thread = exit_.finish.detail.thread
    return 2.0 * aside[(depth <= DEPTH_MM + RUN_OUT_MM + 1e-6) & (aside < 0.8 * thread.major_mm)].max()


SIZES = ("M5", "G1/16", "M10x1", "G1/8", "G1/4", "G1")
CASES = [(name, SectionShape.ROOFED, angle) for name in SIZES for angle in (0, 30, 44, 75, 90)]
CASES += [("G1/8", shape, angle) for shape in (SectionShape.ARCHED, SectionShape.AUTO) for angle in (0, 40, 90)]
CASES += [("M8", SectionShape.ROUND, 0)]


@pytest.mark.parametrize(("name", "shape", "angle"), CASES)
def test_the_written_pilot_stays_inside_the_minor_circle(name, shape, angle):
    """All kinds of section, exits lying flat to standing along the build direction; ISO 228-1 and ISO 724 minor diameters."""
    end = ThreadEnd(name, DEPTH_MM, RUN_OUT_MM)
    plan, blank = threaded_pipe(end, shape, angle)
    subject = built(plan, blank, 0.2 if name == "M5" else 0.3)
    rows = [row for row in ends_of(subject) if row.code == "thread-pilot"]
    assert len(rows) == 2 and all(row.outcome is Outcome.PASS for row in rows)
    for exit_, row in zip(plan.exits, rows, strict=True):
        thread = exit_.finish.detail.thread
        found = reach_on_mesh_mm(subject.insert.mesh, exit_)
        assert found < thread.minor_mm and row.limit == thread.minor_mm
        assert row.value == pytest.approx(found, abs=1e-6)
        # and it fills what the drill leaves, roof included; a blunt ridge of a wide roof is meshed a little flat
        if shape is SectionShape.ROOFED:
            assert found > 0.99 * min(thread.drill_mm - 0.6, thread.minor_mm - 0.03) - 0.05


def test_a_pilot_past_the_minor_circle_fails():
    """A pilot printed at drill size: its roof reaches 8.8 / cos 47 / 2 above the axis."""
    plan, blank = threaded_pipe(ThreadEnd("G1/8", DEPTH_MM, RUN_OUT_MM), SectionShape.ROOFED)
    lead = plan.branches[1]
    bore = np.maximum(lead.bore_mm, np.where(lead.xyz_mm[:, 0] <= 12.0, 8.8, 0.0))
    wide = dataclasses.replace(lead, bore_mm=bore)
    subject = built(dataclasses.replace(plan, branches=(plan.branches[0], wide, plan.branches[2])), blank)
    row, good = (row for row in ends_of(subject) if row.code == "thread-pilot")
    assert row.outcome is Outcome.FAIL and good.outcome is Outcome.PASS
    assert row.value == pytest.approx(2 * 4.4 / np.cos(np.radians(47.0)), abs=0.1) and row.branch_ids == ("L-in",)


def wall_row(subject):
    return next(row for row in ends_of(subject) if row.code == "wall-thread")


def test_the_wall_of_a_thread_counts_from_its_major_diameter():
    """G1/8 (major 9.728) with its axis 9 mm below the part face: 9 - 4.864 = 4.136 mm; to the side faces more."""
    plan, blank = threaded_pipe(ThreadEnd("G1/8", DEPTH_MM, RUN_OUT_MM), at=(30.0, 51.0))
    row = wall_row(built(plan, blank))
    assert row.value == pytest.approx(9.0 - 4.864, abs=1e-6) and "part face +z" in row.text
    assert row.outcome is Outcome.PASS and row.limit == 3.0 and row.band == pytest.approx(BAND_MM)
    tight = wall_row(built(plan, blank, wall_face_mm=4.0))
    assert tight.outcome is Outcome.FAIL and "smaller thread" in tight.hint


def test_a_thread_too_near_a_hole():
    """A pin of 6 mm across the exit, 10 mm deep and 9 mm off its axis: 9 - 3 - 4.864 = 1.136 mm."""
    pin = Hole("H1", np.array([10.0, 39.0, 0.0]), np.array([0.0, 0.0, 1.0]), 60.0, 6.0, 3.0)
    plan, blank = threaded_pipe(ThreadEnd("G1/8", DEPTH_MM, RUN_OUT_MM), holes=(pin,))
    row = wall_row(built(plan, blank))
    assert row.outcome is Outcome.FAIL and "hole H1" in row.text
    assert row.value == pytest.approx(9.0 - 3.0 - 4.864, abs=0.01)
    deep = dataclasses.replace(pin, start_mm=np.array([24.0, 39.0, 0.0]))  # behind the drill: 24 - 12 - 3 = 9 mm
    assert wall_row(built(*threaded_pipe(ThreadEnd("G1/8", DEPTH_MM, RUN_OUT_MM), holes=(deep,)))).value > 8.0


def test_a_thread_too_near_another_channel():
    """A second channel of 5 mm along y, 8 mm deep and 10 mm above the axis: 10 - 2.5 - 4.864 = 2.636 mm."""
    plan, blank = threaded_pipe(ThreadEnd("G1/8", DEPTH_MM, RUN_OUT_MM))
    path = plans.sampled([(8.0, 10.0, 40.0), (8.0, 50.0, 40.0)], BORE_MM)
    other = plans.branch("B2", "N-a", "N-b", path, BORE_MM)
    nodes = (
        *plan.nodes,
        *(
            dataclasses.replace(plan.nodes[0], id=name, kind="dead-end", port=None, sheet_mm=None, xyz_mm=xyz)
            for name, xyz in (("N-a", path[0]), ("N-b", path[-1]))
        ),
    )
    plan = dataclasses.replace(plan, nodes=nodes, branches=(*plan.branches, other), circuits=(*plan.circuits, ("B2",)))
    row = wall_row(built(plan, blank))
    assert row.outcome is Outcome.FAIL and "to B2" in row.text
    assert row.value == pytest.approx(10.0 - 2.5 - 4.864, abs=0.02)


def test_the_channel_that_runs_on_is_no_wall():
    """The straight channel behind the drill belongs to the lead: only faces are named."""
    plan, blank = threaded_pipe(ThreadEnd("G1/8", DEPTH_MM, RUN_OUT_MM))
    assert "face" in wall_row(built(plan, blank)).text


def test_a_seal_groove_counts_from_its_outer_diameter():
    """A groove of 20 mm outer diameter, 2 mm deep, 13 mm below the part face: 3 mm of 3 mm after 0.2 mm: fail."""
    plan, blank = threaded_pipe(FaceSealEnd(16.0, 20.0, 2.0, 24.0), at=(30.0, 47.0))
    rows = ends_of(built(plan, blank))
    assert [row.code for row in rows] == ["wall-thread"] * 2
    assert rows[0].value == pytest.approx(3.0, abs=1e-6) and rows[0].outcome is Outcome.FAIL
    assert "seal groove of in" in rows[0].text and "outer diameter" in rows[0].text


def test_plain_ends_have_no_row():
    plan, blank = threaded_pipe(ThreadEnd("G1/8", DEPTH_MM, RUN_OUT_MM))
    bare = tuple(
        Exit(*(getattr(e, f.name) for f in dataclasses.fields(Exit) if f.name != "finish")) for e in plan.exits
    )
    assert ends_of(built(dataclasses.replace(plan, exits=bare), blank)) == []
