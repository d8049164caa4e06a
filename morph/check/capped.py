"""What capping the bores cost: how much of the centreline, and how much plan area."""

from __future__ import annotations

from morph.body.plan import BranchKind, ChannelPlan
from morph.check.rows import name_list
from morph.core.verdict import COMMON_PRACTICE, Outcome, Verdict

CLAMPED_MM2 = 0.05
"""Less plan area than this shows as 0.0 mm2."""


def check_capped(plan: ChannelPlan, clamped_mm2: float = 0.0) -> list[Verdict]:
    """Returns the `capped` row: the share of the channels' centreline whose bore was lowered to its room.

    Args:
        plan: the channels.
        clamped_mm2: plan area that the allowed bore range took before; said, so that "none" is not misread.
    """
    total_mm = sum(branch.length_mm for branch in plan.branches if branch.kind is BranchKind.CHANNEL)
    capped_mm = sum(cap.length_mm for cap in plan.caps)
    area_mm2 = sum(cap.area_mm2 for cap in plan.caps)
    share = capped_mm / total_mm if total_mm > 0.0 else 0.0
    worst = [f"{cap.branch} ({cap.area_mm2:.1f} mm2, by {cap.by})" for cap in plan.caps]
    text = "No bore had to be lowered for want of room."
    if clamped_mm2 > CLAMPED_MM2:
        text += f" The allowed bore range had lowered bores by {clamped_mm2:.1f} mm2 of plan area before; see as-drawn."
    if plan.caps:
        text = (
            f"{100.0 * share:.1f} % of the centreline ({capped_mm:.1f} mm) was lowered to the bore that fits, at "
            f"{area_mm2:.1f} mm2 of plan area: {name_list(worst)}."
        )
    return [
        Verdict(
            "capped",
            Outcome.WATCH if plan.caps else Outcome.PASS,
            text,
            value=share,
            unit="ratio",
            limit=0.0,
            limit_is="most",
            source=f"the layout's own widths; {COMMON_PRACTICE}",
            branch_ids=tuple(cap.branch for cap in plan.caps),
            hint="Lay the channels deeper, lower bore_scale, or accept less flow there." if plan.caps else "",
        )
    ]
