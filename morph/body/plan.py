"""The channel plan: every branch and lead in the part frame with its final bore and the room it has.

This is what the solid is swept from, what the checks measure against, and what graph.json holds.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np

from morph.body.finish import PLAIN, Finish
from morph.body.section import SectionRule
from morph.core.arrays import Bools, Floats, frozen_bools, frozen_floats
from morph.core.tolerance import COINCIDE_MM
from morph.core.verdict import Notice
from morph.layout.graph import NodeKind
from morph.settings.job import Role


class BranchKind(StrEnum):
    """A channel lies on the carrier; a lead runs from a port of the layout to an outer face."""

    CHANNEL = "channel"
    LEAD = "lead"


@dataclass(frozen=True, slots=True, eq=False)
class PlanNode:
    """A node in the part frame; `sheet_mm` is None for exits."""

    id: str
    kind: NodeKind
    port: str | None
    sheet_mm: Floats | None
    xyz_mm: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "xyz_mm", frozen_floats("xyz_mm", self.xyz_mm, (3,)))
        if self.sheet_mm is not None:
            object.__setattr__(self, "sheet_mm", frozen_floats("sheet_mm", self.sheet_mm, (2,)))


@dataclass(frozen=True, slots=True, eq=False)
class PlanBranch:
    """A branch or lead with its final bore.

    Args:
        id: "B3", or "L-<port>" for a lead.
        kind: channel or lead.
        start, end: node ids; a lead runs from its port node to its exit node.
        sheet_mm: (k, 2) on the sheet, None for leads.
        xyz_mm: (k, 3) centreline, at most min(bore / 4, 1 mm) between samples.
        bore_mm: (k,) final bore.
        wanted_mm: (k,) bore after scale and range, before the cap (leads: equal to bore_mm).
        room_mm: (k,) the largest bore that fits here.
        room_by: (k,) names of what limits the room: "face:<name>", "branch:<id>", "hole:<id>".
        capped: (k,) where the bore was lowered to its room.
        length_mm: arc length by quadrature (channels) or of the fine polyline (leads).
        through_flow: lies on a way from an in port to an out port.
    """

    id: str
    kind: BranchKind
    start: str
    end: str
    sheet_mm: Floats | None
    xyz_mm: Floats
    bore_mm: Floats
    wanted_mm: Floats
    room_mm: Floats
    room_by: tuple[str, ...]
    capped: Bools
    length_mm: float
    through_flow: bool

    def __post_init__(self) -> None:
        points = frozen_floats("xyz_mm", self.xyz_mm, (None, 3))
        n = len(points)
        object.__setattr__(self, "xyz_mm", points)
        for name in ("bore_mm", "wanted_mm", "room_mm"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (n,)))
        object.__setattr__(self, "capped", frozen_bools("capped", self.capped, (n,)))
        if self.sheet_mm is not None:
            object.__setattr__(self, "sheet_mm", frozen_floats("sheet_mm", self.sheet_mm, (n, 2)))
        if self.bore_mm.min() <= 0.0 or len(self.room_by) != n:
            raise ValueError(f"branch {self.id}: expected positive bores and one room name per sample")


@dataclass(frozen=True, slots=True, eq=False)
class Exit:
    """Where a port comes out.

    Args:
        port: the port's name. role: in, out or access. node: id of the exit node. lead: id of the lead.
        xyz_mm: (3,) centre of the opening on the finished face. leave: (3,) unit, out of the metal.
        face: the face's name. bore_mm: bore at the exit.
        overshoot_mm: how far the field is swept past `xyz_mm` (stock plus one bore).
        finish: what is cut there after printing.
    """

    port: str
    role: Role
    node: str
    lead: str
    xyz_mm: Floats
    leave: Floats
    face: str
    bore_mm: float
    overshoot_mm: float
    finish: Finish = PLAIN

    def __post_init__(self) -> None:
        object.__setattr__(self, "xyz_mm", frozen_floats("xyz_mm", self.xyz_mm, (3,)))
        object.__setattr__(self, "leave", frozen_floats("leave", self.leave, (3,)))


@dataclass(frozen=True, slots=True)
class Merge:
    """Two branches that run together although the layout keeps them apart: ids, place, wall left in mm."""

    branch_ids: tuple[str, str]
    xyz_mm: tuple[float, float, float]
    wall_mm: float


@dataclass(frozen=True, slots=True)
class Cap:
    """How much of a branch was capped: length in mm, plan area lost in mm^2, and what limited it."""

    branch: str
    length_mm: float
    area_mm2: float
    by: str


@dataclass(frozen=True, slots=True, eq=False)
class ChannelPlan:
    """All channels and leads of an insert.

    Args:
        nodes, branches: channels first in id order, then leads in port order.
        exits: one per port, in the job's order.
        circuits: branch ids of each connected piece, leads included.
        caps: the branches that were capped, worst area first.
        merges: pairs of branches that could not be kept apart.
        blend_mm: fillet radius at junctions.
        notices: degraded or surprising paths.
        section: how the channels are shaped.
    """

    nodes: tuple[PlanNode, ...]
    branches: tuple[PlanBranch, ...]
    exits: tuple[Exit, ...]
    circuits: tuple[tuple[str, ...], ...]
    caps: tuple[Cap, ...]
    merges: tuple[Merge, ...]
    blend_mm: float
    notices: tuple[Notice, ...] = ()
    section: SectionRule = field(default_factory=SectionRule)

    def __post_init__(self) -> None:
        place = {node.id: node.xyz_mm for node in self.nodes}
        for branch in self.branches:
            for node_id, point in ((branch.start, branch.xyz_mm[0]), (branch.end, branch.xyz_mm[-1])):
                if np.abs(place[node_id] - point).max() > COINCIDE_MM:
                    raise ValueError(f"branch {branch.id} does not end on node {node_id}")
