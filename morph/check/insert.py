"""All checks of an insert, in the order of the report."""

from __future__ import annotations

import numpy as np

from morph.check.bend import check_bends
from morph.check.between import check_between
from morph.check.bore import check_bores, measure_bores
from morph.check.capped import check_capped
from morph.check.ceiling import check_ceiling
from morph.check.centreline import Centrelines, make_centrelines
from morph.check.channel_wall import ChannelWall, make_channel_wall
from morph.check.condition import check_condition
from morph.check.fields import ChannelFields, make_fields
from morph.check.machine import check_machine
from morph.check.opening import check_openings
from morph.check.powder import check_powder
from morph.check.subject import CheckSubject
from morph.check.wall import check_faces, check_holes
from morph.core.arrays import Floats
from morph.core.progress import SILENT, Progress
from morph.core.verdict import Verdict

STAGE = "check"
STEPS = 6


def _measured(subject: CheckSubject, progress: Progress) -> tuple[Centrelines, ChannelWall, Floats]:
    """Returns the centrelines, the channel wall as written, and the measured bore (n,) at every sample."""
    lines = make_centrelines(subject.plan)
    wall = make_channel_wall(subject.insert, lines)
    progress.step(STAGE, 1, STEPS)
    bore_mm = measure_bores(lines, wall)
    progress.step(STAGE, 2, STEPS)
    return lines, wall, bore_mm


def check_insert(subject: CheckSubject, progress: Progress = SILENT) -> tuple[Verdict, ...]:
    """Returns every row for one insert, measured on the mesh as it is written.

    Args:
        subject: insert, channels, blank, plan and limits.
        progress: told between the families of checks; may raise Cancelled.

    Raises:
        ValueError: the plan has no branch, or the insert no channel wall.
    """
    direction = np.array(subject.build_direction)
    lines, wall, bore_mm = _measured(subject, progress)
    rows = check_faces(subject, lines, wall)
    rows += check_between(subject, lines, wall)
    rows += check_holes(subject, lines, wall)
    progress.step(STAGE, 3, STEPS)
    rows += check_openings(subject.insert, subject.plan, subject.blank, lines)
    rows += check_bores(subject, lines, bore_mm)
    rows += check_capped(subject.plan)
    rows += check_ceiling(wall.mesh, subject.profile, direction, lines)
    progress.step(STAGE, 4, STEPS)
    rows += check_bends(lines, subject.profile)
    rows += check_powder(lines, subject.blank, direction)
    rows += check_condition(subject.insert, subject.solid, subject.plan)
    progress.step(STAGE, 5, STEPS)
    rows += check_machine(subject.insert.mesh, subject.profile, direction)
    progress.step(STAGE, 6, STEPS)
    return tuple(rows)


def measure_fields(subject: CheckSubject, progress: Progress = SILENT) -> ChannelFields:
    """Returns wall and bore along every branch and over the trimmed channels, for drawing."""
    lines, _, bore_mm = _measured(subject, progress)
    return make_fields(lines, bore_mm, subject.solid.trimmed, subject.blank, np.array(subject.build_direction))
