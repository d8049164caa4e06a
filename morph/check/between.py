"""Walls between channels: every pair of places that lie near each other but far apart through the channels.

Which pairs bound a wall is asked of body/neighbour.py, the same rule the bores were thinned by; the
rest belongs to a junction, whose crotch tapers to nothing. There a pair may still run side by side
across a thin rib: following the channels towards each other closes its gap by 2 sin(a / 2) per mm
where they part at angle a, so below 3 degrees it is a rib and named as a watch. Centrelines find
the pairs, the tightest are then measured on the written mesh, triangle against triangle, because
roofs and fillets thin walls.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.neighbour import (
    Network,
    Pairs,
    Strand,
    count_as_wall,
    keep_apart_mm,
    make_network,
    near_pairs,
    polyline_arc_mm,
)
from morph.body.room import wall_band_mm
from morph.body.section import reach_mm
from morph.check.centreline import Centrelines, Place, measure_ways
from morph.check.channel_wall import ChannelWall, sub_mesh
from morph.check.rows import MEASURE_MM, MOST_NAMED, Limit, judge_length, name_list, place, worse_limit
from morph.check.subject import CheckSubject
from morph.core.arrays import Bools, Floats, Ints, unit_rows
from morph.core.verdict import Outcome, Verdict
from morph.geometry.gap import Gap, measure_gap
from morph.geometry.tree import closest_points, make_tree

RIB_CLOSES = 2.0 * np.sin(np.radians(1.5))
"""Two runs that part at less than 3 degrees enclose a rib; wider, the crotch of a junction (own choice)."""

CONFIRMED = 6
"""This many of the tightest pairs of branches are measured on the written mesh."""

PATCH_BORES = 0.4
"""The mesh is searched this many bores around the points where the walls face each other."""

SEARCH_RATIO = 2.0
"""Walls up to this many limits are looked for; wider ones are reported as wider."""


@dataclass(frozen=True, slots=True)
class BetweenFinding:
    """The thinnest wall between two branches (or two runs of one).

    Args:
        branch_ids: the two branches. samples: one on each.
        wall_mm: the smaller of both routes; centreline_mm, mesh_mm: each (inf where not measured).
        xyz_mm: the middle of the metal.
        rib: not a wall by the rule, only the thin metal beside a junction.
    """

    branch_ids: tuple[str, str]
    samples: tuple[int, int]
    wall_mm: float
    centreline_mm: float
    mesh_mm: float
    xyz_mm: Place
    rib: bool


def _network(lines: Centrelines) -> Network:
    """Returns the centrelines as body/neighbour.py sees them; samples keep their numbers."""
    number = {node.id: index for index, node in enumerate(lines.plan.nodes)}
    strands = [
        Strand(b.id, number[b.start], number[b.end], b.xyz_mm, polyline_arc_mm(b.xyz_mm), b.bore_mm)
        for b in lines.plan.branches
    ]
    return make_network(strands, len(lines.plan.nodes), lines.plan.section)


def _ribs(lines: Centrelines, pairs: Pairs, gap_mm: Floats) -> Bools:
    """Returns which pairs (k,) face each other across a rib: clear of the crotch, hardly closing along the way."""
    way = measure_ways(lines, pairs.i, pairs.j)
    offset = lines.xyz_mm[pairs.j] - lines.xyz_mm[pairs.i]
    distance = np.linalg.norm(offset, axis=1)
    toward = offset / np.where(distance > 0.0, distance, 1.0)[:, None]
    closes = np.einsum("ij,ij->i", way.leave_first, toward) - np.einsum("ij,ij->i", way.leave_second, toward)
    return np.asarray((closes <= RIB_CLOSES) & (gap_mm > 0.0), dtype=np.bool_)


def find_walls(lines: Centrelines, limit_mm: float, band_mm: float) -> list[BetweenFinding]:
    """Returns for every two branches near each other their thinnest wall (and rib) by centrelines, thinnest first.

    Args:
        lines: the centrelines.
        limit_mm: the wall to hold; walls up to SEARCH_RATIO limits are found.
        band_mm: its band.
    """
    network = _network(lines)
    pairs = near_pairs(network, float(lines.bore_mm.max()) + SEARCH_RATIO * limit_mm)
    gap = pairs.distance_mm - keep_apart_mm(network, pairs, 0.0)
    counted = count_as_wall(network, pairs, limit_mm + band_mm)
    near = gap <= SEARCH_RATIO * limit_mm
    found = []
    for mask, is_rib in ((counted, False), (~counted & _ribs(lines, pairs, gap), True)):
        index = np.flatnonzero(mask & near)
        a, b = lines.branch[pairs.i[index]], lines.branch[pairs.j[index]]
        order = np.lexsort((pairs.j[index], pairs.i[index], gap[index], np.maximum(a, b), np.minimum(a, b)))
        seen: set[tuple[int, int]] = set()
        for p in index[order]:
            one, two = sorted((int(lines.branch[pairs.i[p]]), int(lines.branch[pairs.j[p]])))
            if (one, two) not in seen:
                seen.add((one, two))
                found.append(_finding(lines, int(pairs.i[p]), int(pairs.j[p]), is_rib))
    return sorted(found, key=lambda item: (item.rib, item.wall_mm, item.samples))


def _finding(lines: Centrelines, a: int, b: int, rib: bool) -> BetweenFinding:
    """Returns the finding at samples a, b, refined between the samples."""
    distance, p, q, radius_p, radius_q = _segments_gap(lines, a, b, pieces=not rib)
    wall = distance - radius_p - radius_q
    toward = (q - p) / max(distance, 1e-12)
    middle = p + toward * (radius_p + 0.5 * wall)
    ids = (lines.branch_of(a).id, lines.branch_of(b).id)
    return BetweenFinding(ids, (a, b), wall, wall, np.inf, place(middle), rib)


def _segments_gap(
    lines: Centrelines, a: int, b: int, *, pieces: bool = True
) -> tuple[float, Floats, Floats, float, float]:
    """Returns the smallest distance between the pieces of centreline next to samples a and b, the points and radii.

    Without `pieces` the samples themselves are taken.
    """
    best: tuple[float, Floats, Floats, float, float] | None = None
    for i in _pieces(lines, a) if pieces else ():
        for k in _pieces(lines, b):
            s, t = _closest_on_segments(*lines.xyz_mm[[i, i + 1, k, k + 1]])
            p = (1.0 - s) * lines.xyz_mm[i] + s * lines.xyz_mm[i + 1]
            q = (1.0 - t) * lines.xyz_mm[k] + t * lines.xyz_mm[k + 1]
            bores = np.array(
                [
                    (1.0 - s) * lines.bore_mm[i] + s * lines.bore_mm[i + 1],
                    (1.0 - t) * lines.bore_mm[k] + t * lines.bore_mm[k + 1],
                ]
            )
            radius_p, radius_q = _reaches(lines, bores, q - p)
            found = (float(np.linalg.norm(p - q)), p, q, radius_p, radius_q)
            if best is None or found[0] - radius_p - radius_q < best[0] - best[3] - best[4]:
                best = found
    if best is None:
        gap = float(np.linalg.norm(lines.xyz_mm[a] - lines.xyz_mm[b]))
        radii = _reaches(lines, lines.bore_mm[[a, b]], lines.xyz_mm[b] - lines.xyz_mm[a])
        best = (gap, lines.xyz_mm[a], lines.xyz_mm[b], *radii)
    return best


def _reaches(lines: Centrelines, bores_mm: Floats, toward: Floats) -> tuple[float, float]:
    """Returns how far channels of two bores (2,) reach towards each other along `toward (3,)` and back."""
    way = unit_rows(np.array([toward, -toward]))
    one, two = reach_mm(bores_mm, way, lines.plan.section)
    return float(one), float(two)


def _pieces(lines: Centrelines, sample: int) -> list[int]:
    """Returns the first samples of the pieces of centreline before and after `sample`."""
    index = int(lines.branch[sample])
    return [i for i in (sample - 1, sample) if lines.first[index] <= i < lines.first[index + 1] - 1]


def _closest_on_segments(a: Floats, b: Floats, c: Floats, d: Floats) -> tuple[float, float]:
    """Returns the parameters in 0..1 at which the segments a-b and c-d are nearest."""
    u, v, w = b - a, d - c, a - c
    uu, uv, vv, uw, vw = (float(x @ y) for x, y in ((u, u), (u, v), (v, v), (u, w), (v, w)))
    den = uu * vv - uv * uv
    s = min(max((uv * vw - vv * uw) / den, 0.0), 1.0) if den > 1e-12 * uu * vv else 0.0
    t = min(max((uv * s + vw) / vv, 0.0), 1.0) if vv > 0.0 else 0.0
    s = min(max((uv * t - uw) / uu, 0.0), 1.0) if uu > 0.0 else 0.0
    return s, t


def _patch(wall: ChannelWall, middle: Floats, toward: Floats, centre: Floats, reach_mm: float) -> Ints:
    """Returns the wall triangles within `reach_mm` of `centre (3,)` that lie beyond the plane through `middle (3,)`.

    The plane lies across `toward (3,)`; triangles that reach through it are left out: there the channels are not apart.
    """
    offset = wall.mesh.vertices_mm - centre
    near = np.einsum("ij,ij->i", offset, offset) <= reach_mm**2
    index = np.flatnonzero(near[wall.mesh.triangles].any(axis=1))
    side = (wall.mesh.vertices_mm[wall.mesh.triangles[index]] - middle) @ toward
    return np.asarray(index[(side > 0.0).all(axis=1)], dtype=np.int64)


def _gap_on_mesh(finding: BetweenFinding, lines: Centrelines, wall: ChannelWall) -> Gap | None:
    """Returns the smallest gap on the mesh around the finding, or the metal between the balls where it slides off.

    Beside a crotch the smallest gap of two patches lies on their rim towards the junction, wherever the rim is
    drawn: that is the crotch's taper and no wall, so the metal between the channels' largest balls is taken.
    """
    _, p, q, radius_p, radius_q = _segments_gap(lines, *finding.samples)
    toward = (q - p) / max(float(np.linalg.norm(q - p)), 1e-12)
    middle = np.array(finding.xyz_mm)
    from_p, from_q = p + radius_p * toward, q - radius_q * toward
    reach_p, reach_q = PATCH_BORES * 2.0 * radius_p, PATCH_BORES * 2.0 * radius_q
    one = _patch(wall, middle, -toward, from_p, reach_p)
    two = _patch(wall, middle, toward, from_q, reach_q)
    if len(one) and len(two):
        gap = measure_gap(sub_mesh(wall.mesh, one), make_tree(sub_mesh(wall.mesh, two)))
        inner = gap is not None and (
            float(np.linalg.norm(np.subtract(gap.from_mm, from_p))) <= 0.8 * reach_p
            and float(np.linalg.norm(np.subtract(gap.to_mm, from_q))) <= 0.8 * reach_q
        )
        if inner:
            return gap
    # Each side as far as its own largest ball in the written channel reaches, never less than planned.
    ball, _, _ = closest_points(wall.tree, np.array([p, q]))
    start, end = p + max(float(ball[0]), radius_p) * toward, q - max(float(ball[1]), radius_q) * toward
    return Gap(float((end - start) @ toward), place(start), place(end))


def confirm(finding: BetweenFinding, lines: Centrelines, wall: ChannelWall) -> BetweenFinding:
    """Returns `finding` measured on the written mesh too; the smaller wall and its place are kept."""
    if finding.centreline_mm <= 0.0:
        return finding
    gap = _gap_on_mesh(finding, lines, wall)
    if gap is None:
        return finding
    # Where both routes agree the centreline knows the place, the mesh only a facet near it.
    tighter = gap.distance_mm < finding.centreline_mm - MEASURE_MM
    return BetweenFinding(
        finding.branch_ids,
        finding.samples,
        min(gap.distance_mm, finding.centreline_mm),
        finding.centreline_mm,
        gap.distance_mm,
        gap.middle_mm if tighter else finding.xyz_mm,
        finding.rib,
    )


def check_between(subject: CheckSubject, lines: Centrelines, wall: ChannelWall | None) -> list[Verdict]:
    """Returns `branches-merge` and `wall-between` rows (each thin pair, else the thinnest) and a `thin-rib` row."""
    profile, service = subject.profile, subject.service
    limit = worse_limit(service.wall_between_mm, "wall_between_mm", profile.wall_mm.value, profile.wall_mm.source)
    band = wall_band_mm(profile)
    found = find_walls(lines, limit.value, band)
    walls = [item for item in found if not item.rib]
    if wall is not None:
        confirmed = [confirm(item, lines, wall) for item in walls[:CONFIRMED]]
        walls = confirmed + walls[CONFIRMED:]
    walls = _without_repeats(walls, lines)
    rows = _merge_rows(subject, walls, lines)
    walls = [item for item in walls if item.wall_mm > 0.0]
    thin = [item for item in walls if judge_length(item.wall_mm, limit.value, band) is Outcome.FAIL]
    for item in (thin or walls[:1])[:MOST_NAMED]:
        rows.append(_between_row(item, len(thin), limit, band, lines))
    if not walls and not rows:
        rows.append(_wide_row(limit, band))
    named = {frozenset(row.branch_ids) for row in rows if row.outcome is Outcome.FAIL}
    ribs = [item for item in found if item.rib and item.wall_mm < limit.value]
    ribs = [item for item in ribs if frozenset(item.branch_ids) not in named]
    if ribs:
        rows.append(_rib_row(ribs, limit, band, lines))
    return rows


def _without_repeats(walls: list[BetweenFinding], lines: Centrelines) -> list[BetweenFinding]:
    """Returns the findings thinnest first, without those that a neighbouring branch shows already.

    A thin place at a node is found once for every branch that ends there. Of findings within one bore the
    first is kept, unless a later one lies away from all branch ends; equal walls prefer such.
    """

    def at_end(sample: int) -> bool:
        index = int(lines.branch[sample])
        to_end = min(sample - int(lines.first[index]), int(lines.first[index + 1]) - 1 - sample)
        return to_end <= 1

    ends = {item.samples: sum(at_end(sample) for sample in item.samples) for item in walls}
    kept: list[BetweenFinding] = []
    for item in sorted(walls, key=lambda item: (round(item.wall_mm, 2), ends[item.samples], item.samples)):
        near = float(max(lines.bore_mm[list(item.samples)]))
        repeats = (
            ends[item.samples] > 0 and np.linalg.norm(np.subtract(item.xyz_mm, other.xyz_mm)) < near for other in kept
        )
        if not any(repeats):
            kept.append(item)
    return kept


def _merge_rows(subject: CheckSubject, walls: list[BetweenFinding], lines: Centrelines) -> list[Verdict]:
    """Returns one failing row per pair that runs together: no metal left, or by the plan too little to print.

    Pairs of the plan that print, only miss the service wall and are among `walls` are left to `wall-between`.
    """
    process_mm, band_mm = subject.profile.wall_mm.value, wall_band_mm(subject.profile)
    found = [
        (item.branch_ids, item.wall_mm, item.xyz_mm, lines.sheet_of(item.samples[0]))
        for item in walls
        if item.wall_mm <= 0.0
    ]
    seen = {frozenset(item[0]) for item in found}
    measured = {frozenset(item.branch_ids) for item in walls}
    for merge in subject.plan.merges:
        pair = frozenset(merge.branch_ids)
        prints = judge_length(merge.wall_mm, process_mm, band_mm) is not Outcome.FAIL
        if pair not in seen and not (prints and pair in measured):
            sheet = lines.sheet_of(int(np.argmin(((lines.xyz_mm - merge.xyz_mm) ** 2).sum(axis=1))))
            found.append((merge.branch_ids, merge.wall_mm, merge.xyz_mm, sheet))
    return [_merge_row(*item) for item in sorted(found, key=lambda item: (item[1], item[0]))]


def _merge_row(ids: tuple[str, str], wall_mm: float, xyz_mm: Place, sheet_mm: tuple[float, float] | None) -> Verdict:
    how = f"overlap by {-wall_mm:.2f} mm" if wall_mm <= 0.0 else f"keep only {wall_mm:.2f} mm of metal"
    pair = f"{ids[0]} and {ids[1]}" if ids[0] != ids[1] else f"Two runs of {ids[0]}"
    return Verdict(
        "branches-merge",
        Outcome.FAIL,
        f"{pair} {how} although the layout keeps them apart; the bores could not be lowered further.",
        value=wall_mm,
        unit="mm",
        limit=0.0,
        source="the layout: what it keeps apart must stay apart",
        branch_ids=ids if ids[0] != ids[1] else ids[:1],
        sheet_mm=sheet_mm,
        xyz_mm=xyz_mm,
        hint="Lower bore_scale, enlarge size_mm, or set level = keep-area with a smaller area_ratio.",
    )


def _between_row(item: BetweenFinding, n_thin: int, limit: Limit, band_mm: float, lines: Centrelines) -> Verdict:
    outcome = judge_length(item.wall_mm, limit.value, band_mm)
    a, b = item.branch_ids
    pair = f"between two runs of {a}" if a == b else f"between {a} and {b}"
    mesh = f"written mesh {item.mesh_mm:.2f} mm" if np.isfinite(item.mesh_mm) else "not measured on the mesh"
    others = f" {n_thin} pairs of branches are too near each other." if n_thin > 1 else ""
    return Verdict(
        "wall-between",
        outcome,
        f"The wall {pair} is {item.wall_mm:.2f} mm (centreline {item.centreline_mm:.2f} mm, {mesh}); "
        f"it must hold {limit.words} after a band of {band_mm:.2f} mm.{others}",
        value=item.wall_mm,
        unit="mm",
        limit=limit.value,
        band=band_mm,
        source=limit.source,
        branch_ids=(a,) if a == b else (a, b),
        sheet_mm=lines.sheet_of(item.samples[0]) or lines.sheet_of(item.samples[1]),
        xyz_mm=item.xyz_mm,
        hint="" if outcome is Outcome.PASS else "Lower the bores there (bore_scale, bore_range_mm) or enlarge size_mm.",
    )


def _wide_row(limit: Limit, band_mm: float) -> Verdict:
    return Verdict(
        "wall-between",
        Outcome.PASS,
        f"No two channels come within {SEARCH_RATIO * limit.value:.2f} mm of each other away from their junctions; "
        f"the wall must hold {limit.words} after a band of {band_mm:.2f} mm.",
        unit="mm",
        limit=limit.value,
        band=band_mm,
        source=limit.source,
    )


def _rib_row(ribs: list[BetweenFinding], limit: Limit, band_mm: float, lines: Centrelines) -> Verdict:
    worst = ribs[0]
    pairs = name_list([f"{a} and {b}" if a != b else a for a, b in (item.branch_ids for item in ribs)])
    return Verdict(
        "thin-rib",
        Outcome.WATCH,
        f"Beside a junction the metal between {pairs} runs down to {worst.wall_mm:.2f} mm: a rib with coolant on both "
        f"sides, below the {limit.value:.2f} mm a wall must hold.",
        value=worst.wall_mm,
        unit="mm",
        limit=limit.value,
        band=band_mm,
        source=limit.source,
        branch_ids=tuple(dict.fromkeys(name for item in ribs for name in item.branch_ids)),
        sheet_mm=lines.sheet_of(worst.samples[0]) or lines.sheet_of(worst.samples[1]),
        xyz_mm=worst.xyz_mm,
        hint="Let the branches part at a wider angle, or accept the rib.",
    )
