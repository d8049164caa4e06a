"""Walls between a channel and a part face, an outer face or a hole, judged at the finished faces.

Every wall is found twice: from the centrelines (exact distance less the reach of the section) and on the
written mesh (exact distance of the channel wall's triangles); the smaller one counts. What is
judged is the margin to the limit at that place, because the service limit may grow with the bore.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from morph.body.face import Face, FaceRole
from morph.body.room import wall_band_mm
from morph.body.section import reach_mm
from morph.check.centreline import Centrelines, Place
from morph.check.channel_wall import ChannelWall
from morph.check.exits import own_exit_samples
from morph.check.obstacle import FaceObstacle, HoleObstacle, Obstacle
from morph.check.rows import MEASURE_MM, Limit, judge_length, place, worse_limit
from morph.check.subject import CheckSubject
from morph.core.arrays import Bools, Floats, Ints, unit_rows
from morph.core.tolerance import WELD_MM
from morph.core.verdict import Outcome, Verdict
from morph.settings.job import ServiceSettings
from morph.settings.profile import Profile

REFINED_TRIANGLES = 200
"""This many of the nearest triangles are also measured between their corners."""

REFINED_MM = 0.25
"""Of those with a corner at most this much farther than the nearest one."""

LimitAt = Callable[[Floats], Floats]


@dataclass(frozen=True, slots=True)
class WallFinding:
    """The worst wall against one neighbour.

    Args:
        wall_mm: the smaller of both routes. centreline_mm, mesh_mm: what each route found (inf for nothing).
        limit_mm: the limit there. bore_mm: the bore there. sample: the centreline sample it belongs to.
        xyz_mm: the middle of the metal there.
    """

    wall_mm: float
    centreline_mm: float
    mesh_mm: float
    limit_mm: float
    bore_mm: float
    sample: int
    xyz_mm: Place


def measure_wall(
    obstacle: Obstacle,
    lines: Centrelines,
    wall: ChannelWall | None,
    counted: Bools,
    limit_at: LimitAt,
    within: Bools | None = None,
) -> WallFinding | None:
    """Returns the wall with the least margin between the channels and `obstacle`, None when nothing is counted.

    Args:
        obstacle: the neighbour.
        lines: the centrelines.
        wall: the channel wall as written (None: centrelines only).
        counted: (n,) samples that count; a wall vertex counts with its sample.
        limit_at: the limit in mm for bores (k,).
        within: (m,) wall vertices that count, those in the finished part; None for all.
    """
    if not counted.any():
        return None
    reach_there = reach_mm(
        lines.bore_mm, unit_rows(obstacle.nearest_mm(lines.xyz_mm) - lines.xyz_mm), lines.plan.section
    )
    gap = obstacle.distance_mm(lines.xyz_mm) - reach_there
    margin = np.where(counted, gap - limit_at(lines.bore_mm), np.inf)
    best = int(np.argmin(margin))
    toward = obstacle.nearest_mm(lines.xyz_mm[best : best + 1])[0] - lines.xyz_mm[best]
    reach = max(float(np.linalg.norm(toward)), 1e-12)
    middle = lines.xyz_mm[best] + toward * (0.5 * (reach + float(reach_there[best])) / reach)
    found = (float(gap[best]), best, middle)
    centreline_mm, mesh_mm = float(gap[best]), np.inf
    written = None if wall is None else _on_mesh(obstacle, lines, wall, counted, limit_at, within)
    if written is not None:
        mesh_mm = written[0]
        if mesh_mm - _limit(limit_at, lines, written[1]) < centreline_mm - _limit(limit_at, lines, best):
            found = written
    value, sample, point = found
    if centreline_mm - value < MEASURE_MM:
        # Both routes agree: the centreline knows the place, the mesh only a facet near it.
        sample, point = best, middle
    bore = float(lines.bore_mm[sample])
    return WallFinding(value, centreline_mm, mesh_mm, _limit(limit_at, lines, sample), bore, sample, place(point))


def _limit(limit_at: LimitAt, lines: Centrelines, sample: int) -> float:
    return float(limit_at(lines.bore_mm[sample : sample + 1])[0])


def _on_mesh(
    obstacle: Obstacle,
    lines: Centrelines,
    wall: ChannelWall,
    counted: Bools,
    limit_at: LimitAt,
    within: Bools | None,
) -> tuple[float, int, Floats] | None:
    """Returns wall, sample and middle of the metal where the written channel wall has the least margin."""
    vertices = wall.mesh.vertices_mm
    margin = obstacle.distance_mm(vertices) - limit_at(lines.bore_mm[wall.sample])
    margin[~counted[wall.sample]] = np.inf
    if within is not None:
        margin[~within] = np.inf
    if not np.isfinite(margin).any():
        return None
    best = int(np.argmin(margin))
    near = np.flatnonzero((margin <= margin[best] + REFINED_MM)[wall.mesh.triangles].any(axis=1))
    of_triangle = margin[wall.mesh.triangles[near]]
    near, of_triangle = near[np.isfinite(of_triangle).all(axis=1)], of_triangle[np.isfinite(of_triangle).all(axis=1)]
    near = near[np.argsort(of_triangle.min(axis=1), kind="stable")[:REFINED_TRIANGLES]]
    points, samples = vertices[best : best + 1], wall.sample[best : best + 1]
    if len(near):
        fine, owner = _between_corners(vertices, wall.mesh.triangles[near])
        points, samples = np.concatenate([points, fine]), np.concatenate([samples, wall.sample[owner]])
    gap = obstacle.distance_mm(points)
    worst = int(np.argmin(gap - limit_at(lines.bore_mm[samples])))
    middle = 0.5 * (points[worst] + obstacle.nearest_mm(points[worst : worst + 1])[0])
    return float(gap[worst]), int(samples[worst]), middle


def _between_corners(vertices: Floats, triangles: Ints, parts: int = 6) -> tuple[Floats, Ints]:
    """Returns points on a regular grid over each triangle, and the corner nearest to each point."""
    grid = np.array([(i, j, parts - i - j) for i in range(parts + 1) for j in range(parts + 1 - i)]) / parts
    points = np.einsum("gc,tcx->tgx", grid, vertices[triangles]).reshape(-1, 3)
    return points, triangles[:, np.argmax(grid, axis=1)].reshape(-1)


def _wall_verdict(
    code: str, neighbour: str, finding: WallFinding, limit: Limit, band_mm: float, lines: Centrelines, hint: str
) -> Verdict:
    branch = lines.branch_of(finding.sample)
    both = f"centreline {finding.centreline_mm:.2f} mm, written mesh {finding.mesh_mm:.2f} mm"
    if not np.isfinite(finding.mesh_mm):
        both = "from the centreline"
    outcome = judge_length(finding.wall_mm, limit.value, band_mm)
    return Verdict(
        code,
        outcome,
        f"The wall from {branch.id} to {neighbour} is {finding.wall_mm:.2f} mm ({both}); "
        f"it must hold {limit.words} after a band of {band_mm:.2f} mm.",
        value=finding.wall_mm,
        unit="mm",
        limit=limit.value,
        band=band_mm,
        source=limit.source,
        branch_ids=(branch.id,),
        sheet_mm=lines.sheet_of(finding.sample),
        xyz_mm=finding.xyz_mm,
        hint="" if outcome is Outcome.PASS else hint,
    )


def _face_limit(finding: WallFinding, service: ServiceSettings, profile: Profile) -> Limit:
    by_bore = service.wall_face_bores * finding.bore_mm
    words = "wall_face_mm"
    if by_bore > service.wall_face_mm:
        words = f"wall_face_bores, {service.wall_face_bores:g} x bore {finding.bore_mm:.2f} mm"
    return worse_limit(max(service.wall_face_mm, by_bore), words, profile.wall_mm.value, profile.wall_mm.source)


def within_finished(subject: CheckSubject, wall: ChannelWall | None, but: str = "") -> Bools | None:
    """Returns the wall vertices (m,) behind every finished face (`but` one): what lies in stock is no wall of the part.

    A face ends where others cut it, but its distance is to the face carried on: in the stock before another
    face that would find walls where the part has ended.
    """
    if wall is None:
        return None
    inside = np.ones(len(wall.sample), dtype=np.bool_)
    for face in subject.blank.faces:
        if face.name != but:
            inside &= face.distance_mm(wall.mesh.vertices_mm) >= -WELD_MM
    return inside


def _part_finding(
    subject: CheckSubject, face: Face, lines: Centrelines, wall: ChannelWall | None
) -> tuple[WallFinding, Limit] | None:
    service, profile = subject.service, subject.profile

    def limit_at(bore_mm: Floats) -> Floats:
        least = max(service.wall_face_mm, profile.wall_mm.value)
        return np.maximum(least, service.wall_face_bores * bore_mm)

    everything = np.ones(len(lines.branch), dtype=bool)
    within = within_finished(subject, wall, face.name)
    finding = measure_wall(FaceObstacle(face), lines, wall, everything, limit_at, within)
    return None if finding is None else (finding, _face_limit(finding, service, profile))


def _same_everywhere(limit: Limit) -> LimitAt:
    return lambda bore_mm: np.full(len(bore_mm), limit.value)


def _outer_finding(
    subject: CheckSubject, face: Face, lines: Centrelines, wall: ChannelWall | None
) -> tuple[WallFinding, Limit] | None:
    profile = subject.profile
    limit = worse_limit(subject.service.wall_outer_mm, "wall_outer_mm", profile.wall_mm.value, profile.wall_mm.source)
    counted = ~own_exit_samples(lines, face)
    within = within_finished(subject, wall, face.name)
    finding = measure_wall(FaceObstacle(face), lines, wall, counted, _same_everywhere(limit), within)
    return None if finding is None else (finding, limit)


def check_faces(subject: CheckSubject, lines: Centrelines, wall: ChannelWall | None) -> list[Verdict]:
    """Returns a row per face at the place with the least margin, and a second one where stock is removed later.

    Part faces give `wall-face`. Port faces (away from the branch's own exit) and other faces give
    `wall-outer`. All are measured to the finished face; `wall-stock` says what that costs.
    """
    rows, band = [], wall_band_mm(subject.profile)
    for face in subject.blank.faces:
        if face.role is FaceRole.PART:
            found, code, kind = _part_finding(subject, face, lines, wall), "wall-face", "part face"
            hint = "Lay the channels deeper (depth_mm), or lower bore_scale or the bore there."
        else:
            found, code, kind = _outer_finding(subject, face, lines, wall), "wall-outer", "face"
            hint = f"Move the branch or lead away from {face.name}, or make the blank larger ([blank] margin_mm)."
        if found is None:
            continue
        finding, limit = found
        rows.append(_wall_verdict(code, f"{kind} '{face.name}'", finding, limit, band, lines, hint))
        if face.stock_mm > 0.0:
            rows.append(_stock_verdict(face, finding, limit, band, lines))
    return rows


def _stock_verdict(face: Face, finding: WallFinding, limit: Limit, band_mm: float, lines: Centrelines) -> Verdict:
    outcome = judge_length(finding.wall_mm, limit.value, band_mm)
    branch = lines.branch_of(finding.sample).id
    return Verdict(
        "wall-stock",
        outcome,
        f"The wall from {branch} to face '{face.name}' is {finding.wall_mm + face.stock_mm:.2f} mm as printed and "
        f"{finding.wall_mm:.2f} mm after {face.stock_mm:.2f} mm of stock is removed; it must hold {limit.words}.",
        value=finding.wall_mm,
        unit="mm",
        limit=limit.value,
        band=band_mm,
        source=limit.source,
        branch_ids=(branch,),
        sheet_mm=lines.sheet_of(finding.sample),
        xyz_mm=finding.xyz_mm,
        hint="" if outcome is Outcome.PASS else f"Keep the channels farther from the finished face {face.name}.",
    )


def check_holes(subject: CheckSubject, lines: Centrelines, wall: ChannelWall | None) -> list[Verdict]:
    """Returns one `wall-hole` row per hole."""
    rows, profile = [], subject.profile
    everything = np.ones(len(lines.branch), dtype=bool)
    within = within_finished(subject, wall)
    for hole in subject.blank.holes:
        limit = worse_limit(hole.wall_mm, f"wall of hole {hole.id}", profile.wall_mm.value, profile.wall_mm.source)
        finding = measure_wall(HoleObstacle(hole), lines, wall, everything, _same_everywhere(limit), within)
        if finding is not None:
            hint = f"Move the hole {hole.id} or the branch, or lower the bore there."
            rows.append(
                _wall_verdict("wall-hole", f"hole {hole.id}", finding, limit, wall_band_mm(profile), lines, hint)
            )
    return rows
