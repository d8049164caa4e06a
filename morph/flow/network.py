"""The channel plan as a flow network: one pipe per branch and lead, junctions, ports and supplies.

Node pressures are total pressures; heights do not count, because coolant fills a closed round. All in ports of
a supply hang at one pressure and all its out ports at another; access ports are plugged. Circuits stand in
parallel on one supply, unless each is given the same supply for itself.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.body.flow_path import through_flow
from morph.body.plan import BranchKind, ChannelPlan
from morph.core.arrays import Bools, Floats, Ints, frozen_bools, frozen_ints
from morph.core.errors import FlowError
from morph.flow.junction import Junctions
from morph.flow.junction_length import without_junctions
from morph.flow.pipe_law import Segments, straight_pipes
from morph.flow.pipe_shape import branch_segments, make_roughness
from morph.settings.job import CoolantSettings, Role, Supply
from morph.settings.profile import Profile


@dataclass(frozen=True, slots=True)
class FlowPort:
    """A port of the network: name, role, node index of its exit, and the number of its supply."""

    name: str
    role: Role
    node: int
    supply: int


@dataclass(frozen=True, slots=True, eq=False)
class FlowNetwork:
    """The channels of an insert as pipes.

    Args:
        branch_ids: (m) ids of branches and leads, in the order of the plan. node_ids: (n) ids of nodes.
        start, end: (m,) node indices; flow is positive from start to end.
        is_channel, through: (m,) lies on the carrier; lies on a way from an in to an out port.
        segments: the pipes.
        meetings: every node with the legs of all branches. junctions: those with two or more legs with through-flow.
        ports: in and out ports of supplied circuits, in the plan's order.
        n_supplies: number of supplies.
        hose: a hose in series with each in port, or None.
    """

    branch_ids: tuple[str, ...]
    node_ids: tuple[str, ...]
    start: Ints
    end: Ints
    is_channel: Bools
    through: Bools
    segments: Segments
    meetings: Junctions
    junctions: Junctions
    ports: tuple[FlowPort, ...]
    n_supplies: int
    hose: Segments | None = None

    def __post_init__(self) -> None:
        m, n = len(self.branch_ids), len(self.node_ids)
        for name in ("start", "end"):
            object.__setattr__(self, name, frozen_ints(name, getattr(self, name), (m,), below=n))
        for name in ("is_channel", "through"):
            object.__setattr__(self, name, frozen_bools(name, getattr(self, name), (m,)))
        if self.segments.n_pipes != m:
            raise ValueError(f"segments: expected {m} pipes, found {self.segments.n_pipes}")

    @property
    def n_branches(self) -> int:
        """Number of branches and leads."""
        return len(self.branch_ids)

    def scaled(self, factor: Floats) -> FlowNetwork:
        """Returns the network with the bores of each branch times factor (m,); see `scaled_along`."""
        return self.scaled_along(np.asarray(factor, dtype=np.float64)[self.segments.pipe])

    def scaled_along(self, ratio: Floats) -> FlowNetwork:
        """Returns the network with the bores of each segment times ratio (s,); lengths and bends stay.

        Exact for sections whose shape does not depend on the bore (all but auto while its roof fades).
        """
        part = self.segments
        area = part.area_m2 * ratio**2
        segments = replace(part, area_m2=area, diameter_m=part.diameter_m * ratio)
        return replace(
            self,
            segments=segments,
            meetings=_with_areas(self.meetings, area),
            junctions=_with_areas(self.junctions, area),
        )

    def opened(self, ports: tuple[FlowPort, ...], blocked: int | None = None) -> FlowNetwork:
        """Returns the network without hoses with other ports open, and one branch closed.

        Args:
            ports: what is open, by supplies from 0; ports left out are plugged.
            blocked: index of the branch that lets nothing through, or None.
        """
        start, end = self.start.copy(), self.end.copy()
        n = len(self.node_ids)
        names = self.node_ids
        if blocked is not None:
            start[blocked] = end[blocked] = n  # a node of its own, that nothing reaches
            names = (*names, "blocked")
        ends = list(zip(start.tolist(), end.tolist(), strict=True))
        sources = [port.node for port in ports if port.role is Role.IN]
        sinks = [port.node for port in ports if port.role is Role.OUT]
        through = through_flow(len(names), ends, sources, sinks)
        return replace(
            self,
            node_ids=names,
            start=start,
            end=end,
            through=through,
            junctions=kept_legs(self.meetings, through),
            ports=ports,
            n_supplies=max(port.supply for port in ports) + 1,
            hose=None,
        )


def make_network(
    plan: ChannelPlan, coolant: CoolantSettings, profile: Profile, bore_change_mm: float = 0.0
) -> FlowNetwork:
    """Returns the flow network of a channel plan.

    Args:
        plan: every branch and lead with its bore.
        coolant: roughness, hose, and how circuits are supplied.
        profile: roughness of the process.
        bore_change_mm: added to every printed bore, for the band of the process.

    Raises:
        FlowError: `flow-disconnected` when a piece has an in port and no out port or the other way round, or
            nothing has both; `flow-blocked` when nothing is left of a bore.
    """
    index = {node.id: k for k, node in enumerate(plan.nodes)}
    start = np.array([index[b.start] for b in plan.branches], dtype=np.int64)
    end = np.array([index[b.end] for b in plan.branches], dtype=np.int64)
    finish = {exit_.lead: exit_.finish for exit_ in plan.exits}
    roughness = make_roughness(profile, coolant.roughness_um)
    rows = [
        branch_segments(branch, plan.section, roughness, finish.get(branch.id), bore_change_mm)
        for branch in plan.branches
    ]
    segments = join_segments(rows)
    through = np.array([branch.through_flow for branch in plan.branches], dtype=np.bool_)
    ports, n_supplies = _ports(plan, index, coolant.supply)
    meetings = _meetings(plan, start, end, segments)
    return FlowNetwork(
        branch_ids=tuple(branch.id for branch in plan.branches),
        node_ids=tuple(node.id for node in plan.nodes),
        start=start,
        end=end,
        is_channel=np.array([branch.kind is BranchKind.CHANNEL for branch in plan.branches], dtype=np.bool_),
        through=through,
        segments=without_junctions(segments, meetings),
        meetings=meetings,
        junctions=kept_legs(meetings, through),
        ports=ports,
        n_supplies=n_supplies,
        hose=_hose(coolant.hose_mm),
    )


def join_segments(rows: list[Segments]) -> Segments:
    """Returns the pipes of all rows as one record, in order."""
    counts = np.concatenate([np.diff(row.first) for row in rows])
    names = [name for name in Segments.__slots__ if name != "first"]
    joined = {name: np.concatenate([getattr(row, name) for row in rows]) for name in names}
    return Segments(first=np.concatenate([[0], counts.cumsum()]), **joined)


def _hose(hose_mm: tuple[float, float] | None) -> Segments | None:
    if hose_mm is None:
        return None
    bore, length = hose_mm
    return straight_pipes(np.array([1e-3 * length]), np.array([1e-3 * bore]))


def _ports(plan: ChannelPlan, index: dict[str, int], supply: Supply) -> tuple[tuple[FlowPort, ...], int]:
    """Returns the ports that take part and the number of supplies."""
    circuit = {branch: k for k, piece in enumerate(plan.circuits) for branch in piece}
    roles: dict[int, set[Role]] = {}
    for exit_ in plan.exits:
        roles.setdefault(circuit[exit_.lead], set()).add(exit_.role)
    whole = [k for k in sorted(roles) if {Role.IN, Role.OUT} <= roles[k]]
    for k in sorted(roles):
        one_way = roles[k] & {Role.IN, Role.OUT}
        if len(one_way) == 1 or (not whole and k == min(roles)):
            names = ", ".join(exit_.port for exit_ in plan.exits if circuit[exit_.lead] == k)
            raise FlowError(
                "flow-disconnected",
                expected="an in port and an out port on every piece that coolant shall pass",
                found=f"only {' and '.join(sorted(role.value for role in roles[k]))} on the piece of {names}",
                where=f"[[port]] {names}",
                do="Join that piece to the rest in the layout, add the missing port, or make its ports access.",
            )
    number = {k: (0 if supply is Supply.SHARED else place) for place, k in enumerate(whole)}
    ports = tuple(
        FlowPort(exit_.port, exit_.role, index[exit_.node], number[circuit[exit_.lead]])
        for exit_ in plan.exits
        if exit_.role is not Role.ACCESS
    )
    return ports, max(number.values()) + 1


def _with_areas(legs: Junctions, area_m2: Floats) -> Junctions:
    return replace(legs, area_m2=np.where(legs.used, area_m2[legs.segment], legs.area_m2))


def _meetings(plan: ChannelPlan, start: Ints, end: Ints, segments: Segments) -> Junctions:
    """Returns every node with the legs of all branches."""
    legs: dict[int, list[tuple[int, float, Floats, int]]] = {}
    for e, branch in enumerate(plan.branches):
        first, last = int(segments.first[e]), int(segments.first[e + 1]) - 1
        legs.setdefault(int(start[e]), []).append((e, -1.0, _heading(branch.xyz_mm, branch.bore_mm[0]), first))
        legs.setdefault(int(end[e]), []).append((e, 1.0, _heading(branch.xyz_mm[::-1], branch.bore_mm[-1]), last))
    return pad_junctions(dict(sorted(legs.items())), segments.area_m2)


def kept_legs(meetings: Junctions, through: Bools) -> Junctions:
    """Returns the nodes where two or more branches with through-flow (m,) meet, other legs left out."""
    used = meetings.used & through[meetings.pipe]
    kept = used.sum(axis=1) > 1
    parts = {name: getattr(meetings, name)[kept] for name in Junctions.__slots__ if name != "used"}
    return Junctions(used=used[kept], **parts)


def pad_junctions(legs: dict[int, list[tuple[int, float, Floats, int]]], area_m2: Floats) -> Junctions:
    """Returns junctions from rows of (pipe, sign, direction, segment) per node, padded to the most legs."""
    n, most = len(legs), max((len(rows) for rows in legs.values()), default=2)
    pipe, segment = np.zeros((n, most), dtype=np.int64), np.zeros((n, most), dtype=np.int64)
    sign, area = np.ones((n, most)), np.ones((n, most))
    direction, used = np.zeros((n, most, 3)), np.zeros((n, most), dtype=np.bool_)
    direction[:, :, 0] = 1.0
    for j, rows in enumerate(legs.values()):
        for k, (e, way, heading, at) in enumerate(rows):
            pipe[j, k], sign[j, k], direction[j, k], segment[j, k] = e, way, heading, at
            area[j, k], used[j, k] = area_m2[at], True
    return Junctions(np.array(list(legs), dtype=np.int64), pipe, sign, direction, area, segment, used)


def _heading(points: Floats, reach_mm: float) -> Floats:
    """Returns the unit direction (3,) from the first point to the place `reach_mm` along the line, or to its end."""
    arc = np.concatenate([[0.0], np.linalg.norm(np.diff(points, axis=0), axis=1).cumsum()])
    there = np.array([np.interp(reach_mm, arc, points[:, k]) for k in range(3)]) - points[0]
    length = float(np.linalg.norm(there))
    return there / length if length > 0.0 else np.array([1.0, 0.0, 0.0])
