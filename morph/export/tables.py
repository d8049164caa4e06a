"""The text files of a build: the channel graph, the ports and the verdicts.

Every function returns bytes and reads nothing but records. A text cell of a table that a
spreadsheet would run as a formula gets an apostrophe in front.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence

import numpy as np

from morph.body.blank import Blank
from morph.body.exit_wall import least_wall_around, straight_run_mm
from morph.body.finish import ThreadHole
from morph.body.plan import ChannelPlan, Exit, PlanBranch
from morph.core.arrays import Floats
from morph.core.verdict import Notice, Verdict, sort_verdicts
from morph.export.numbers import json_bytes, rounded
from morph.flow.result import FlowResult
from morph.flow.tables import FLOW_COLUMNS, flow_rows, graph_flow
from morph.settings.job import FaceSealEnd

__all__ = ["flow_csv", "graph_json", "json_bytes", "ports_csv", "verdicts_csv"]

Cell = str | float | int | None

VERDICT_COLUMNS = (
    "code",
    "verdict",
    "value",
    "unit",
    "limit",
    "limit_is",
    "band",
    "source",
    "branch_ids",
    "sheet_mm",
    "xyz_mm",
    "hint",
    "text",
)
PORT_COLUMNS = (
    "port",
    "role",
    "node",
    "lead",
    "face",
    "exit_x_mm",
    "exit_y_mm",
    "exit_z_mm",
    "leave_x",
    "leave_y",
    "leave_z",
    "end",
    "designation",
    "bore_mm",
    "drill_mm",
    "drill_depth_mm",
    "drill_stock_mm",
    "major_mm",
    "minor_mm",
    "thread_depth_mm",
    "run_out_mm",
    "land_mm",
    "groove_inner_mm",
    "groove_outer_mm",
    "groove_depth_mm",
    "stock_mm",
    "wall_around_mm",
    "wall_around_to",
)
FORMULA_STARTS = ("=", "@", "\t", "\r")
CALL_SIGNS = ("(", "|", "!")
"""What a text that starts with a sign needs before a spreadsheet can run it; a face called -x stays as it is."""


def _cell(value: Cell) -> str:
    if value is None:
        return ""
    if isinstance(value, str):
        runs = value.startswith(FORMULA_STARTS)
        runs |= value.startswith(("+", "-")) and any(sign in value for sign in CALL_SIGNS)
        return "'" + value if runs else value
    return repr(value)


def _csv_bytes(columns: Sequence[str], rows: Iterable[Sequence[Cell]]) -> bytes:
    stream = io.StringIO(newline="")
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows([[_cell(value) for value in row] for row in rows])
    return stream.getvalue().encode("utf-8")


def _bore_summary(branch: PlanBranch) -> dict[str, float]:
    """Returns the least, the mean along the length (trapezoid rule) and the largest bore in mm."""
    step = np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1)
    middle = 0.5 * (branch.bore_mm[1:] + branch.bore_mm[:-1])
    total = float(step.sum())
    mean = float((middle * step).sum() / total) if total > 0.0 else float(branch.bore_mm.mean())
    return {"min": float(branch.bore_mm.min()), "mean": mean, "max": float(branch.bore_mm.max())}


def graph_json(plan: ChannelPlan, flow: FlowResult | None = None) -> bytes:
    """Returns graph.json: every node and branch of `plan`, leads included, with its bore along it.

    Lengths in mm with 6 decimals. `sheet_mm` is null for what does not lie on the sheet. With a flow there is a
    block `flow`: the coolant, total pressure of the nodes, and flow, drop and equivalent pipe of the branches.
    """
    nodes = [
        {"id": n.id, "kind": n.kind, "port": n.port, "sheet_mm": n.sheet_mm, "xyz_mm": n.xyz_mm} for n in plan.nodes
    ]
    branches = [
        {
            "id": b.id,
            "kind": b.kind,
            "from": b.start,
            "to": b.end,
            "length_mm": b.length_mm,
            "bore_mm": _bore_summary(b),
            "sheet_mm": b.sheet_mm,
            "xyz_mm": b.xyz_mm,
            "bore_along_mm": b.bore_mm,
        }
        for b in plan.branches
    ]
    added = {} if flow is None else {"flow": graph_flow(flow)}
    return json_bytes({"nodes": nodes, "branches": branches, **added})


def flow_csv(flow: FlowResult) -> bytes:
    """Returns flow.csv: one row per branch and lead, flow positive from its start to its end."""
    return _csv_bytes(FLOW_COLUMNS, flow_rows(flow))


def ports_csv(plan: ChannelPlan, blank: Blank) -> bytes:
    """Returns ports.csv: where each port comes out, how its end is made and the metal around it.

    `leave` points out of the metal. `bore_mm` is the bore printed at the exit: the channel's own, or the pilot
    of a thread. A plain end is used as printed; `drill_mm` is the bore that a drill may follow there and
    `drill_depth_mm` how far the lead stays straight behind the finished face. For a thread they are the tapping
    drill and its depth (`thread_depth_mm` plus `run_out_mm`), and `drill_stock_mm` what it takes per side at least.
    A seal groove is cut later and not drilled. `land_mm` is the circle of the face that stays flat.
    `wall_around_mm` is the least metal between the rim of the opening (from the major diameter over the drill's
    depth; from the groove) and the next face, hole or exit, named in `wall_around_to`. Places and depths are from
    the finished face; `stock_mm` lies on it.
    """
    lead = {branch.id: branch for branch in plan.branches}
    rows: list[list[Cell]] = []
    for exit_ in plan.exits:
        wall_mm, neighbour = least_wall_around(exit_, plan.exits, blank)
        straight_mm = straight_run_mm(lead[exit_.lead], exit_)
        place = [rounded(float(v), True) for v in exit_.xyz_mm]
        rows.append(
            [
                exit_.port,
                exit_.role.value,
                exit_.node,
                exit_.lead,
                exit_.face,
                *place,
                *(rounded(float(v)) for v in exit_.leave),
                *_end_cells(exit_, straight_mm),
                rounded(blank.face(exit_.face).stock_mm, True),
                rounded(wall_mm, True),
                neighbour,
            ]
        )
    return _csv_bytes(PORT_COLUMNS, rows)


def _end_cells(exit_: Exit, straight_mm: float) -> list[Cell]:
    """Returns the cells from `end` to `groove_depth_mm`."""
    bore, land = rounded(exit_.bore_mm, True), rounded(exit_.finish.land_mm, True)
    detail = exit_.finish.detail
    if isinstance(detail, ThreadHole):
        thread = detail.thread
        numbers = [
            exit_.bore_mm,
            thread.drill_mm,
            detail.drill_depth_mm,
            detail.drill_stock_mm,
            thread.major_mm,
            thread.minor_mm,
            detail.thread_depth_mm,
            detail.run_out_mm,
        ]
        return ["thread", thread.designation, *(rounded(v, True) for v in numbers), land, None, None, None]
    if isinstance(detail, FaceSealEnd):
        groove = [rounded(v, True) for v in (detail.groove_inner_mm, detail.groove_outer_mm, detail.groove_depth_mm)]
        return ["face-seal", None, bore, *[None] * 7, land, *groove]
    return ["plain", None, bore, bore, rounded(straight_mm, True), *[None] * 9]


def _place_text(place: Floats | tuple[float, ...] | None) -> str | None:
    return None if place is None else " ".join(repr(rounded(float(v), True)) for v in place)


def _number(value: float | None, unit: str) -> float | None:
    return None if value is None else rounded(float(value), unit == "mm")


def verdicts_csv(verdicts: Sequence[Verdict], notices: Sequence[Notice]) -> bytes:
    """Returns verdicts.csv: the verdicts in headline order, then the notices as rows of verdict "warning".

    `branch_ids` and the places hold several values in one cell, parted by spaces.
    """
    rows: list[list[Cell]] = []
    for v in sort_verdicts(verdicts):
        value, limit, band = _number(v.value, v.unit), _number(v.limit, v.unit), _number(v.band, v.unit)
        places = [_place_text(v.sheet_mm), _place_text(v.xyz_mm)]
        limits: list[Cell] = [limit, v.limit_is if v.limit is not None else None, band]
        rows.append(
            [v.code, v.outcome.value, value, v.unit, *limits, v.source, " ".join(v.branch_ids), *places, v.hint, v.text]
        )
    for n in notices:
        blank_cells: list[Cell] = [None] * 6
        rows.append(
            [n.code, "warning", *blank_cells, " ".join(n.branch_ids), _place_text(n.sheet_mm), None, None, n.text]
        )
    return _csv_bytes(VERDICT_COLUMNS, rows)
