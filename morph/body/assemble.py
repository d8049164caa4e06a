"""The plan record from its parts: final room everywhere, exits, circuits, caps, merges, notices."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from morph.body.blank import Blank
from morph.body.cap import BORE_SLACK_MM, TAPER, find_merges, list_caps
from morph.body.finish import Finish
from morph.body.flow_path import connected_pieces, through_flow
from morph.body.lead import Lead, lead_strand
from morph.body.lead_ground import LEAST_BEND_BORES
from morph.body.neighbour import (
    Network,
    Strand,
    make_network,
    polyline_arc_mm,
    room_beside,
    wall_pairs,
)
from morph.body.plan import BranchKind, ChannelPlan, Exit, PlanBranch, PlanNode
from morph.body.room import Limits, Room, measure_room, way_out, with_neighbours
from morph.core.arrays import Bools, Floats, Ints
from morph.core.verdict import Notice
from morph.layout.graph import NodeKind
from morph.settings.job import Role
from morph.surface.wrap import WrappedGraph

THINNED_SHARE = 0.999
"""A lead below this share of its port's bore is named."""


@dataclass(frozen=True, slots=True, eq=False)
class Parts:
    """What a plan is made of.

    Args:
        wrapped: the graph at depth. blank: the body. limits: walls and bands.
        sheet_mm: fine sheet samples (k, 2) of each branch.
        wanted: channels with the bores wanted. fitted: the same with final bores. leads: in port order.
    """

    wrapped: WrappedGraph
    blank: Blank
    limits: Limits
    sheet_mm: tuple[Floats, ...]
    wanted: Network
    fitted: Network
    leads: tuple[Lead, ...]


def with_bores(network: Network) -> tuple[Strand, ...]:
    """Returns the strands of `network` with the network's bores."""
    return tuple(
        Strand(s.id, s.start, s.end, s.xyz_mm, s.arc_mm, network.bore_mm[low:high])
        for s, low, high in zip(network.strands, network.first[:-1], network.first[1:], strict=True)
    )


def assemble_plan(parts: Parts, blend_mm: float, notices: Sequence[Notice]) -> ChannelPlan:
    """Returns the plan.

    Args:
        parts: channels and leads.
        blend_mm: fillet radius at junctions.
        notices: what was noticed before.
    """
    channels = with_bores(parts.fitted)
    n_nodes = len(parts.wrapped.graph.nodes)
    strands = (*channels, *(lead_strand(lead, n_nodes + k) for k, lead in enumerate(parts.leads)))
    network = make_network(strands, n_nodes + len(parts.leads), parts.limits.section)
    wall = parts.limits.between_mm + parts.limits.band_mm
    pairs = wall_pairs(network, wall)
    rooms = _rooms(parts, network, *room_beside(network, pairs, wall))
    nodes = _nodes(parts)
    branches = _branches(parts, strands, nodes, rooms, _through(parts, strands))
    ends = [(strand.start, strand.end) for strand in strands]
    ids = [strand.id for strand in strands]
    return ChannelPlan(
        nodes=nodes,
        branches=branches,
        exits=tuple(_exit(lead, parts.blank) for lead in parts.leads),
        circuits=tuple(tuple(ids[edge] for edge in piece) for piece in connected_pieces(len(nodes), ends)),
        caps=list_caps(branches),
        merges=find_merges(network, parts.limits),
        blend_mm=blend_mm,
        notices=(*notices, *_room_notices(parts, branches), *_lead_notices(parts.leads)),
    )


def _through(parts: Parts, strands: Sequence[Strand]) -> Bools:
    n_nodes = len(parts.wrapped.graph.nodes)
    exits = {role: [n_nodes + k for k, x in enumerate(parts.leads) if x.port.settings.role is role] for role in Role}
    ends = [(strand.start, strand.end) for strand in strands]
    return through_flow(n_nodes + len(parts.leads), ends, exits[Role.IN], exits[Role.OUT])


def _rooms(parts: Parts, network: Network, beside_mm: Floats, by: Ints) -> list[Room]:
    """Returns the room of each strand from faces, holes and neighbours."""
    ids = [strand.id for strand in network.strands]
    rooms = []
    for k, strand in enumerate(network.strands):
        here = slice(network.first[k], network.first[k + 1])
        if k < len(parts.sheet_mm):
            room = measure_room(parts.blank, parts.limits, strand.xyz_mm)
        else:
            lead = parts.leads[k - len(parts.sheet_mm)]
            opening = way_out(parts.blank.face(lead.face), strand.xyz_mm)
            room = measure_room(parts.blank, parts.limits, strand.xyz_mm, lead.face, opening)
        rooms.append(with_neighbours(room, beside_mm[here], by[here], ids))
    return rooms


def _nodes(parts: Parts) -> tuple[PlanNode, ...]:
    graph = parts.wrapped.graph
    layout = [
        PlanNode(node.id, node.kind, node.port, node.sheet_mm, place)
        for node, place in zip(graph.nodes, parts.wrapped.nodes_mm, strict=True)
    ]
    exits = [
        PlanNode(exit_id(lead), NodeKind.EXIT, lead.port.settings.name, None, lead.path.xyz_mm[-1])
        for lead in parts.leads
    ]
    return (*layout, *exits)


def exit_id(lead: Lead) -> str:
    """Returns the id of the node where `lead` ends."""
    return f"X-{lead.port.settings.name}"


def _branches(
    parts: Parts, strands: Sequence[Strand], nodes: Sequence[PlanNode], rooms: Sequence[Room], through: Bools
) -> tuple[PlanBranch, ...]:
    found = []
    for k, (strand, room) in enumerate(zip(strands, rooms, strict=True)):
        channel = k < len(parts.sheet_mm)
        wanted = parts.wanted.bore_mm[parts.wanted.first[k] : parts.wanted.first[k + 1]] if channel else strand.bore_mm
        length = parts.wrapped.branches[k].length_mm if channel else float(strand.arc_mm[-1])
        found.append(
            PlanBranch(
                id=strand.id,
                kind=BranchKind.CHANNEL if channel else BranchKind.LEAD,
                start=nodes[strand.start].id,
                end=nodes[strand.end].id,
                sheet_mm=parts.sheet_mm[k] if channel else None,
                xyz_mm=strand.xyz_mm,
                bore_mm=strand.bore_mm,
                wanted_mm=wanted,
                room_mm=room.room_mm,
                room_by=room.by_names(),
                capped=strand.bore_mm < wanted - BORE_SLACK_MM,
                length_mm=length,
                through_flow=bool(through[k]),
            )
        )
    return tuple(found)


def _exit(lead: Lead, blank: Blank) -> Exit:
    bore = float(lead.path.bore_mm[-1])
    return Exit(
        port=lead.port.settings.name,
        role=lead.port.settings.role,
        node=exit_id(lead),
        lead=f"L-{lead.port.settings.name}",
        xyz_mm=lead.path.xyz_mm[-1],
        leave=lead.leave,
        face=lead.face,
        bore_mm=bore,
        overshoot_mm=blank.face(lead.face).stock_mm + bore,
        finish=lead.port.finish_on(lead.face),
    )


def _room_notices(parts: Parts, branches: Sequence[PlanBranch]) -> list[Notice]:
    """Returns one `wall-short` notice per face or hole too near for the least bore; its wall verdict fails."""
    worst: dict[str, tuple[float, str, tuple[float, float] | None, set[str]]] = {}
    for branch in branches:
        short = branch.bore_mm - branch.room_mm
        for k in np.flatnonzero(short > 1e-6):
            name = branch.room_by[k]
            if name.startswith("branch:"):
                continue
            place = None if branch.sheet_mm is None else (float(branch.sheet_mm[k, 0]), float(branch.sheet_mm[k, 1]))
            row = worst.get(name)
            ids = (row[3] if row else set()) | {branch.id}
            lack = 0.5 * float(short[k])
            worst[name] = (lack, branch.id, place, ids) if row is None or lack > row[0] else (*row[:3], ids)
    return [
        Notice(
            "wall-short",
            f"{branch} is {lack:.3f} mm too near to {name} even at the least bore of "
            f"{parts.limits.least_bore_mm:.3f} mm.",
            tuple(sorted(ids)),
            place,
        )
        for name, (lack, branch, place, ids) in sorted(worst.items())
    ]


def _before_pilot(lead: Lead, finish: Finish) -> Bools:
    """Returns the samples (k,) of a lead before its pilot and the taper to it."""
    arc = polyline_arc_mm(lead.path.xyz_mm)
    before = arc <= arc[-1] - finish.straight_mm(lead.port.bore_mm, TAPER)
    before[0] = True
    return np.asarray(before, dtype=np.bool_)


def _thinned_words(lead: Lead, before: Bools) -> str:
    """Returns what keeps a lead from its full bore: what leaves too little room, or the bends a full bore needs."""
    room = np.where(before, lead.path.room.room_mm, np.inf)
    tightest = int(np.argmin(room))
    if room[tightest] < THINNED_SHARE * lead.port.bore_mm:
        x, y, z = lead.path.xyz_mm[tightest]
        by = lead.path.room.by_names()[tightest].replace(":", " ")
        return f"{by} leaves room for {room[tightest]:.3f} mm at ({x:.2f}, {y:.2f}, {z:.2f}) mm."
    return (
        f"no way has room for the bends of the full bore ({LEAST_BEND_BORES:g} bores and a straight end); "
        f"this one has, and walls for {room[tightest]:.3f} mm."
    )


def _lead_notices(leads: Sequence[Lead]) -> list[Notice]:
    found = []
    for lead in leads:
        name = f"L-{lead.port.settings.name}"
        if lead.kink_rad > 1e-6:
            text = f"{name} starts with a kink of {np.degrees(lead.kink_rad):.0f} deg: no smooth start keeps its walls."
            found.append(Notice("lead-kinked", text, (name,)))
        finish = lead.port.finish_on(lead.face)
        if 0.0 < finish.pilot_mm < THINNED_SHARE * lead.port.bore_mm:
            text = (
                f"{name} narrows from {lead.port.bore_mm:.3f} mm at its port to {finish.pilot_mm:.3f} mm, the pilot "
                f"of its {finish.words}."
            )
            found.append(Notice("thread-narrows", text, (name,)))
        before = _before_pilot(lead, finish)
        narrowest = float(lead.path.bore_mm[before].min())
        if narrowest < THINNED_SHARE * lead.port.bore_mm:
            text = (
                f"{name} narrows from {lead.port.bore_mm:.3f} mm at its port to {narrowest:.3f} mm: "
                + _thinned_words(lead, before)
            )
            found.append(Notice("lead-thinned", text, (name,)))
    return found
