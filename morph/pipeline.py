"""The recipe: calls the stages in order and owns no geometry.

Every stage is a function of records and settings; this file only hands records on, times the
stages and gathers what they say. Nothing is written until every stage has succeeded.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from morph.core.progress import SILENT, Progress
from morph.core.verdict import Notice, Outcome, Verdict, sort_verdicts, worst_outcome
from morph.settings.job import Balance, Job

if TYPE_CHECKING:
    from morph.body.blank import Blank
    from morph.body.plan import ChannelPlan
    from morph.core.arrays import Floats
    from morph.flow.balance import FlowBalance
    from morph.flow.gauge import Gauge
    from morph.flow.result import FlowResult
    from morph.geometry.mesh import Mesh
    from morph.layout.density import Density
    from morph.layout.graph import ChannelGraph
    from morph.layout.level_report import LevelReport
    from morph.layout.wide import WideRegion
    from morph.report.records import BuildRecords
    from morph.surface.wrap import WrappedGraph

STAGES = ("layout", "surface", "body", "flow", "solid", "insert", "flow-3d", "check", "export", "report")


@dataclass(frozen=True, slots=True)
class Timing:
    """Wall-clock seconds of a stage and the peak memory of the process when it ended."""

    stage: str
    seconds: float
    peak_mib: float


@dataclass(frozen=True, slots=True, eq=False)
class Result:
    """Everything a build found, and the files it would leave.

    Args:
        job: the settings it ran with.
        records: the record of every stage.
        summary: what summary.json holds.
        verdicts: sorted fail, not checked, watch, pass. notices: degraded or surprising paths.
        files: file name to content; all but timings.json are the same for the same input.
        timings: one row per stage.
    """

    job: Job
    records: BuildRecords
    summary: dict[str, Any]
    verdicts: tuple[Verdict, ...]
    notices: tuple[Notice, ...]
    files: dict[str, bytes]
    timings: tuple[Timing, ...]

    @property
    def headline(self) -> Outcome:
        """The worst outcome over all verdicts: fail, not checked, watch, pass."""
        return worst_outcome(self.verdicts)


def _peak_mib() -> float:
    try:
        import resource
    except ImportError:  # not on this platform: the figure is informative only
        return 0.0
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return float(peak) / (2**20 if sys.platform == "darwin" else 2**10)


@dataclass(slots=True)
class _Clock:
    """Times the stages and tells the progress where the build is."""

    progress: Progress
    rows: list[Timing] = field(default_factory=list)

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        self.progress.step(name, 0, 1)
        begin = time.perf_counter()
        yield
        self.rows.append(Timing(name, time.perf_counter() - begin, _peak_mib()))
        self.progress.step(name, 1, 1)


@dataclass(frozen=True, slots=True, eq=False)
class Planned:
    """Everything that is settled before a solid is made: cheap, and refused here when it cannot be."""

    density: Density
    graph: ChannelGraph
    wrapped: WrappedGraph
    blank: Blank
    plan: ChannelPlan
    flow: FlowResult | None = None
    balance: FlowBalance | None = None
    gauge: Gauge | None = None
    levels: LevelReport | None = None
    wide: tuple[WideRegion, ...] = ()


def plan_channels(job: Job, clock: _Clock) -> Planned:
    """Returns the records from the density to the channel plan and the flow through it.

    Raises:
        MorphError: an input or a request that cannot be met, with its code.
    """
    from morph.body.blank import make_blank
    from morph.body.end import require_ends
    from morph.layout.density import make_density
    from morph.layout.extract import make_graph
    from morph.layout.keep_out import require_keep_outs
    from morph.layout.level_report import make_level_report, without_repeats
    from morph.layout.wide import legal_bore_mm, settle_wide
    from morph.surface.make import make_carrier
    from morph.surface.wrap import bore_range_mm, choose_depth_mm, wrap_graph

    progress, profile = clock.progress, job.printing.profile
    require_ends(job.ports)
    with clock.stage("layout"):
        density = make_density(job.layout)
        least_mm = max(job.service.smallest_bore_mm, profile.smallest_bore_mm.value) / job.section.bore_scale
        graph = make_graph(density, job.layout, job.ports, progress, job.accepts, least_mm)
        require_keep_outs(job.keep_outs, job.ports, graph.size_mm, graph.turn_mm)
        scale, range_mm = job.section.bore_scale, bore_range_mm(job.section, job.service, profile)
        widest_mm = legal_bore_mm(range_mm, job.carrier.depth_mm, job.service) / scale
        graph, wide = settle_wide(graph, job.layout.wide, widest_mm, job.service.wall_between_mm, least_mm)
        levels = make_level_report(density, job.layout, job.ports, progress)
        graph = replace(graph, notices=without_repeats(graph.notices, levels))
    with clock.stage("surface"):
        depth_mm = choose_depth_mm(job.carrier, graph, job.section, job.service, profile)
        carrier = make_carrier(job.carrier, graph.size_mm, job.layout.seen_from, depth_mm, job.layout.seam)
        wrapped = wrap_graph(graph, carrier, depth_mm)
    with clock.stage("body"):
        up = job.printing.build_direction
        blank = make_blank(job.blank, job.holes, carrier, graph.size_mm, job.service, up, progress)
        plan = _plan(job, wrapped, blank, progress)
    return _flow(job, Planned(density, graph, wrapped, blank, plan, levels=levels, wide=wide), clock)


def _flow(job: Job, planned: Planned, clock: _Clock) -> Planned:
    """Returns `planned` with the flow through its channels, their bores balanced when the job wants that."""
    from morph.flow.balance import balance_plan
    from morph.flow.gauge import measure_gauge
    from morph.flow.heat_share import branch_heat
    from morph.flow.measure import measure_flow
    from morph.layout.density import make_density
    from morph.surface.wrap import bore_range_mm

    coolant, profile, progress = job.coolant, job.printing.profile, clock.progress
    if coolant is None:
        return planned
    with clock.stage("flow"):
        if coolant.balance is Balance.NONE:
            flow = measure_flow(planned.plan, coolant, profile, progress=progress)
            gauge = measure_gauge(planned.plan, coolant, profile, flow, progress=progress)
            return replace(planned, flow=flow, gauge=gauge)
        heat = None
        if coolant.balance is Balance.BY_HEAT:
            flux = None if coolant.flux is None else make_density(replace(job.layout, image=coolant.flux))
            heat = branch_heat(planned.plan, planned.graph.size_mm, planned.graph.turn_mm, flux)
        plan, flow, balance = balance_plan(
            planned.plan,
            coolant,
            profile,
            bore_range_mm(job.section, job.service, profile),
            heat,
            lambda bores_mm: _plan(job, planned.wrapped, planned.blank, SILENT, bores_mm),
            progress,
        )
        gauge = measure_gauge(plan, coolant, profile, flow, progress=progress)
        return replace(planned, plan=plan, flow=flow, balance=balance, gauge=gauge)


def _plan(
    job: Job, wrapped: WrappedGraph, blank: Blank, progress: Progress, bores_mm: Mapping[str, Floats] | None = None
) -> ChannelPlan:
    from morph.body.make import make_plan

    up, profile = job.printing.build_direction, job.printing.profile
    return make_plan(wrapped, blank, job.ports, job.section, job.service, profile, progress, up, bores_mm)


def make_records(job: Job, clock: _Clock) -> BuildRecords:
    """Returns the records of every stage from the density to the verdicts.

    Raises:
        MorphError: an input or a request that cannot be met, with its code.
    """
    from morph.check import CheckSubject, check_insert, measure_fields, measure_insert
    from morph.check.not_run import TEMPERATURE_NOT_RUN
    from morph.layout.keep_out import check_keep_outs
    from morph.report.records import BuildRecords
    from morph.solid.channel import make_channel_solid
    from morph.solid.cut import make_finished, make_insert
    from morph.solid.field import choose_h_mm

    planned, progress = plan_channels(job, clock), clock.progress
    blank, plan = planned.blank, planned.plan
    with clock.stage("solid"):
        solid = make_channel_solid(plan, blank, choose_h_mm(plan, job.quality), progress)
    with clock.stage("insert"):
        insert = make_insert(solid, blank, plan, progress)
        finished = make_finished(solid, blank)
    check_3d = _check_3d(job, planned, solid.trimmed, clock)
    with clock.stage("check"):
        subject = CheckSubject(
            insert=insert,
            solid=solid,
            blank=blank,
            plan=plan,
            profile=job.printing.profile,
            service=job.service,
            build_direction=job.printing.build_direction,
            graph=planned.graph,
            bore_scale=job.section.bore_scale,
            balanced=planned.balance is not None,
        )
        measured = measure_insert(subject, progress)
        kept_out = check_keep_outs(
            job.keep_outs,
            [(branch.id, branch.sheet_mm, branch.bore_mm) for branch in plan.branches if branch.sheet_mm is not None],
            planned.graph.turn_mm,
        )
        rows = check_insert(subject, progress, measured) + kept_out
        rows += _flow_rows(job, planned)
        rows += check_3d
        verdicts = sort_verdicts((*rows, TEMPERATURE_NOT_RUN))
        fields = measure_fields(subject, measured)
    return BuildRecords(
        job=job,
        density=planned.density,
        graph=planned.graph,
        wrapped=planned.wrapped,
        blank=blank,
        plan=plan,
        solid=solid,
        insert=insert,
        verdicts=verdicts,
        notices=planned.graph.notices + plan.notices,
        fields=fields,
        finished=finished,
        flow=planned.flow,
        balance=planned.balance,
        gauge=planned.gauge,
        levels=planned.levels,
        wide=planned.wide,
    )


def _flow_rows(job: Job, planned: Planned) -> tuple[Verdict, ...]:
    """Returns the rows about flow, or the one that says that it was not calculated."""
    from morph.check.flow import check_flow
    from morph.check.not_run import FLOW_NOT_RUN

    if job.coolant is None or planned.flow is None:
        return (FLOW_NOT_RUN,)
    return check_flow(planned.flow, planned.gauge, job.coolant.pressure_bar)


def _check_3d(job: Job, planned: Planned, channels: Mesh, clock: _Clock) -> tuple[Verdict, ...]:
    """Returns the rows of the three-dimensional check of the flow; none unless the job asks for it."""
    from morph.flow.lattice_check import check_flow_3d, flow_check_verdicts

    if job.coolant is None or not job.coolant.check_3d or planned.flow is None:
        return ()
    with clock.stage("flow-3d"):
        return flow_check_verdicts(check_flow_3d(channels, planned.plan, planned.flow.network, clock.progress))


def make_files(records: BuildRecords, clock: _Clock) -> tuple[dict[str, Any], dict[str, bytes]]:
    """Returns the summary and the content of every file but timings.json, by file name."""
    from morph.export.step import step_bytes
    from morph.export.stl import stl_bytes
    from morph.export.tables import flow_csv, graph_json, json_bytes, ports_csv, verdicts_csv
    from morph.export.threemf import threemf_bytes
    from morph.report.page import make_report
    from morph.report.summary import make_summary

    files: dict[str, bytes] = {}
    with clock.stage("export"):
        direction = records.job.printing.build_direction
        files["channels.stl"] = stl_bytes(records.solid.trimmed)
        files["insert.stl"] = stl_bytes(records.insert.mesh)
        objects = [("insert as printed", records.insert.mesh), ("channels", records.solid.trimmed)]
        if records.finished is not None:
            objects.insert(1, ("finished", records.finished))
        files["insert.3mf"] = threemf_bytes(tuple(objects), direction)
        files["centrelines.step"] = step_bytes(records.plan, records.job.name)
        files["graph.json"] = graph_json(records.plan, records.flow)
        if records.flow is not None:
            files["flow.csv"] = flow_csv(records.flow)
        files["ports.csv"] = ports_csv(records.plan, records.blank)
        files["verdicts.csv"] = verdicts_csv(records.verdicts, records.notices)
    with clock.stage("report"):
        summary = make_summary(records)
        files["summary.json"] = json_bytes(summary)
        files["report.html"] = make_report(records, summary).encode("utf-8")
    return summary, files


def build(job: Job | Path | str, progress: Progress = SILENT) -> Result:
    """Runs every stage on a job and returns what it found; writes nothing.

    Args:
        job: a Job, or the path of a job file.
        progress: told of every stage; may raise Cancelled.

    Raises:
        MorphError: an input or a request that cannot be met, with its code.
    """
    from morph.core.threads import single_thread
    from morph.export.tables import json_bytes
    from morph.settings.read_job import read_job

    clock = _Clock(progress)
    with single_thread():
        ready = job if isinstance(job, Job) else read_job(Path(job))
        records = make_records(ready, clock)
        summary, files = make_files(records, clock)
    rows = [{"stage": t.stage, "seconds": t.seconds, "peak_mib": t.peak_mib} for t in clock.rows]
    files["timings.json"] = json_bytes({"stages": rows})
    return Result(ready, records, summary, records.verdicts, records.notices, files, tuple(clock.rows))


def write(result: Result, out: Path, *, force: bool = False) -> list[Path]:
    """Writes the files of `result` into the folder `out`, all or none, and returns their paths.

    Raises:
        ExportError: the folder exists and is not empty (without `force`), or cannot be written.
    """
    from morph.core.files import write_folder

    return write_folder(out, result.files, force=force)
