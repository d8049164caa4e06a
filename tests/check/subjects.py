"""Inserts with known faults: hand-made plans, built by the solid stage, with limits of the shipped profile."""

from __future__ import annotations

import dataclasses
import functools
from pathlib import Path

import numpy as np

from morph.body.blank import Blank
from morph.body.plan import ChannelPlan
from morph.check import CheckSubject, check_insert
from morph.core.verdict import Outcome, Verdict
from morph.settings.job import ServiceSettings
from morph.settings.profile import Profile, Sourced, read_profile
from morph.solid.channel import make_channel_solid
from morph.solid.cut import make_insert
from tests.solid.plans import branch, sampled

ALL_SIDES = ("-x", "+x", "-y", "+y")
LEAVE = {"-x": (-1, 0, 0), "+x": (1, 0, 0), "-y": (0, -1, 0), "+y": (0, 1, 0), "-z": (0, 0, -1), "+z": (0, 0, 1)}
H_MM = 0.3


@functools.cache
def profile() -> Profile:
    return read_profile("steel-40um", Path())


def with_machine(x: float, y: float, z: float) -> Profile:
    sides = tuple(Sourced(side, "mm", "test") for side in (x, y, z))
    return dataclasses.replace(profile(), machine_mm=sides)


def subject_of(plan: ChannelPlan, blank: Blank, *, direction=(0.0, 0.0, 1.0), judged=None, **service) -> CheckSubject:
    """The insert built from `plan`; `judged` is the plan it is checked against when that differs."""
    solid = make_channel_solid(plan, blank, H_MM)
    return CheckSubject(
        insert=make_insert(solid, blank, plan),
        solid=solid,
        blank=blank,
        plan=judged or plan,
        profile=profile(),
        service=ServiceSettings(**service),
        build_direction=direction,
    )


def rows(subject: CheckSubject, code: str, outcome: Outcome | None = None) -> list[Verdict]:
    """The rows of one code (and outcome) of a subject's checks."""
    return [v for v in check_insert(subject) if v.code == code and outcome in (None, v.outcome)]


def run_through(tag: str, points, bore, faces, stock=0.0):
    """Three branches in a row (lead, channel, lead) along `points`: [exit, port, ..., port, exit]; ports feed and return.

    Returns the branches and the exits for `plan_of`.
    """
    points = [np.asarray(p, float) for p in points]
    name = f"{tag}-" if tag else ""
    way = points[1:-1]
    finest = float(np.min(bore))
    path = np.asarray(way) if len(way) > 6 else sampled(way, finest)
    items = [
        branch(f"{name}B1", f"{name}N1", f"{name}N2", path, bore),
        branch(
            f"L-{name}in", f"{name}N1", f"{name}X1", sampled([points[1], points[0]], finest), _end(bore, 0), lead=True
        ),
        branch(
            f"L-{name}out",
            f"{name}N2",
            f"{name}X2",
            sampled([points[-2], points[-1]], finest),
            _end(bore, -1),
            lead=True,
        ),
    ]
    exits = [
        (f"{name}in", "in", f"L-{name}in", faces[0], LEAVE[faces[0]], stock),
        (f"{name}out", "out", f"L-{name}out", faces[1], LEAVE[faces[1]], stock),
    ]
    return items, exits


def _end(bore, index):
    return float(np.atleast_1d(bore)[index])
