"""Walls between channels: every pair of places that lie near each other but far apart through the channels.

Which pairs bound a wall is asked of body/neighbour.py with the very wall the bores were thinned by; the
rest belongs to a junction, whose crotch tapers to nothing. A place is refined between samples only where
all the samples around it count, so no figure slides from a wall into a crotch. Ribs (same rule) need only print.
Islands inside small loops: island.py. Centrelines find the pairs; the tightest are then measured straight
across on the written mesh, because roofs and fillets thin walls.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.body.neighbour import (
    Pairs,
    close_pairs,
    count_as_wall,
    keep_apart_mm,
    ribs,
)
from morph.body.room import wall_band_mm
from morph.body.section import reach_mm
from morph.check.across import measure_across
from morph.check.between_rows import SEARCH_RATIO, BetweenFinding, between_row, merge_row, rib_row, wide_row
from morph.check.centreline import Centrelines, network_of
from morph.check.channel_wall import ChannelWall
from morph.check.island import IslandFinding, find_islands, island_row
from morph.check.rows import MEASURE_MM, MOST_NAMED, Limit, judge_length, place, worse_limit
from morph.check.subject import CheckSubject
from morph.core.arrays import Bools, Floats, Ints, unit_rows
from morph.core.tolerance import BUILD_MM
from morph.core.verdict import Outcome, Verdict

CONFIRMED = 6
"""This many of the tightest pairs of branches are measured on the written mesh."""

PLACES = 8
"""Each at this many places, spread over those within NEARLY_MM of its thinnest."""

NEARLY_MM = 0.25
"""Places this much thicker by the centrelines are measured on the mesh too."""

STRAIGHT_MM = 0.02
"""Two places face each other straight across when neither is nearer to a neighbour of the other by more than this."""


@dataclass(frozen=True, slots=True, eq=False)
class _Across:
    """Two places that face each other: points (3,) on the centrelines, how far each reaches, and the metal between."""

    p: Floats
    q: Floats
    reach_p: float
    reach_q: float

    @property
    def wall_mm(self) -> float:
        return float(np.linalg.norm(self.q - self.p)) - self.reach_p - self.reach_q

    @property
    def middle_mm(self) -> Floats:
        toward = (self.q - self.p) / max(float(np.linalg.norm(self.q - self.p)), 1e-12)
        return np.asarray(self.p + toward * (self.reach_p + 0.5 * self.wall_mm), dtype=np.float64)


def find_walls(lines: Centrelines, limit_mm: float, band_mm: float) -> list[BetweenFinding]:
    """Returns for every two branches near each other their thinnest wall, and their rib.

    Args:
        lines: the centrelines.
        limit_mm: the wall to hold; walls up to SEARCH_RATIO limits are found.
        band_mm: its band.
    """
    network = network_of(lines)
    pairs = close_pairs(network, SEARCH_RATIO * limit_mm + band_mm)
    gap = pairs.distance_mm - keep_apart_mm(network, pairs, 0.0)
    counted = count_as_wall(network, pairs, limit_mm + band_mm + BUILD_MM)
    known = np.sort(_key(lines, pairs.i[counted], pairs.j[counted]))
    straight = _straight(lines, pairs, gap)
    found = []
    for one in _by_branches(lines, pairs, np.flatnonzero(counted & (gap <= SEARCH_RATIO * limit_mm))):
        best = one[np.lexsort((pairs.j[one], pairs.i[one], gap[one]))][0]
        across = one[straight[one]]
        close = across[gap[across] <= gap[across].min(initial=np.inf) + NEARLY_MM]
        spread = (
            close[np.unique(np.linspace(0, len(close) - 1, PLACES).round().astype(np.int64))] if len(close) else close
        )
        places = tuple((int(pairs.i[p]), int(pairs.j[p])) for p in spread)
        item = _finding(lines, known, int(pairs.i[best]), int(pairs.j[best]), float(gap[best]))
        found.append(replace(item, places=places))
    side = np.flatnonzero(ribs(network, pairs, counted) & (gap <= SEARCH_RATIO * limit_mm))
    for one in _by_branches(lines, pairs, side):
        best = one[np.lexsort((pairs.j[one], pairs.i[one], gap[one]))][0]
        item = _finding(lines, known[:0], int(pairs.i[best]), int(pairs.j[best]), float(gap[best]))
        found.append(replace(item, rib=True))
    return sorted(found, key=lambda item: (item.rib, item.wall_mm, item.samples))


def _straight(lines: Centrelines, pairs: Pairs, gap_mm: Floats) -> Bools:
    """Returns which pairs (p,) are the nearest on the other branch for both samples: straight across, not slanted."""
    keep = np.ones(len(gap_mm), dtype=np.bool_)
    for sample, other in ((pairs.i, pairs.j), (pairs.j, pairs.i)):
        _, group = np.unique(sample * len(lines.plan.branches) + lines.branch[other], return_inverse=True)
        least = np.full(int(group.max(initial=-1)) + 1, np.inf)
        np.minimum.at(least, group, gap_mm)
        keep &= gap_mm <= least[group] + STRAIGHT_MM
    return keep


def _key(lines: Centrelines, one: Ints, two: Ints) -> Ints:
    """Returns one number (k,) for each pair of samples, in either order."""
    return np.asarray(np.minimum(one, two) * len(lines.branch) + np.maximum(one, two), dtype=np.int64)


def _by_branches(lines: Centrelines, pairs: Pairs, index: Ints) -> list[Ints]:
    """Returns the pairs `index (k,)` in groups of the same two branches, branches in order, pairs in their own."""
    a, b = lines.branch[pairs.i[index]], lines.branch[pairs.j[index]]
    group = np.minimum(a, b) * len(lines.plan.branches) + np.maximum(a, b)
    order = np.argsort(group, kind="stable")
    starts = np.flatnonzero(np.diff(group[order], prepend=-1))
    return [np.asarray(part, dtype=np.int64) for part in np.split(index[order], starts[1:])] if len(index) else []


def _finding(lines: Centrelines, known: Ints, a: int, b: int, gap_mm: float) -> BetweenFinding:
    """Returns the finding at samples a, b, refined between the samples where all around are in `known`."""
    across = _refined(lines, known, a, b)
    wall = min(across.wall_mm, gap_mm)
    ids = (lines.branch_of(a).id, lines.branch_of(b).id)
    return BetweenFinding(ids, (a, b), wall, wall, np.inf, place(across.middle_mm), False)


def _refined(lines: Centrelines, known: Ints, a: int, b: int) -> _Across:
    """Returns the two nearest places on the pieces of centreline next to samples a and b.

    Of two pieces only those count whose four pairs of samples are all in `known`, sorted keys; else the samples.
    """
    best = _at(lines, (a, a, 0.0), (b, b, 0.0))
    for i in _pieces(lines, a):
        for k in _pieces(lines, b):
            keys = _key(lines, np.array([i, i, i + 1, i + 1]), np.array([k, k + 1, k, k + 1]))
            at = np.searchsorted(known, keys)
            if (at < len(known)).all() and (known[at] == keys).all():
                s, t = _closest_on_segments(*lines.xyz_mm[[i, i + 1, k, k + 1]])
                found = _at(lines, (i, i + 1, s), (k, k + 1, t))
                best = min(best, found, key=lambda across: across.wall_mm)
    return best


def _at(lines: Centrelines, one: tuple[int, int, float], two: tuple[int, int, float]) -> _Across:
    """Returns the places a share of the way from one sample to the next, on either branch."""
    places, bores = [], []
    for first, second, share in (one, two):
        places.append((1.0 - share) * lines.xyz_mm[first] + share * lines.xyz_mm[second])
        bores.append((1.0 - share) * lines.bore_mm[first] + share * lines.bore_mm[second])
    toward = unit_rows(np.array([places[1] - places[0], places[0] - places[1]]))
    reach_p, reach_q = reach_mm(np.array(bores), toward, lines.plan.section)
    return _Across(places[0], places[1], float(reach_p), float(reach_q))


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


def confirm(finding: BetweenFinding, lines: Centrelines, wall: ChannelWall) -> BetweenFinding:
    """Returns `finding` measured straight across on the written mesh too; the smaller wall and its place are kept."""
    if finding.centreline_mm <= 0.0:
        return finding
    gaps = []
    for a, b in finding.places:
        # Straight across: from a sample to the nearest place on the other branch.
        there = min((_at(lines, (a, a, 0.0), foot) for foot in _feet(lines, a, b)), key=lambda across: across.wall_mm)
        tangents = lines.tangent[[a, b]]
        gap = measure_across(wall, np.array([there.p, there.q]), tangents, there.middle_mm)
        if gap is not None:
            gaps.append(gap)
    if not gaps:
        return finding
    gap = min(gaps, key=lambda one: one.distance_mm)
    # Where both routes agree the centreline knows the place, the mesh only a facet near it.
    tighter = gap.distance_mm < finding.centreline_mm - MEASURE_MM
    return replace(
        finding,
        wall_mm=min(gap.distance_mm, finding.centreline_mm),
        mesh_mm=gap.distance_mm,
        xyz_mm=gap.middle_mm if tighter else finding.xyz_mm,
    )


def _feet(lines: Centrelines, a: int, b: int) -> list[tuple[int, int, float]]:
    """Returns the places nearest to sample a on the pieces of centreline next to sample b."""
    feet = [(b, b, 0.0)]
    for k in _pieces(lines, b):
        along = lines.xyz_mm[k + 1] - lines.xyz_mm[k]
        share = float((lines.xyz_mm[a] - lines.xyz_mm[k]) @ along) / max(float(along @ along), 1e-12)
        feet.append((k, k + 1, min(max(share, 0.0), 1.0)))
    return feet


def check_between(subject: CheckSubject, lines: Centrelines, wall: ChannelWall | None) -> list[Verdict]:
    """Returns `branches-merge`, `wall-between`, `island` and `thin-rib` rows: one per thin pair, else the thinnest."""
    profile, service = subject.profile, subject.service
    limit = worse_limit(service.wall_between_mm, "wall_between_mm", profile.wall_mm.value, profile.wall_mm.source)
    band = wall_band_mm(profile)
    found = find_walls(lines, limit.value, band)
    walls = [item for item in found if not item.rib]
    if wall is not None:
        walls = [confirm(item, lines, wall) for item in walls[:CONFIRMED]] + walls[CONFIRMED:]
    walls = _without_repeats(walls, lines)
    islands = find_islands(network_of(lines), lines, limit.value, band)
    measured = [(item.branch_ids, item.wall_mm) for item in walls] + [(one.branch_ids, one.width_mm) for one in islands]
    thin_ids = [set(ids) for ids, mm in measured if judge_length(mm, limit.value, band) is Outcome.FAIL]
    thin_ids += [set(item.branch_ids) for item in found if item.rib]
    rows = _merge_rows(subject, walls, thin_ids, lines)
    walls = [item for item in walls if item.wall_mm > 0.0]
    thin = [item for item in walls if judge_length(item.wall_mm, limit.value, band) is Outcome.FAIL]
    rows += [between_row(item, len(thin), limit, band, lines) for item in (thin or walls[:1])[:MOST_NAMED]]
    rows += _island_rows(islands, _failed(rows), limit, band)
    side = [item for item in found if item.rib and item.wall_mm < limit.value + band]
    side = [item for item in side if not any(set(item.branch_ids) <= ids for ids in _failed(rows))]
    if side:
        rows.append(rib_row(side, limit, subject, lines))
    return rows if rows else [wide_row(limit, band)]


def _failed(rows: list[Verdict]) -> list[set[str]]:
    """Returns the branches of each row that fails."""
    return [set(row.branch_ids) for row in rows if row.outcome is Outcome.FAIL]


def _island_rows(islands: list[IslandFinding], named: list[set[str]], limit: Limit, band_mm: float) -> list[Verdict]:
    """Returns a row per thin island whose branches are not `named` yet, else one for the thinnest that is near."""
    thin = [item for item in islands if judge_length(item.width_mm, limit.value, band_mm) is Outcome.FAIL]
    new = [item for item in thin if not any(ids <= set(item.branch_ids) for ids in named)]
    near = [item for item in islands[:1] if not thin and item.width_mm < SEARCH_RATIO * limit.value]
    return [island_row(item, len(new), limit, band_mm) for item in (new or near)[:MOST_NAMED]]


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


def _merge_rows(
    subject: CheckSubject, walls: list[BetweenFinding], measured: list[set[str]], lines: Centrelines
) -> list[Verdict]:
    """Returns one failing row per pair without metal between, or that the plan alone found too near.

    Pairs of the plan among the branches of a thin wall, island or rib (`measured`) are judged there.
    """
    found = [
        (item.branch_ids, item.wall_mm, item.xyz_mm, lines.sheet_of(item.samples[0]))
        for item in walls
        if item.wall_mm <= 0.0
    ]
    for merge in subject.plan.merges:
        if not any(set(merge.branch_ids) <= ids for ids in measured):
            sheet = lines.sheet_of(int(np.argmin(((lines.xyz_mm - merge.xyz_mm) ** 2).sum(axis=1))))
            found.append((merge.branch_ids, merge.wall_mm, merge.xyz_mm, sheet))
    return [merge_row(subject, *item) for item in sorted(found, key=lambda item: (item[1], item[0]))]
