"""Powder and through-flow by the 2-connected rule.

Loose powder leaves a branch when something can pass from one opening to another through it without
turning back: the branch lies in one 2-connected block with two openings joined outside. A dead end
reaches two openings through its own neck and is still full. Openings on the face that stands on the
build plate are closed until the insert is cut from the plate; that is before heat treatment, which
would sinter what is left. Access ports count as openings for powder, not for flow.
"""

from __future__ import annotations

from morph.body.blank import Blank
from morph.body.face import Face
from morph.body.flow_path import through_flow, through_openings
from morph.body.plan import ChannelPlan
from morph.check.centreline import Centrelines
from morph.check.rows import name_list, place
from morph.core.arrays import Floats
from morph.core.verdict import COMMON_PRACTICE, Outcome, Verdict
from morph.settings.job import Role

ON_PLATE_COSINE = 0.999
"""A face within 2.5 degrees of the build plate stands on it; a steeper one stands on supports and stays open."""


def plate_face(blank: Blank, direction: Floats) -> Face | None:
    """Returns the face of `blank` that stands on the build plate, None when the part stands on supports.

    Args:
        blank: the body.
        direction: (3,) unit, from the plate into the part.
    """
    found = []
    for face in blank.faces:
        origin = getattr(face, "origin_mm", None)
        if origin is None:
            continue
        down = -float(face.outward(origin[None, :])[0] @ direction)
        if down >= ON_PLATE_COSINE:
            found.append((float(origin @ direction) - face.stock_mm, face.name, face))
    return min(found, key=lambda item: item[:2])[2] if found else None


def _ends(plan: ChannelPlan) -> tuple[dict[str, int], list[tuple[int, int]]]:
    number = {node.id: index for index, node in enumerate(plan.nodes)}
    return number, [(number[branch.start], number[branch.end]) for branch in plan.branches]


def undrained(plan: ChannelPlan, closed_nodes: frozenset[str] = frozenset()) -> list[str]:
    """Returns the ids of branches that powder cannot leave while the exits `closed_nodes` are shut."""
    number, ends = _ends(plan)
    openings = [number[exit_.node] for exit_ in plan.exits if exit_.node not in closed_nodes]
    drains = through_openings(len(plan.nodes), ends, openings)
    return [branch.id for branch, ok in zip(plan.branches, drains, strict=True) if not ok]


def without_flow(plan: ChannelPlan) -> list[str]:
    """Returns the ids of branches that lie on no way from an in port to an out port."""
    number, ends = _ends(plan)
    inlets = [number[exit_.node] for exit_ in plan.exits if exit_.role is Role.IN]
    outlets = [number[exit_.node] for exit_ in plan.exits if exit_.role is Role.OUT]
    flows = through_flow(len(plan.nodes), ends, inlets, outlets)
    return [branch.id for branch, ok in zip(plan.branches, flows, strict=True) if not ok]


def _row(code: str, text: str, names: list[str], bad: Outcome, lines: Centrelines, hint: str) -> Verdict:
    """Returns a row that counts branches; its place is the middle of the first one named."""
    sample = None
    if names:
        index = next(i for i, branch in enumerate(lines.plan.branches) if branch.id == names[0])
        sample = int((lines.first[index] + lines.first[index + 1]) // 2)
    return Verdict(
        code,
        bad if names else Outcome.PASS,
        text,
        value=float(len(names)),
        unit="count",
        limit=0.0,
        limit_is="most",
        source=COMMON_PRACTICE,
        branch_ids=tuple(names),
        sheet_mm=None if sample is None else lines.sheet_of(sample),
        xyz_mm=None if sample is None else place(lines.xyz_mm[sample]),
        hint=hint if names else "",
    )


def check_powder(lines: Centrelines, blank: Blank, direction: Floats) -> list[Verdict]:
    """Returns the `powder` row (off the plate), the `powder-on-plate` row and the `dead-ends` row."""
    plan, n = lines.plan, len(lines.plan.branches)
    trapped = undrained(plan)
    plate = plate_face(blank, direction)
    shut = frozenset(exit_.node for exit_ in plan.exits if plate is not None and exit_.face == plate.name)
    on_plate = undrained(plan, shut)
    standing = "on supports" if plate is None else f"on face {plate.name}"
    closed = [exit_.port for exit_ in plan.exits if exit_.node in shut]
    idle = without_flow(plan)
    return [
        _row(
            "powder",
            f"After the insert is cut from the plate, powder stays in {len(trapped)} of {n} branches"
            f"{': ' + name_list(trapped) if trapped else ''}.",
            trapped,
            Outcome.FAIL,
            lines,
            "Give the branch a second opening (a [[port]] with role access), or remove it from the layout.",
        ),
        _row(
            "powder-on-plate",
            f"While it stands {standing} {len(closed)} of {len(plan.exits)} openings are closed"
            f"{' (' + name_list(closed) + ')' if closed else ''}; powder stays in {len(on_plate)} of {n} branches "
            "until it is cut off, which must be before heat treatment.",
            on_plate,
            Outcome.WATCH,
            lines,
            "Empty the channels after cutting from the plate and before heat treatment, or print another face down.",
        ),
        _row(
            "dead-ends",
            f"{len(idle)} of {n} branches have no through-flow in service{': ' + name_list(idle) if idle else ''}.",
            idle,
            Outcome.WATCH,
            lines,
            "Coolant stands still there: join the branch to another, or remove it from the layout.",
        ),
    ]
