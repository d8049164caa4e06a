"""The flow block of summary.json: totals with their band, and every branch."""

from __future__ import annotations

import dataclasses
from typing import Any

from morph.flow.drive import GivenDrop, GivenFlow
from morph.flow.result import FlowResult

Block = dict[str, Any]


def flow_block(flow: FlowResult) -> Block:
    """Returns the block of a solved network; flow is positive from the start of a branch to its end."""
    return {
        "fluid": dataclasses.asdict(flow.fluid),
        "driven_by": driven_by(flow),
        "reverse": flow.reverse,
        "drop_bar": max((supply.drop_bar for supply in flow.supplies), default=0.0),
        "flow_l_min": sum(supply.flow_l_min for supply in flow.supplies),
        "supplies": [
            {
                "flow_l_min": supply.flow_l_min,
                "drop_bar": supply.drop_bar,
                "insert_bar": supply.drop_bar - supply.hose_bar,
                "hose_bar": supply.hose_bar,
                "bore_band_mm": band.bore_mm,
                "drop_at_flow_bar": band.drop_at_flow_bar,
                "flow_at_drop_l_min": band.flow_at_drop_l_min,
            }
            for supply, band in zip(flow.supplies, flow.bands, strict=True)
        ],
        "velocity_mean_m_s": flow.velocity_mean_m_s,
        "velocity_max_over_min": flow.velocity_max_over_min,
        "velocity_p95_over_p5": flow.velocity_p95_over_p5,
        "dead_water": [dataclasses.asdict(one) for one in flow.dead_water],
        "static_least_bar_absolute": flow.static_least_bar,
        "static_least_in": flow.static_least_in,
        "nodes": [{"id": name, "pressure_above_return_bar": bar} for name, bar in flow.node_bar],
        "branches": [dataclasses.asdict(branch) for branch in flow.branches],
    }


def driven_by(flow: FlowResult) -> str:
    """Returns what moves the coolant, as the job's key for it."""
    if isinstance(flow.drive, GivenFlow):
        return "flow_l_min"
    return "drop_bar" if isinstance(flow.drive, GivenDrop) else "pump"
