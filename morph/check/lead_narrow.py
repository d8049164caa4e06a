"""Leads much narrower than the port they serve: the whole flow of a circuit passes through each of them.

A channel resists as the fourth power of its bore, so a lead at 0.8 of its port's bore resists 2.4
times as much per length (Hagen-Poiseuille law). The pilot of a thread and its taper are left out:
they are as narrow as the thread is.
"""

from __future__ import annotations

import numpy as np

from morph.body.cap import TAPER
from morph.body.plan import BranchKind
from morph.check.centreline import Centrelines
from morph.check.rows import place
from morph.core.verdict import COMMON_PRACTICE, Outcome, Verdict

LEAST_SHARE = 0.8
"""Narrower than this share of its port's bore a lead is a watch (common practice, no source)."""


def lead_shares(lines: Centrelines) -> list[tuple[float, int]]:
    """Returns for each lead its least bore over the bore of the widest channel at its port, and the sample there."""
    plan = lines.plan
    at_node: dict[str, float] = {}
    for branch in plan.branches:
        if branch.kind is BranchKind.CHANNEL:
            for node, bore in ((branch.start, branch.bore_mm[0]), (branch.end, branch.bore_mm[-1])):
                at_node[node] = max(at_node.get(node, 0.0), float(bore))
    finish = {exit_.lead: exit_.finish for exit_ in plan.exits}
    found = []
    for index, branch in enumerate(plan.branches):
        port_mm = at_node.get(branch.start, 0.0)
        if branch.kind is not BranchKind.LEAD or port_mm == 0.0:
            continue
        first, end = int(lines.first[index]), int(lines.first[index + 1])
        along = lines.along_mm[first:end]
        pilot_mm = finish[branch.id].straight_mm(port_mm, TAPER) if branch.id in finish else 0.0
        before = along <= along[-1] - pilot_mm
        before[0] = True
        sample = int(np.argmin(np.where(before, branch.bore_mm, np.inf)))
        found.append((float(branch.bore_mm[sample]) / port_mm, first + sample))
    return found


def check_leads(lines: Centrelines) -> list[Verdict]:
    """Returns the `lead-narrow` row for the lead that is narrowest against its port; nothing without leads."""
    shares = sorted(lead_shares(lines))
    if not shares:
        return []
    share, sample = shares[0]
    narrow = [lines.branch_of(at).id for value, at in shares if value < LEAST_SHARE]
    lead = lines.branch_of(sample)
    text = f"The narrowest lead, {lead.id}, is {share:.2f} of its port's bore ({lines.bore_mm[sample]:.2f} mm)"
    text += (
        f"; {len(narrow)} of {len(shares)} leads {'is' if len(narrow) == 1 else 'are'} below {LEAST_SHARE:.2f}."
        if narrow
        else "."
    )
    return [
        Verdict(
            "lead-narrow",
            Outcome.WATCH if narrow else Outcome.PASS,
            text,
            value=share,
            unit="ratio",
            limit=LEAST_SHARE,
            source=COMMON_PRACTICE,
            branch_ids=tuple(narrow) or (lead.id,),
            xyz_mm=place(lines.xyz_mm[sample]),
            hint="Give the leads more room ([blank] margin_mm or thickness_mm, port_faces), or give the port an "
            "exit_mm where there is room; the notice lead-thinned says what limits it."
            if narrow
            else "",
        )
    ]
