"""The balance in the report: what it was after, before and after, and which branches their range held back."""

from __future__ import annotations

from typing import Any

import numpy as np

from morph.body.plan import ChannelPlan
from morph.flow.balance import BoundBranch, FlowBalance
from morph.flow.bore_range import ALLOWED_RANGE
from morph.flow.branch_rows import weighted_percentile
from morph.flow.result import FlowResult
from morph.settings.job import Balance

MOST_HELD = 12


def limit_words(row: BoundBranch) -> str:
    """Returns what holds a branch and what would free it, as a sentence without its end."""
    if row.limit == ALLOWED_RANGE:
        end = "upper" if row.upper else "lower"
        return f"at the {end} end of the allowed range: widen [section] bore_range_mm"
    kind, _, name = row.limit.partition(":")
    cure = {
        "face": f"the wall to face {name}: lay the channels deeper or enlarge the blank",
        "branch": f"the wall to {name}: enlarge size_mm so that they lie further apart",
        "hole": f"the wall to hole {name}: move the hole",
    }
    return f"held by {cure.get(kind, row.limit)}"


def balance_block(balance: FlowBalance, plan: ChannelPlan, after: FlowResult) -> dict[str, Any]:
    """Returns the balance for summary.json: spreads and bores before and after, and the branches held back."""
    before, found = balance.before, balance.found
    return {
        "kind": balance.kind,
        "evaluations": found.rounds,
        "spread_before": {
            "velocity_max_over_min": before.velocity_max_over_min,
            "velocity_p95_over_p5": before.velocity_p95_over_p5,
        },
        "spread_after": {
            "velocity_max_over_min": after.velocity_max_over_min,
            "velocity_p95_over_p5": after.velocity_p95_over_p5,
        },
        "held_back": [
            {"id": row.id, "end": "upper" if row.upper else "lower", "limit": row.limit, "multiplier": row.multiplier}
            for row in found.bound
        ],
        "branches": [
            {
                "id": branch.id,
                "bore_mean_before_mm": float(balance.bore_before_mm[k]),
                "bore_mean_after_mm": float(branch.bore_mm.mean()),
                "flow_before_l_min": before.branches[k].flow_l_min,
                "flow_after_l_min": after.branches[k].flow_l_min,
                "velocity_before_m_s": before.branches[k].velocity_m_s,
                "velocity_after_m_s": after.branches[k].velocity_m_s,
                "heat_share": float(balance.heat[k]),
            }
            for k, branch in enumerate(plan.branches)
        ],
    }


def balance_rows(balance: FlowBalance, plan: ChannelPlan, after: FlowResult) -> list[dict[str, str]]:
    """Returns bores, flows and velocities before and after as words, one row per branch and lead."""
    held = {row.id: limit_words(row) for row in balance.found.bound}
    rows = []
    for k, branch in enumerate(plan.branches):
        old, new = balance.before.branches[k], after.branches[k]
        rows.append(
            {
                "id": branch.id,
                "bore": f"{balance.bore_before_mm[k]:.2f} → {branch.bore_mm.mean():.2f} mm",
                "flow": f"{old.flow_l_min:+.2f} → {new.flow_l_min:+.2f} L/min",
                "velocity": f"{old.velocity_m_s:.2f} → {new.velocity_m_s:.2f} m/s",
                "held": held.get(branch.id, ""),
            }
        )
    return rows


def _spreads(balance: FlowBalance, after: FlowResult) -> tuple[str, float, float]:
    """Returns what was to be equal in words, and its spread before and after over channels with through-flow."""
    if balance.kind is Balance.EQUAL_VELOCITY:
        return "the velocities", balance.before.velocity_p95_over_p5, after.velocity_p95_over_p5
    heat = balance.heat if balance.kind is Balance.BY_HEAT else np.ones(len(balance.heat))
    network = after.network
    chosen = np.flatnonzero(network.is_channel & network.through & (heat > 0.0))
    length = network.segments.summed(network.segments.length_m)[chosen]
    found = []
    for flow in (balance.before, after):
        y = np.abs([flow.branches[k].flow_l_min for k in chosen]) / heat[chosen]
        low, high = (weighted_percentile(y, length, share) for share in (0.05, 0.95))
        found.append(high / low if low > 0.0 else float("inf"))
    return ("the flows" if balance.kind is Balance.EQUAL_FLOW else "flow over heat"), found[0], found[1]


def balance_words(balance: FlowBalance, after: FlowResult) -> str:
    """Returns what the balance was after and what came of it, as sentences."""
    before, held = balance.before, balance.found.bound
    what, old, new = _spreads(balance, after)
    ways = " in both directions alike" if balance.reversible else ""
    text = (
        f"Bores were changed for {balance.kind.value}{ways}: the 95th "
        f"over the 5th percentile of {what} went from {old:.2f} to {new:.2f} by length, that of the velocities from "
        f"{before.velocity_p95_over_p5:.2f} to {after.velocity_p95_over_p5:.2f}, the drop from "
        f"{before.supplies[0].drop_bar:.3f} to {after.supplies[0].drop_bar:.3f} bar."
    )
    if held:
        named = ", ".join(row.id for row in held[:MOST_HELD]) + (" and more" if len(held) > MOST_HELD else "")
        text += f" Their range holds back {named}, the most telling first."
    return text
