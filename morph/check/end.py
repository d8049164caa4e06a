"""Ends that are cut after printing: their walls, counted from the cut, and the pilot inside its thread as written.

The cut is a thread's major diameter over the drill's depth, or a seal groove: a flat-ended cylinder. Its
walls to faces, holes and other cuts are between exact distances and CIRCLE points around its surface; to
channels as every wall, by centrelines and on the written mesh. A channel that runs on from the cut
tapers to nothing beside it; that is no wall (see body/end_room.py for when it counts).
"""

from __future__ import annotations

import numpy as np

from morph.body.face import FaceRole
from morph.body.finish import ThreadHole
from morph.body.hole import Hole, distance_to_hole_mm
from morph.body.neighbour import WALL_WAY
from morph.body.plan import Exit
from morph.body.room import wall_band_mm
from morph.check.centreline import Centrelines, measure_ways
from morph.check.channel_wall import ChannelWall
from morph.check.obstacle import HoleObstacle
from morph.check.rows import Limit, judge_length, place, worse_limit
from morph.check.subject import CheckSubject
from morph.check.wall import measure_wall
from morph.core.arrays import Bools, Floats
from morph.core.verdict import Outcome, Verdict

CIRCLE, LEVEL_MM, MOST_LEVELS = 120, 0.5, 200
"""Points around a cut; its levels; and at most this many of them."""

AXIS_MM = 1e-6
"""Along the axis a vertex on the finished face or at the drill's end still belongs to the cut."""

Row = tuple[float, float, float, str, Limit, Floats]
"""Margin, wall and mesh or centreline figure in mm, neighbour, limit, place (3,)."""


def check_ends(subject: CheckSubject, lines: Centrelines, wall: ChannelWall | None) -> list[Verdict]:
    """Returns a `wall-thread` row per exit that is cut later, and a `thread-pilot` row per thread.

    Args:
        subject: plan, blank and limits.
        lines: the centrelines.
        wall: the channel wall as written; None measures from centrelines and leaves the pilots out.
    """
    rows = []
    for exit_ in subject.plan.exits:
        for cut in exit_.finish.cut(exit_.port, exit_.xyz_mm, exit_.leave, 0.0):
            rows.append(_wall_row(subject, lines, wall, exit_, cut))
        if isinstance(exit_.finish.detail, ThreadHole) and wall is not None:
            rows += _pilot_rows(lines, wall, exit_, exit_.finish.detail)
    return rows


def _surface_mm(cut: Hole) -> Floats:
    """Returns points (n, 3) on the mantle and around the floor of a cut."""
    across = np.cross(cut.axis, np.eye(3)[int(np.abs(cut.axis).argmin())])
    across /= np.linalg.norm(across)
    angle = 2.0 * np.pi * np.arange(CIRCLE) / CIRCLE
    circle = np.cos(angle)[:, None] * across + np.sin(angle)[:, None] * np.cross(cut.axis, across)
    levels = np.linspace(0.0, cut.length_mm, min(MOST_LEVELS, int(np.ceil(cut.length_mm / LEVEL_MM)) + 1))
    rim = cut.start_mm + levels[:, None, None] * cut.axis + 0.5 * cut.diameter_mm * circle
    return np.asarray(rim.reshape(-1, 3), dtype=np.float64)


def _wall_row(subject: CheckSubject, lines: Centrelines, wall: ChannelWall | None, exit_: Exit, cut: Hole) -> Verdict:
    found = [*_beside(subject, exit_, cut), *_channels(subject, lines, wall, exit_, cut)]
    _, value, _, neighbour, limit, where = min(found, key=lambda row: (row[0], row[3]))
    band = wall_band_mm(subject.profile)
    outcome = judge_length(value, limit.value, band)
    what = "its major diameter" if isinstance(exit_.finish.detail, ThreadHole) else "its outer diameter"
    return Verdict(
        "wall-thread",
        outcome,
        f"The wall from {cut.id} to {neighbour} is {value:.2f} mm, counted from {what} of {cut.diameter_mm:.2f} mm "
        f"over {cut.length_mm:.2f} mm of depth; it must hold {limit.words} after a band of {band:.2f} mm.",
        value=value,
        unit="mm",
        limit=limit.value,
        band=band,
        source=limit.source,
        branch_ids=(exit_.lead,),
        xyz_mm=place(where),
        hint="" if outcome is Outcome.PASS else f"Move the exit of {exit_.port}, or choose a smaller thread or depth.",
    )


def _beside(subject: CheckSubject, exit_: Exit, cut: Hole) -> list[Row]:
    """Returns the walls of a cut to faces, holes and other cuts."""
    points, service, process = _surface_mm(cut), subject.service, subject.profile.wall_mm
    rows: list[Row] = []

    def add(distance: Floats, neighbour: str, wall_mm: float, words: str) -> None:
        limit = worse_limit(wall_mm, words, process.value, process.source)
        k = int(distance.argmin())
        rows.append((float(distance[k]) - limit.value, float(distance[k]), 0.0, neighbour, limit, points[k]))

    for face in subject.blank.faces:
        if face.name != exit_.face and face.role is FaceRole.PART:
            add(face.distance_mm(points), f"part face {face.name}", service.wall_face_mm, "wall_face_mm")
        elif face.name != exit_.face:
            add(face.distance_mm(points), f"outer face {face.name}", service.wall_outer_mm, "wall_outer_mm")
    for hole in subject.blank.holes:
        add(distance_to_hole_mm(hole, points), f"hole {hole.id}", hole.wall_mm, f"wall of hole {hole.id}")
    for other in subject.plan.exits:
        if other.node != exit_.node:
            for taken in other.finish.cut(other.port, other.xyz_mm, other.leave, 0.0):
                add(distance_to_hole_mm(taken, points), taken.id, service.wall_between_mm, "wall_between_mm")
    return rows


def _channels(subject: CheckSubject, lines: Centrelines, wall: ChannelWall | None, exit_: Exit, cut: Hole) -> list[Row]:
    """Returns the wall of a cut to the channel with the least margin; nothing when no channel counts."""
    service, process = subject.service, subject.profile.wall_mm
    limit = worse_limit(service.wall_between_mm, "wall_between_mm", process.value, process.source)
    counted = _counted(lines, exit_, cut, limit.value + wall_band_mm(subject.profile))
    found = measure_wall(HoleObstacle(cut), lines, wall, counted, lambda bore_mm: np.full(len(bore_mm), limit.value))
    if found is None:
        return []
    value = found.wall_mm
    branch = lines.branch_of(found.sample).id
    return [(value - limit.value, value, found.mesh_mm, branch, limit, np.array(found.xyz_mm))]


def _counted(lines: Centrelines, exit_: Exit, cut: Hole, keep_mm: float) -> Bools:
    """Returns which samples (n,) are beside the cut and not what runs on from it."""
    number = next(k for k, branch in enumerate(lines.plan.branches) if branch.id == exit_.lead)
    own = np.arange(lines.first[number], lines.first[number + 1])
    along = (exit_.xyz_mm - lines.xyz_mm[own]) @ exit_.leave
    deepest = own[int(np.abs(along - cut.length_mm).argmin())]
    n = len(lines.branch)
    way = measure_ways(lines, np.full(n, deepest), np.arange(n)).length_mm
    half = 0.5 * lines.bore_mm
    opens = (distance_to_hole_mm(cut, lines.xyz_mm) < half) & (way > lines.along_mm[deepest] + lines.bore_mm)
    beside = way > WALL_WAY * (0.5 * cut.diameter_mm + half + keep_mm)
    return np.asarray((lines.branch != number) & (beside | opens), dtype=np.bool_)


def _pilot_rows(lines: Centrelines, wall: ChannelWall, exit_: Exit, hole: ThreadHole) -> list[Verdict]:
    """Returns the row that says how wide the pilot is as written, roof included, against the minor diameter."""
    number = next(k for k, branch in enumerate(lines.plan.branches) if branch.id == exit_.lead)
    offset = wall.mesh.vertices_mm - exit_.xyz_mm
    depth = -(offset @ exit_.leave)
    aside = np.linalg.norm(offset + depth[:, None] * exit_.leave, axis=1)
    near = aside < exit_.finish.cut_mm
    inside = (lines.branch[wall.sample] == number) & near & (depth <= hole.drill_depth_mm + AXIS_MM)
    if not inside.any():
        return []
    worst = int(np.where(inside, aside, -1.0).argmax())
    value, thread = 2.0 * float(aside[worst]), hole.thread
    outcome = judge_length(value, thread.minor_mm, 0.0, "most")
    if outcome is Outcome.WATCH and value <= thread.minor_mm:
        outcome = Outcome.PASS  # a pilot is built close to its circle on purpose
    return [
        Verdict(
            "thread-pilot",
            outcome,
            f"The pilot of {thread.designation} at {exit_.port} as written is {value:.2f} mm across, roof included, "
            f"over {hole.drill_depth_mm:.2f} mm; the drill of {thread.drill_mm:.2f} mm takes "
            f"{0.5 * (thread.drill_mm - value):.2f} mm per side or more. It must stay inside the minor circle.",
            value=value,
            unit="mm",
            limit=thread.minor_mm,
            limit_is="most",
            source=f"{thread.standard.value}, basic minor diameter",
            branch_ids=(exit_.lead,),
            xyz_mm=place(wall.mesh.vertices_mm[worst]),
            hint="" if outcome is Outcome.PASS else "Give more drill_stock_mm.",
        )
    ]
