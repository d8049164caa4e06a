"""Bends: the radius of the centreline against the bore.

The radius is that of the circle through a point and the two points half a bore before and behind
it: exact on an arc of any size, and on a sharp corner of angle a it reads bore / (4 sin(a / 2)), so
a mitred elbow is judged by how sharp it is.
"""

from __future__ import annotations

import numpy as np

from morph.body.neighbour import polyline_arc_mm
from morph.body.plan import BranchKind, PlanBranch
from morph.check.centreline import Centrelines
from morph.check.rows import name_list, place
from morph.core.arrays import Floats
from morph.core.verdict import COMMON_PRACTICE, Outcome, Verdict, judge
from morph.core.words import told_apart
from morph.settings.profile import Profile

FOLDED_BORES = 0.5
"""At half a bore the inner wall of the bend has no radius left: a sharp edge in the hottest metal. Common practice."""


def bend_radii_bores(branch: PlanBranch) -> Floats:
    """Returns the centreline radius over the bore (k,) along `branch`, inf within half a bore of its ends."""
    along = polyline_arc_mm(branch.xyz_mm)
    reach = 0.5 * branch.bore_mm
    inside = (along - reach >= 0.0) & (along + reach <= along[-1])
    here = branch.xyz_mm
    before = _at(along, here, along - reach) - here
    after = _at(along, here, along + reach) - here
    cross = np.linalg.norm(np.cross(before, after), axis=1)
    product = np.linalg.norm(before, axis=1) * np.linalg.norm(after, axis=1) * np.linalg.norm(after - before, axis=1)
    straight = ~inside | (cross <= 1e-9 * reach**2)
    radius = product / (2.0 * np.where(straight, 1.0, cross))
    return np.where(straight, np.inf, radius / branch.bore_mm)


def _at(along: Floats, points: Floats, where: Floats) -> Floats:
    """Returns the points (k, 3) of a polyline at arc lengths `where (k,)`."""
    return np.column_stack([np.interp(where, along, points[:, axis]) for axis in range(3)])


def check_bends(lines: Centrelines, profile: Profile) -> list[Verdict]:
    """Returns the `bend` row: tightest centreline radius in bores, and how many branches are below the limit."""
    limit = profile.bend_radius_bores
    radii = [bend_radii_bores(branch) for branch in lines.plan.branches]
    tightest = np.array([float(r.min()) for r in radii])
    below = [b.id for b, r in zip(lines.plan.branches, tightest, strict=True) if r < limit.value]
    # A lead may turn a mitred corner: flow and powder still pass, so it is never more than a watch.
    folds = np.array([b.kind is BranchKind.CHANNEL for b in lines.plan.branches]) & (tightest < FOLDED_BORES)
    worst = int(np.argmin(np.where(folds, tightest - 1e6, tightest))) if folds.any() else int(np.argmin(tightest))
    value = float(tightest[worst])
    if not np.isfinite(value):
        return [
            Verdict(
                "bend",
                Outcome.PASS,
                "Every branch is straight.",
                unit="bores",
                limit=limit.value,
                source=limit.source,
            )
        ]
    sample = int(lines.first[worst] + np.argmin(radii[worst]))
    outcome = Outcome.FAIL if folds.any() else Outcome.WATCH if below else judge(value, limit.value, 0.0, "least")
    return [
        Verdict(
            "bend",
            outcome,
            f"The tightest bend has a centreline radius of {told_apart(value, (limit.value, FOLDED_BORES))} bores, in "
            f"{lines.branch_of(sample).id}; "
            f"{limit.value:.2f} bores are wanted, below {FOLDED_BORES:.1f} the inner wall folds. "
            f"{len(below)} of {len(radii)} branches are below{': ' + name_list(below) if below else ''}.",
            value=value,
            unit="bores",
            limit=limit.value,
            source=f"{limit.source}; fold at {FOLDED_BORES:.1f} bores: {COMMON_PRACTICE}",
            branch_ids=tuple(dict.fromkeys([lines.branch_of(sample).id, *below])),
            sheet_mm=lines.sheet_of(sample),
            xyz_mm=place(lines.xyz_mm[sample]),
            hint="" if outcome is Outcome.PASS else "Lower the bore there, or smooth the layout.",
        )
    ]
