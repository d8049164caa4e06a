"""All checks of an insert, in the order of the report."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.check.as_drawn import check_as_drawn, measure_departure
from morph.check.bend import check_bends
from morph.check.between import check_between
from morph.check.bore import check_bores, measure_bores
from morph.check.capped import check_capped
from morph.check.ceiling import check_ceiling
from morph.check.centreline import Centrelines, make_centrelines
from morph.check.channel_wall import ChannelWall, make_channel_wall
from morph.check.condition import check_condition
from morph.check.end import check_ends
from morph.check.fields import ChannelFields, make_fields
from morph.check.lead_narrow import check_leads
from morph.check.machine import check_machine
from morph.check.opening import check_openings
from morph.check.overhang import check_overhang
from morph.check.powder import check_powder
from morph.check.subject import CheckSubject
from morph.check.wall import check_faces, check_holes
from morph.core.arrays import Floats, frozen_floats
from morph.core.progress import SILENT, Progress
from morph.core.verdict import Verdict

STAGE = "check"
STEPS = 6


@dataclass(frozen=True, slots=True, eq=False)
class Measured:
    """What several checks share: centrelines, the channel wall as written, and the bore (n,) at every sample."""

    lines: Centrelines
    wall: ChannelWall
    bore_mm: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "bore_mm", frozen_floats("bore_mm", self.bore_mm, (len(self.lines.branch),)))


def measure_insert(subject: CheckSubject, progress: Progress = SILENT) -> Measured:
    """Returns the measurements that checks and fields share; pass them to both to measure once.

    Raises:
        ValueError: the plan has no branch, or the insert no channel wall.
    """
    lines = make_centrelines(subject.plan)
    wall = make_channel_wall(subject.insert, lines)
    progress.step(STAGE, 1, STEPS)
    bore_mm = measure_bores(lines, wall)
    progress.step(STAGE, 2, STEPS)
    return Measured(lines, wall, bore_mm)


def check_insert(
    subject: CheckSubject, progress: Progress = SILENT, measured: Measured | None = None
) -> tuple[Verdict, ...]:
    """Returns every row for one insert, measured on the mesh as it is written.

    Args:
        subject: insert, channels, blank, plan and limits.
        progress: told between the families of checks; may raise Cancelled.
        measured: from `measure_insert`; None measures here.

    Raises:
        ValueError: the plan has no branch, or the insert no channel wall.
    """
    direction = np.array(subject.build_direction)
    shared = measure_insert(subject, progress) if measured is None else measured
    lines, wall = shared.lines, shared.wall
    rows = check_faces(subject, lines, wall)
    rows += check_between(subject, lines, wall)
    rows += check_holes(subject, lines, wall)
    rows += check_ends(subject, lines, wall)
    progress.step(STAGE, 3, STEPS)
    rows += check_openings(subject.insert, subject.plan, subject.blank, lines, subject.solid.h_mm)
    rows += check_bores(subject, lines, shared.bore_mm)
    rows += _check_likeness(subject)
    rows += check_leads(lines)
    rows += check_ceiling(wall.mesh, subject.profile, direction, lines)
    rows += check_overhang(subject.insert, subject.blank, subject.profile, direction)
    progress.step(STAGE, 4, STEPS)
    rows += check_bends(lines, subject.profile)
    rows += check_powder(lines, subject.blank, direction)
    rows += check_condition(subject.insert, subject.solid, subject.plan)
    progress.step(STAGE, 5, STEPS)
    rows += check_machine(subject.insert.mesh, subject.profile, direction)
    progress.step(STAGE, 6, STEPS)
    return tuple(rows)


def _check_likeness(subject: CheckSubject) -> list[Verdict]:
    """Returns the `as-drawn` row, left out without a drawing to compare with, and the `capped` row."""
    if subject.graph is None:
        return check_capped(subject.plan)
    found = measure_departure(subject.plan, subject.graph, subject.bore_scale, subject.balanced)
    return check_as_drawn(found) + check_capped(subject.plan, found.lowered_mm2)


def measure_fields(subject: CheckSubject, measured: Measured | None = None) -> ChannelFields:
    """Returns wall and bore along every branch and over the trimmed channels, for drawing."""
    shared = measure_insert(subject) if measured is None else measured
    direction = np.array(subject.build_direction)
    return make_fields(shared.lines, shared.bore_mm, subject.solid.trimmed, subject.blank, direction)
