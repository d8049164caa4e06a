"""Walls of roofed channels: a roof that looks at a part face or at another channel reaches bore / (2 cos b)."""

import dataclasses

import numpy as np
import pytest

from morph.body.room import make_limits, room_to_face_mm
from morph.body.section import SectionRule
from morph.core.verdict import Outcome
from morph.settings.job import SectionSettings, SectionShape, ServiceSettings
from tests.check.subjects import profile, rows, run_through, subject_of
from tests.solid.plans import box_blank, plan_of, straight_pipe

FOUND_MM = 0.03
ROOF = SectionRule(SectionShape.ROOFED, 47.0)
REACH = 1.0 / np.cos(np.radians(47.0))


def roofed(plan):
    return dataclasses.replace(plan, section=ROOF)


def test_a_roof_that_looks_at_the_top_part_face():
    """Centreline 8.5 mm below, bore 6: a round section leaves 5.5 mm, the roof only 8.5 - 3 / cos 47."""
    found = rows(subject_of(roofed(straight_pipe(z=21.5)), box_blank()), "wall-face")
    assert found[0].value == pytest.approx(8.5 - 3.0 * REACH, abs=FOUND_MM)
    assert found[0].outcome is Outcome.FAIL
    round_wall = rows(subject_of(straight_pipe(z=21.5), box_blank()), "wall-face")[0].value
    assert round_wall == pytest.approx(5.5, abs=FOUND_MM)


def test_built_upside_down_the_roof_looks_away():
    plan = dataclasses.replace(
        straight_pipe(z=21.5), section=SectionRule(SectionShape.ROOFED, 47.0, np.array([0, 0, -1.0]))
    )
    found = rows(subject_of(plan, box_blank(), direction=(0.0, 0.0, -1.0)), "wall-face")
    assert found[0].value == pytest.approx(5.5, abs=FOUND_MM)


def test_a_roof_below_another_channel():
    """Two crossing pipes 9 mm apart in height, bore 4: the metal is 9 - 2 - 2 / cos 47."""
    low = run_through("A", [(0, 20, 8), (20, 20, 8), (40, 20, 8), (60, 20, 8)], 4.0, ("-x", "+x"))
    high = run_through("C", [(30, 0, 17), (30, 12, 17), (30, 28, 17), (30, 40, 17)], 4.0, ("-y", "+y"))
    plan = roofed(plan_of(low[0] + high[0], low[1] + high[1]))
    found = rows(subject_of(plan, box_blank(port=("-x", "+x", "-y", "+y"))), "wall-between")
    assert found[0].value == pytest.approx(9.0 - 2.0 - 2.0 * REACH, abs=FOUND_MM)


@pytest.mark.parametrize("shape", list(SectionShape))
def test_an_upright_face_finds_the_openings_of_channels_that_lie(shape):
    """Bore 6 along x: the roof lifts the opening's centre of area off the axis, and it is still the declared one."""
    plan = dataclasses.replace(straight_pipe(), section=SectionRule(shape, 47.0, free_span_mm=5.85))
    (row,) = rows(subject_of(plan, box_blank()), "openings")
    assert row.outcome is Outcome.PASS, row.text
    # a port declared a quarter of a millimetre above it is another place
    exits = tuple(dataclasses.replace(e, xyz_mm=e.xyz_mm + np.array([0.0, 0.0, 0.25])) for e in plan.exits)
    (row,) = rows(subject_of(dataclasses.replace(plan, exits=exits), box_blank()), "openings")
    assert row.outcome is Outcome.FAIL


@pytest.mark.quick
@pytest.mark.parametrize("shape", list(SectionShape))
def test_the_room_below_a_part_face_counts_the_roof(shape):
    """The room is the bore whose reach, wall and band add up to the distance; sideways it is that of a round channel."""
    limits = make_limits(SectionSettings(shape), ServiceSettings(), profile())
    blank = box_blank(part=("+z", "+y"))
    points = np.array([[30.0, 20.0, 15.0]])
    top, side = (float(room_to_face_mm(blank.face(name), points, limits)[0]) for name in ("+z", "+y"))
    angle = np.radians(profile().roof_angle_deg.value + 2.0)
    k = 1.0 / (1.0 - np.sin(angle))
    reach = {"round": 0.5, "roofed": 0.5 / np.cos(angle), "arched": 0.5 * np.sqrt(2.0 * k - 1.0)}
    reach["auto"] = reach["roofed"]  # the bore is far above the free span
    after = 15.0 - limits.band_mm
    assert top == pytest.approx(after / (reach[shape.value] + 1.0), rel=1e-6)
    assert side == pytest.approx((20.0 - limits.band_mm) / 1.5, rel=1e-6)
