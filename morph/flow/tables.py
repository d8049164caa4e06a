"""The flow as plain data: a table per branch, and what graph.json holds so that others can calculate it again.

Each branch is given as one straight round pipe that drops as much at the solved flows: the length, the diameter
that resists turbulent flow as much as the bore along it does, the mean roughness, and one coefficient for bends,
ends and junctions. Where a junction gives pressure back, the pipe is shorter instead and the coefficient 0.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from morph.core.arrays import Floats
from morph.flow.friction import ROUND_FRICTION_RE, churchill
from morph.flow.pipe_law import Segments
from morph.flow.result import FlowResult

FLOW_COLUMNS = (
    "branch",
    "kind",
    "through_flow",
    "flow_l_min",
    "velocity_m_s",
    "velocity_max_m_s",
    "reynolds",
    "regime",
    "drop_bar",
    "friction_bar",
    "bends_bar",
    "ends_bar",
    "junctions_bar",
    "friction_laminar_bar",
    "friction_turbulent_bar",
)
LEAST_LENGTH_SHARE = 0.01
"""An equivalent pipe keeps at least this share of its length."""


def flow_rows(result: FlowResult) -> list[tuple[str | float | None, ...]]:
    """Returns one row per branch and lead under FLOW_COLUMNS; the last two are None outside transition."""
    rows: list[tuple[str | float | None, ...]] = []
    for row in result.branches:
        between = row.drop_between_bar or (None, None)
        rows.append(
            (
                row.id,
                "channel" if row.is_channel else "lead",
                "yes" if row.through else "no",
                row.flow_l_min,
                row.velocity_m_s,
                row.velocity_max_m_s,
                row.reynolds,
                row.regime.value,
                row.drop_bar,
                row.friction_bar,
                row.bends_bar,
                row.ends_bar,
                row.junctions_bar,
                *between,
            )
        )
    return rows


def graph_flow(result: FlowResult) -> dict[str, Any]:
    """Returns what graph.json holds about flow: the coolant, `nodes` and `branches` by id.

    A branch has `flow_l_min` (positive from `from` to `to`), `drop_bar` and `pipe`: length_mm, diameter_mm,
    roughness_mm, minor_k, of the equivalent round pipe; None for branches that stand still. A node has `total_bar`
    above the return, None where no supply reaches.
    """
    pipes = equivalent_pipes(result)
    return {
        "coolant": {
            "density_kg_m3": result.fluid.density_kg_m3,
            "viscosity_pa_s": result.fluid.viscosity_pa_s,
            "supplies": [
                {"flow_l_min": row.flow_l_min, "drop_bar": row.drop_bar - row.hose_bar} for row in result.supplies
            ],
            "ports": [
                {
                    "port": port.name,
                    "node": result.network.node_ids[port.node],
                    "role": port.role,
                    "supply": port.supply,
                }
                for port in result.network.ports
            ],
        },
        "nodes": {name: {"total_bar": bar} for name, bar in result.node_bar},
        "branches": {
            row.id: {
                "flow_l_min": row.flow_l_min,
                "velocity_m_s": row.velocity_m_s,
                "reynolds": row.reynolds,
                "drop_bar": row.drop_bar,
                "pipe": pipe,
            }
            for row, pipe in zip(result.branches, pipes, strict=True)
        },
    }


def equivalent_pipes(result: FlowResult) -> list[dict[str, float] | None]:
    """Returns for each branch the straight round pipe that drops as much at the solved flow, None where it is still."""
    part = result.network.segments
    length, diameter, roughness = _mean_pipe(part)
    flow = result.state.flow_m3_s
    head = 0.5 * result.fluid.density_kg_m3 * (flow / (0.25 * np.pi * diameter**2)) ** 2
    re = result.fluid.density_kg_m3 * np.abs(flow) / (0.25 * np.pi * diameter) / result.fluid.viscosity_pa_s
    factor = churchill(re, roughness / diameter, np.full(len(re), ROUND_FRICTION_RE)).value
    friction = factor * length / diameter * head
    pipes: list[dict[str, float] | None] = []
    for e, row in enumerate(result.branches):
        if row.flow_l_min == 0.0:
            pipes.append(None)
            continue
        drop = 1e5 * row.drop_bar * float(np.sign(flow[e]))
        share = min(max(drop / float(friction[e]), LEAST_LENGTH_SHARE), 1.0)
        pipes.append(
            {
                "length_mm": 1e3 * share * float(length[e]),
                "diameter_mm": 1e3 * float(diameter[e]),
                "roughness_mm": 1e3 * float(roughness[e]),
                "minor_k": max(drop - float(friction[e]), 0.0) / float(head[e]),
            }
        )
    return pipes


def _mean_pipe(part: Segments) -> tuple[Floats, Floats, Floats]:
    """Returns length, round diameter of the same turbulent resistance, and mean roughness (m,) of pipes, in m."""
    length = part.summed(part.length_m)
    resistance = part.summed(part.length_m / (part.diameter_m * part.area_m2**2))
    diameter = (16.0 / np.pi**2 * length / resistance) ** 0.2
    return length, diameter, part.summed(part.roughness_m * part.length_m) / length
