"""summary.json as a dict: one block per stage, every number with its unit in its key.

The same dict serves the file, the page and ``--json``. Nothing in it differs from run to run: no
time, no path, no host. A stage that did not run is None and stands under ``not_checked``.
"""

from __future__ import annotations

import dataclasses
import platform
from enum import Enum
from importlib import metadata
from pathlib import PurePath
from typing import Any

import numpy as np

from morph.body.finish import ThreadHole
from morph.body.plan import BranchKind, Exit
from morph.core.fingerprint import fingerprint
from morph.core.units import mass_g
from morph.core.verdict import Notice, Outcome, Verdict, worst_outcome
from morph.geometry.mesh import Mesh, measure_condition, mesh_area_mm2, mesh_volume_mm3
from morph.report.balance_view import balance_block
from morph.report.flow_summary import flow_block
from morph.report.gauge_view import gauge_block
from morph.report.headline import five_figures, sorted_verdicts
from morph.report.layout_summary import layout_block
from morph.report.records import BuildRecords
from morph.settings.job import ConeSettings, FaceSealEnd
from morph.surface.cone import ConeCarrier

SCHEMA = 1
LIBRARIES = ("numpy", "scipy", "scikit-image", "shapely", "manifold3d", "numba", "plotly", "jinja2")

Block = dict[str, Any]


def _carrier(records: BuildRecords) -> Block:
    wrapped, settings = records.wrapped, records.job.carrier
    cone: Block = {}
    if isinstance(settings, ConeSettings) and isinstance(wrapped.carrier, ConeCarrier):
        lower, upper = wrapped.carrier.edge_sag_mm()
        cone = {
            "half_angle_deg": settings.half_angle_deg,
            "map": settings.map,
            "edge_sag_lower_mm": lower,
            "edge_sag_upper_mm": upper,
        }
    return {
        **dataclasses.asdict(wrapped.distortion),
        **cone,
        "kind": "cone" if cone else "cylinder",
        "metal": settings.metal,
        "true_at": settings.true_at,
        "radius_mm": settings.radius_mm,
        "depth_mm": wrapped.depth_mm,
        "seen_from": records.job.layout.seen_from,
        "seam": records.job.layout.seam,
    }


def _body(records: BuildRecords) -> Block:
    plan = records.plan
    channels = [branch for branch in plan.branches if branch.kind is BranchKind.CHANNEL]
    leads = [branch for branch in plan.branches if branch.kind is BranchKind.LEAD]
    bores = [float(v) for branch in plan.branches for v in (branch.bore_mm.min(), branch.bore_mm.max())]
    length = sum(branch.length_mm for branch in channels)
    capped = sum(cap.length_mm for cap in plan.caps)
    return {
        "circuits": len(plan.circuits),
        "branches": len(channels),
        "leads": len(leads),
        "channel_length_mm": length,
        "lead_length_mm": sum(branch.length_mm for branch in leads),
        "bore_min_mm": min(bores, default=None),
        "bore_max_mm": max(bores, default=None),
        "branches_without_through_flow": [branch.id for branch in plan.branches if not branch.through_flow],
        "capped_length_mm": capped,
        "capped_ratio": capped / length if length > 0.0 else 0.0,
        "capped_area_mm2": sum(cap.area_mm2 for cap in plan.caps),
        "caps": [dataclasses.asdict(cap) for cap in plan.caps],
        "ends": [_end(exit_) for exit_ in plan.exits],
        "merges": [
            {"branches": merge.branch_ids, "xyz_mm": merge.xyz_mm, "wall_mm": merge.wall_mm} for merge in plan.merges
        ],
    }


def _end(exit_: Exit) -> Block:
    """Returns how an exit is finished: what is printed, and what is cut later."""
    finish, detail = exit_.finish, exit_.finish.detail
    block: Block = {"port": exit_.port, "end": "plain", "bore_mm": exit_.bore_mm}
    if isinstance(detail, ThreadHole):
        thread = detail.thread
        return block | {
            "end": "thread",
            "designation": thread.designation,
            "standard": thread.standard,
            "major_mm": thread.major_mm,
            "minor_mm": thread.minor_mm,
            "drill_mm": thread.drill_mm,
            "drill_source": thread.drill_source,
            "drill_depth_mm": detail.drill_depth_mm,
            "thread_depth_mm": detail.thread_depth_mm,
            "land_mm": finish.land_mm,
        }
    if isinstance(detail, FaceSealEnd):
        return block | {"end": "face-seal", **dataclasses.asdict(detail)}
    return block


def _mesh(mesh: Mesh) -> Block:
    condition = measure_condition(mesh)
    return {
        "volume_mm3": mesh_volume_mm3(mesh),
        "area_mm2": mesh_area_mm2(mesh),
        "triangles": len(mesh.triangles),
        "genus": condition.genus if condition.closed else None,
        "watertight": condition.closed,
        "bodies": condition.bodies,
    }


def _solid(records: BuildRecords) -> Block:
    solid = records.solid
    return {
        **_mesh(solid.trimmed),
        "h_mm": solid.h_mm,
        "crossings": solid.crossings,
        "triangles_before_simplifying": solid.triangles_before,
    }


def _insert(records: BuildRecords) -> Block:
    insert = records.insert
    block = _mesh(insert.mesh)
    density = records.job.printing.profile.density_kg_m3.value
    low, high = insert.mesh.vertices_mm.min(axis=0), insert.mesh.vertices_mm.max(axis=0)
    return {
        **block,
        "mass_g": mass_g(block["volume_mm3"], density),
        "density_kg_m3": density,
        "blank_volume_mm3": insert.blank_volume_mm3,
        "finished_volume_mm3": None if records.finished is None else mesh_volume_mm3(records.finished),
        "size_mm": high - low,
        "openings": len(insert.openings),
        "openings_declared": len(records.plan.exits),
        "opening_places": [
            {"face": item.face, "xyz_mm": item.centre_mm, "diameter_mm": item.diameter_mm} for item in insert.openings
        ],
    }


def verdict_row(verdict: Verdict) -> Block:
    """Returns a verdict as its row: the keys of verdicts.csv."""
    row = dataclasses.asdict(verdict)
    row["verdict"] = row.pop("outcome")
    return row


def _notice_row(notice: Notice) -> Block:
    return dataclasses.asdict(notice)


def not_checked_rows(verdicts: tuple[Verdict, ...]) -> list[Block]:
    """Returns what was not checked, why, and what to do instead."""
    return [{"what": v.code, "reason": v.text, "hint": v.hint} for v in verdicts if v.outcome is Outcome.NOT_CHECKED]


def plain_values(value: Any) -> Any:
    """Returns records, choices, arrays and paths as mappings, text, lists and base names; numbers stay unrounded."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain_values(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, PurePath):
        return value.name
    if isinstance(value, dict):
        return {key: plain_values(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, tuple | list):
        return [plain_values(item) for item in value]
    return value


def _versions() -> Block:
    found = {"morph-channels": _version("morph-channels"), "python": platform.python_version(), "summary": SCHEMA}
    found.update({name: _version(name) for name in LIBRARIES})
    return found


def _version(name: str) -> str | None:
    try:
        return metadata.version(name)
    except metadata.PackageNotFoundError:
        return None


def _fingerprints(records: BuildRecords) -> Block:
    """Returns hashes of what went in and of what each stage made."""
    return {
        "image": {"file": records.density.source, "content": records.density.content},
        "settings": fingerprint(records.job),
        "density": fingerprint(records.density),
        "graph": fingerprint(records.graph),
        "wrapped": fingerprint(records.wrapped),
        "blank": fingerprint(records.blank),
        "plan": fingerprint(records.plan),
        "channels": fingerprint(records.solid.trimmed),
        "insert": fingerprint(records.insert.mesh),
    }


def _flow(records: BuildRecords) -> Block | None:
    if records.flow is None:
        return None
    balance = records.balance
    changed = None if balance is None else balance_block(balance, records.plan, records.flow)
    gauge = None if records.gauge is None else gauge_block(records.gauge)
    return flow_block(records.flow) | {"balance": changed, "gauge": gauge}


def make_summary(records: BuildRecords) -> dict[str, Any]:
    """Returns what summary.json holds, as plain mappings, lists, text and numbers, before rounding.

    Args:
        records: of a finished build.
    """
    return dict(plain_values(_blocks(records)))


def _blocks(records: BuildRecords) -> Block:
    verdicts = tuple(sorted_verdicts(records.verdicts))
    figures = five_figures(verdicts, records.plan)
    printing = records.job.printing
    return {
        "name": records.job.name,
        "headline": {
            "outcome": worst_outcome(verdicts),
            "counts": {outcome.value: sum(v.outcome is outcome for v in verdicts) for outcome in Outcome},
            "figures": [dataclasses.asdict(figure) for figure in figures],
        },
        "layout": layout_block(records.density, records.graph, records.levels, records.wide),
        "carrier": _carrier(records),
        "body": _body(records),
        "solid": _solid(records),
        "insert": _insert(records),
        "print": {
            "process": printing.profile.name,
            "material": printing.profile.material,
            "build_direction": printing.build_direction,
            "verdicts": [verdict_row(verdict) for verdict in verdicts],
        },
        "flow": _flow(records),
        "thermal": None,
        "not_checked": not_checked_rows(verdicts),
        "notices": [_notice_row(notice) for notice in records.notices],
        "settings": records.job,
        "versions": _versions(),
        "fingerprints": _fingerprints(records),
    }
