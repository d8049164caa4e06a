"""Openings found on the written insert against the exits that were declared."""

from __future__ import annotations

import numpy as np

from morph.body.blank import Blank
from morph.body.face import FaceRole
from morph.body.plan import ChannelPlan, Exit
from morph.body.section import SectionRule, section_centroid_mm
from morph.check.centreline import Centrelines
from morph.check.channel_wall import nearest_samples
from morph.check.rows import name_list, place
from morph.core.tolerance import EXIT_RIM_MM
from morph.core.verdict import Outcome, Verdict
from morph.core.words import counted
from morph.solid.result import Insert, Opening

EXIT_RIM_H = 0.4
"""On a coarse mesh the centre may be off by this share of its resolution: the rims of oblique exits on round faces lie
up to 0.12 resolutions off (own measurement)."""


ROUND = SectionRule()


def axis_distance_mm(opening: Opening, exit_: Exit, section: SectionRule = ROUND) -> float:
    """Returns how far the centre of `opening` lies from where that of `exit_` belongs, in mm.

    That is on the axis of the exit, above it by what the roof of its section lifts the centre of area; stock
    moves it along the axis.
    """
    offset = opening.centre_mm - exit_.xyz_mm - section_centroid_mm(exit_.bore_mm, exit_.leave, section)
    along = float(offset @ exit_.leave)
    off_axis = float(np.linalg.norm(offset - along * exit_.leave))
    # Along the axis it may move by the stock only; the overshoot is stock plus one bore.
    return max(off_axis, abs(along) - exit_.overshoot_mm)


def rim_tolerance_mm(h_mm: float) -> float:
    """Returns how far the centre of a found opening may lie off its exit's axis on a mesh of resolution `h_mm`."""
    return max(EXIT_RIM_MM, EXIT_RIM_H * h_mm)


def match_openings(
    openings: tuple[Opening, ...],
    exits: tuple[Exit, ...],
    within_mm: float = EXIT_RIM_MM,
    section: SectionRule = ROUND,
) -> tuple[dict[str, int], list[int]]:
    """Returns the opening (index) of each exit by port, and the openings that belong to none.

    Args:
        openings: found on the mesh.
        exits: declared.
        within_mm: an opening belongs to an exit when its centre is this near to where that of the exit belongs.
        section: how the channels are shaped.
    """
    pairs = sorted(
        (axis_distance_mm(opening, exit_, section), exit_.port, index)
        for index, opening in enumerate(openings)
        for exit_ in exits
    )
    found: dict[str, int] = {}
    used: set[int] = set()
    for distance, port, index in pairs:
        if distance <= within_mm and port not in found and index not in used:
            found[port] = index
            used.add(index)
    return found, [index for index in range(len(openings)) if index not in used]


def check_openings(
    insert: Insert, plan: ChannelPlan, blank: Blank, lines: Centrelines, h_mm: float = 0.0
) -> list[Verdict]:
    """Returns the `openings` row, and a `breaks-into-part` row per opening on a part face."""
    within = rim_tolerance_mm(h_mm)
    found, stray = match_openings(insert.openings, plan.exits, within, plan.section)
    missing = [exit_.port for exit_ in plan.exits if exit_.port not in found]
    right = not stray and not missing
    text = f"{counted(len(insert.openings), 'opening')} found on the insert, {len(plan.exits)} declared"
    if missing:
        text += f"; none at {name_list(missing)}"
    if stray:
        places = [f"({x:.1f}, {y:.1f}, {z:.1f}) mm" for x, y, z in (place(insert.openings[i].centre_mm) for i in stray)]
        text += f"; not declared: {name_list(places)}"
    first = insert.openings[stray[0]].centre_mm if stray else None
    rows = [
        Verdict(
            "openings",
            Outcome.PASS if right else Outcome.FAIL,
            f"{text}.",
            value=float(len(insert.openings)),
            unit="count",
            limit=float(len(plan.exits)),
            limit_is="equal",
            source=f"the declared exits; centre within {within:.2f} mm of where it belongs",
            xyz_mm=None if first is None else place(first),
            hint="" if right else "A channel comes out where no port is declared, or a port is closed.",
        )
    ]
    part = {face.name for face in blank.faces if face.role is FaceRole.PART}
    rows += [_break_row(opening, lines) for opening in insert.openings if opening.face in part]
    return rows


def _break_row(opening: Opening, lines: Centrelines) -> Verdict:
    sample = int(nearest_samples(lines, opening.centre_mm[None, :])[0])
    branch = lines.branch_of(sample).id
    return Verdict(
        "breaks-into-part",
        Outcome.FAIL,
        f"{branch} breaks through part face {opening.face}: a hole of {opening.diameter_mm:.2f} mm where the moulded "
        "part lies.",
        value=opening.diameter_mm,
        unit="mm",
        limit=0.0,
        limit_is="most",
        source="a part face is never opened",
        branch_ids=(branch,),
        sheet_mm=lines.sheet_of(sample),
        xyz_mm=place(opening.centre_mm),
        hint="Lay the channels deeper, or lower the bore there.",
    )
