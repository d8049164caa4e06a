"""Everything a finished build hands to the report, in one record."""

from __future__ import annotations

from dataclasses import dataclass

from morph.body.blank import Blank
from morph.body.plan import ChannelPlan
from morph.check.fields import ChannelFields
from morph.core.verdict import Notice, Verdict
from morph.flow.balance import FlowBalance
from morph.flow.gauge import Gauge
from morph.flow.result import FlowResult
from morph.geometry.mesh import Mesh
from morph.layout.density import Density
from morph.layout.graph import ChannelGraph
from morph.layout.level_report import LevelReport
from morph.layout.wide import WideRegion
from morph.settings.job import Job
from morph.solid.result import ChannelSolid, Insert
from morph.surface.wrap import WrappedGraph


@dataclass(frozen=True, slots=True, eq=False)
class BuildRecords:
    """The records of one build, stage by stage.

    Args:
        job: the settings it ran with.
        density, graph, wrapped, blank, plan, solid, insert: what each stage made.
        verdicts: what the checks say. notices: degraded or surprising paths of any stage.
        fields: figures along the channels and over their wall, for pictures; None when not measured.
        finished: the insert after its stock is machined off; None when there is no stock.
        flow: flow and pressure in every branch; None when the job does not ask for it.
        gauge: the bench test of the printed insert; None without a flow.
        balance: how the bores were changed for the flow; None when they were not.
        levels: what the layout would be at other levels; None when it was not asked.
        wide: regions of the layout wider than the largest legal bore, and what became of them.
    """

    job: Job
    density: Density
    graph: ChannelGraph
    wrapped: WrappedGraph
    blank: Blank
    plan: ChannelPlan
    solid: ChannelSolid
    insert: Insert
    verdicts: tuple[Verdict, ...]
    notices: tuple[Notice, ...] = ()
    fields: ChannelFields | None = None
    finished: Mesh | None = None
    flow: FlowResult | None = None
    balance: FlowBalance | None = None
    gauge: Gauge | None = None
    levels: LevelReport | None = None
    wide: tuple[WideRegion, ...] = ()
