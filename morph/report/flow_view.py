"""The flow in the report: the sheet coloured by velocity with arrows, the table of branches, and what drives it.

Velocity along a branch is its flow over the area of the section there, as the network was solved.
"""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats
from morph.flow.result import BranchFlow, FlowResult
from morph.report.along import sheet_branches
from morph.report.flow_summary import driven_by
from morph.report.records import BuildRecords
from morph.report.sheet_view import SheetScene, make_colours
from morph.report.texts import amount

VELOCITY, REYNOLDS, PRESSURE = "velocity", "reynolds", "pressure"
WORDS = {
    VELOCITY: "velocity, m/s",
    REYNOLDS: "Reynolds number",
    PRESSURE: "pressure above the return, bar",
}
DRIVES = {"flow_l_min": "a given flow", "drop_bar": "a given pressure drop", "pump": "the pump's curve"}


def along_branch(flow: FlowResult, index: int) -> dict[str, Floats]:
    """Returns velocity in m/s, Reynolds number and total pressure in bar at the samples (k,) of a branch.

    Velocity is the flow over the area of the section. Between the pressures of its nodes, the pressure falls
    in proportion to length times velocity squared over the hydraulic diameter.

    Args:
        flow: the result.
        index: of the branch in the plan.
    """
    part, network = flow.network.segments, flow.network
    span = slice(int(part.first[index]), int(part.first[index + 1]))
    still = flow.branches[index].flow_l_min == 0.0
    size = 0.0 if still else abs(float(flow.state.flow_m3_s[index]))
    speed, diameter = size / part.area_m2[span], part.diameter_m[span]
    reynolds = flow.fluid.density_kg_m3 * speed * diameter / flow.fluid.viscosity_pa_s
    cost = np.concatenate([[0.0], (part.length_m[span] * (speed**2 + 1e-12) / diameter).cumsum()])
    ends = [dict(flow.node_bar)[network.node_ids[int(k)]] or 0.0 for k in (network.start[index], network.end[index])]
    return {
        VELOCITY: _at_samples(speed),
        REYNOLDS: _at_samples(reynolds),
        PRESSURE: ends[0] + (ends[1] - ends[0]) * cost / max(float(cost[-1]), 1e-300),
    }


def _at_samples(segment: Floats) -> Floats:
    """Returns values (k,) at the samples from those (k - 1,) of the segments between them."""
    return np.concatenate([segment[:1], 0.5 * (segment[1:] + segment[:-1]), segment[-1:]])


def flow_scene(records: BuildRecords, flow: FlowResult, shown: str = VELOCITY) -> SheetScene:
    """Returns the sheet coloured by a figure of the flow, with arrows, the slowest channel with through-flow ringed.

    Args:
        records: of the build.
        flow: its flow.
        shown: VELOCITY, REYNOLDS or PRESSURE.
    """
    on_sheet = {branch.id for branch in sheet_branches(records.plan)}
    values = {
        branch.id: along_branch(flow, index)[shown]
        for index, branch in enumerate(records.plan.branches)
        if branch.id in on_sheet
    }
    return SheetScene(
        records.plan,
        records.graph.size_mm,
        records.job.layout.seen_from,
        make_colours(shown, WORDS[shown], values, _step(values)),
        {port.name: port.role for port in records.job.ports},
        _slowest(records, flow),
        "slowest channel",
        records.graph.turn_mm,
        {row.id: row.flow_l_min for row in flow.branches},
        records.job.keep_outs,
    )


def _step(values: dict[str, Floats]) -> float:
    """Returns a round step, about a tenth of the range of `values`, for the ends of a colour scale."""
    shown = np.concatenate(list(values.values()))
    wanted = max(float(np.ptp(shown)) / 10.0, 1e-6)
    return float(10.0 ** np.floor(np.log10(wanted))) * 5.0


def _slowest(records: BuildRecords, flow: FlowResult) -> tuple[str, tuple[float, float] | None] | None:
    through = [(row.velocity_m_s, k) for k, row in enumerate(flow.branches) if row.is_channel and row.through]
    if not through:
        return None
    branch = records.plan.branches[min(through)[1]]
    if branch.sheet_mm is None:
        return None
    x, y = branch.sheet_mm[len(branch.sheet_mm) // 2]
    return branch.id, (float(x), float(y))


def flow_rows(flow: FlowResult) -> list[dict[str, str]]:
    """Returns every branch and lead as words."""
    return [
        {
            "id": row.id,
            "flow": f"{row.flow_l_min:+.3f} L/min",
            "velocity": f"{row.velocity_m_s:.2f} m/s",
            "fastest": f"{row.velocity_max_m_s:.2f} m/s",
            "reynolds": f"{row.reynolds:.0f}",
            "regime": row.regime.value,
            "drop": f"{round(1000.0 * row.drop_bar, 1) + 0.0:+.1f} mbar",
            "parts": _parts(row),
        }
        for row in flow.branches
    ]


def _parts(row: BranchFlow) -> str:
    parts = (row.friction_bar, row.bends_bar, row.ends_bar, row.junctions_bar)
    return " / ".join(f"{round(1000.0 * value, 1) + 0.0:.1f}" for value in parts)


def flow_numbers(flow: FlowResult) -> list[tuple[str, str]]:
    """Returns the totals as (name, figure with unit)."""
    rows = [("Coolant", flow.fluid.name), ("Driven by", DRIVES[driven_by(flow)])]
    for number, (supply, band) in enumerate(zip(flow.supplies, flow.bands, strict=True), start=1):
        name = f"Supply {number}: " if len(flow.supplies) > 1 else ""
        low, _, high = band.drop_at_flow_bar
        least, _, most = band.flow_at_drop_l_min
        rows.append((f"{name}flow", f"{supply.flow_l_min:.2f} L/min"))
        if supply.hose_bar > 0.0:
            rows += [
                (f"{name}drop of the insert alone", f"{supply.drop_bar - supply.hose_bar:.3f} bar"),
                (f"{name}drop of the hoses", f"{supply.hose_bar:.3f} bar"),
                (f"{name}drop of both", f"{supply.drop_bar:.3f} bar"),
            ]
        else:
            rows.append((f"{name}drop, feed to return", f"{supply.drop_bar:.3f} bar"))
        rows += [
            (f"{name}drop at that flow, bores ±{band.bore_mm:g} mm", f"{low:.3f} to {high:.3f} bar"),
            (f"{name}flow at that drop, bores ±{band.bore_mm:g} mm", f"{least:.2f} to {most:.2f} L/min"),
        ]
    rows += [
        ("Mean velocity of the channels", amount(flow.velocity_mean_m_s, "m/s")),
        ("Fastest over slowest channel", f"{flow.velocity_max_over_min:.2f}"),
        ("95th over 5th percentile, by length", f"{flow.velocity_p95_over_p5:.2f}"),
        ("Least static pressure (absolute)", f"{flow.static_least_bar:.2f} bar in {flow.static_least_in}"),
    ]
    return [(words[:1].upper() + words[1:], figure) for words, figure in rows]
