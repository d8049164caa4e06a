"""The rows about walls between channels, as the verdict table shows them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.room import wall_band_mm
from morph.check.centreline import Centrelines, Place
from morph.check.rows import Limit, judge_length, name_list
from morph.check.subject import CheckSubject
from morph.core.verdict import Outcome, Verdict

SEARCH_RATIO = 2.0
"""Walls up to this many limits are looked for; wider ones are reported as wider."""


@dataclass(frozen=True, slots=True)
class BetweenFinding:
    """The thinnest wall between two branches (or two runs of one), or rib.

    Args:
        branch_ids: the two branches. samples: one on each.
        wall_mm: the smaller of both routes; centreline_mm, mesh_mm: each (inf where not measured).
        xyz_mm: the middle of the metal.
        rib: not a wall by the rule, only the metal of a short run beside a junction.
        places: samples of the same pair that are nearly as near.
    """

    branch_ids: tuple[str, str]
    samples: tuple[int, int]
    wall_mm: float
    centreline_mm: float
    mesh_mm: float
    xyz_mm: Place
    rib: bool
    places: tuple[tuple[int, int], ...] = ()


def merge_row(
    subject: CheckSubject, ids: tuple[str, str], wall_mm: float, xyz_mm: Place, sheet_mm: tuple[float, float] | None
) -> Verdict:
    """Returns the failing `branches-merge` row of the branches `ids`, `wall_mm` of metal between (< 0: overlap)."""
    process, band_mm = subject.profile.wall_mm, wall_band_mm(subject.profile)
    how = f"overlap by {-wall_mm:.2f} mm" if wall_mm <= 0.0 else f"keep only {wall_mm:.2f} mm of metal"
    pair = f"{ids[0]} and {ids[1]}" if ids[0] != ids[1] else f"Two runs of {ids[0]}"
    return Verdict(
        "branches-merge",
        Outcome.FAIL,
        f"{pair} {how} although the layout keeps them apart; the bores could not be lowered further. "
        f"A wall prints from {process.value:.2f} mm on, after a band of {band_mm:.2f} mm.",
        value=wall_mm,
        unit="mm",
        limit=process.value,
        band=band_mm,
        source=f"process profile wall_mm: {process.source}",
        branch_ids=ids if ids[0] != ids[1] else ids[:1],
        sheet_mm=sheet_mm,
        xyz_mm=xyz_mm,
        hint="Lower bore_scale, enlarge size_mm, or set level = keep-area with a smaller area_ratio.",
    )


def between_row(item: BetweenFinding, n_thin: int, limit: Limit, band_mm: float, lines: Centrelines) -> Verdict:
    """Returns the `wall-between` row of one finding; `n_thin` pairs in all are too near each other."""
    outcome = judge_length(item.wall_mm, limit.value, band_mm)
    a, b = item.branch_ids
    pair = f"between two runs of {a}" if a == b else f"between {a} and {b}"
    mesh = (
        f"straight across on the written mesh {item.mesh_mm:.2f} mm"
        if np.isfinite(item.mesh_mm)
        else "not measured on the mesh"
    )
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


def wide_row(limit: Limit, band_mm: float) -> Verdict:
    """Returns the passing `wall-between` row for when nothing lies within SEARCH_RATIO limits."""
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


def rib_row(side: list[BetweenFinding], limit: Limit, subject: CheckSubject, lines: Centrelines) -> Verdict:
    """Returns the row of the ribs, thinnest first: fail when one does not print, watch below the service wall."""
    worst, process, band_mm = side[0], subject.profile.wall_mm, wall_band_mm(subject.profile)
    prints = judge_length(worst.wall_mm, process.value, band_mm) is not Outcome.FAIL
    pairs = name_list([f"{a} and {b}" if a != b else a for a, b in (item.branch_ids for item in side)])
    return Verdict(
        "thin-rib",
        Outcome.WATCH if prints else Outcome.FAIL,
        f"Beside a junction the metal between {pairs} runs down to {worst.wall_mm:.2f} mm: a rib with the same coolant "
        f"on both sides, too short for a wall. It prints from {process.value:.2f} mm on; a wall must hold "
        f"{limit.value:.2f} mm; both after a band of {band_mm:.2f} mm.",
        value=worst.wall_mm,
        unit="mm",
        limit=limit.value if prints else process.value,
        band=band_mm,
        source=limit.source if prints else f"process profile wall_mm: {process.source}",
        branch_ids=tuple(dict.fromkeys(name for item in side for name in item.branch_ids)),
        sheet_mm=lines.sheet_of(worst.samples[0]) or lines.sheet_of(worst.samples[1]),
        xyz_mm=worst.xyz_mm,
        hint="Let the branches part at a wider angle, or accept the rib." if prints else "Lower the bores there.",
    )
