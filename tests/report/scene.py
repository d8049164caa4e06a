"""A whole build made by hand: a core of radius 30 with a two-loop layout, cut with a general-purpose boolean library.

The sheet is 90 x 60 mm, laid at depth 8 on the outside of the core: x runs around at radius 22, y up.
Two rungs join two uprights (loops), and one blind branch hangs on the upper rung.
"""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np

from morph.body.blank import Blank
from morph.body.face import CylinderFace, FaceRole, PlaneFace
from morph.body.plan import BranchKind, Cap, ChannelPlan, Exit, PlanBranch, PlanNode
from morph.core.verdict import Notice, Outcome, Verdict
from morph.geometry.curve import Curve
from morph.geometry.mesh import Mesh
from morph.layout.density import Density
from morph.layout.graph import Branch, ChannelGraph, Dropped, DropReason, Node, NodeKind
from morph.settings.job import (
    CarrierSettings,
    Job,
    LayoutSettings,
    Metal,
    PortSettings,
    PrintSettings,
    Role,
    Samples,
    Seam,
    SeenFrom,
)
from morph.settings.profile import Profile, Sourced, SourcedRange
from morph.solid.result import ChannelSolid, Insert, Opening
from morph.surface.cylinder import make_cylinder
from morph.surface.wrap import wrap_graph

SIZE_MM = (90.0, 60.0)
RADIUS_MM, DEPTH_MM, FOOT_MM, TOP_MM = 30.0, 8.0, -45.0, 40.0
NODES = {
    "N1": ("port", (15.0, 0.0)),
    "N2": ("port", (75.0, 0.0)),
    "N3": ("junction", (15.0, 15.0)),
    "N4": ("junction", (75.0, 15.0)),
    "N5": ("junction", (15.0, 35.0)),
    "N6": ("junction", (75.0, 35.0)),
    "N7": ("junction", (45.0, 50.0)),
    "N8": ("dead-end", (45.0, 38.0)),
}
BRANCHES = {
    "B1": ("N1", "N3", 4.0, 4.0),
    "B2": ("N2", "N4", 4.0, 4.0),
    "B3": ("N3", "N4", 3.2, 3.6),
    "B4": ("N3", "N5", 4.6, 4.0),
    "B5": ("N4", "N6", 4.6, 4.0),
    "B6": ("N5", "N6", 3.0, 3.0),
    "B7": ("N8", "N7", 3.0, 3.4),
    "B8": ("N5", "N7", 4.0, 5.2),
    "B9": ("N7", "N6", 5.2, 4.0),
}


def sourced(value: float, unit: str) -> Sourced:
    return Sourced(value, unit, "common practice, no source")


def profile() -> Profile:
    mm = "mm"
    return Profile(
        "steel-test",
        "tool steel",
        sourced(40, "um"),
        sourced(45, "deg"),
        sourced(6, mm),
        sourced(1, mm),
        sourced(3, mm),
        sourced(8, mm),
        sourced(1.5, mm),
        sourced(0.15, mm),
        sourced(0.15, mm),
        sourced(1.5, "bores"),
        (sourced(250, mm), sourced(250, mm), sourced(300, mm)),
        sourced(8000, "kg/m3"),
        SourcedRange(14.0, 15.0, "W/mK", "from memory"),
        SourcedRange(19.0, 21.0, "W/mK", "from memory"),
        SourcedRange(5.0, 20.0, "um", "common practice, no source"),
    )


def job(name: str = "hand-core", seen_from: SeenFrom = SeenFrom.PART) -> Job:
    return Job(
        name=name,
        file=Path("/somewhere/else/job.toml"),
        layout=LayoutSettings(Path("/somewhere/else/density.npy"), SIZE_MM, seen_from=seen_from),
        ports=(PortSettings("feed", Role.IN, (15.0, 0.0)), PortSettings("return", Role.OUT, (75.0, 0.0))),
        carrier=CarrierSettings(RADIUS_MM, Metal.TOWARD_AXIS, DEPTH_MM),
        printing=PrintSettings(profile()),
    )


def density() -> Density:
    """The layout as a picture of 180 x 120 cells: 1 within half a bore of a branch."""
    y, x = np.mgrid[0:120, 0:180] * 0.5 + 0.25
    value = np.zeros(x.shape)
    for a, b, bore_a, bore_b in BRANCHES.values():
        p, q = np.array(NODES[a][1]), np.array(NODES[b][1])
        step = q - p
        t = np.clip(((x - p[0]) * step[0] + (y - p[1]) * step[1]) / (step @ step), 0, 1)
        gap = np.hypot(x - p[0] - t * step[0], y - p[1] - t * step[1])
        value = np.maximum(value, np.clip(0.5 + (0.5 * (bore_a + t * (bore_b - bore_a)) - gap), 0, 1))
    return Density(value, SIZE_MM, Samples.CELLS, Seam.OPEN, "density.npy", "0123456789abcdef")


def graph() -> ChannelGraph:
    nodes = tuple(
        Node(name, NodeKind(kind), {"N1": "feed", "N2": "return"}.get(name), np.array(at))
        for name, (kind, at) in NODES.items()
    )
    branches = []
    for name, (a, b, bore_a, bore_b) in BRANCHES.items():
        p, q = np.array(NODES[a][1]), np.array(NODES[b][1])
        length = float(np.linalg.norm(q - p))
        control = p + np.linspace(0, 1, 4)[:, None] * (q - p)
        parameter = np.linspace(0, 1, int(np.ceil(length / 0.7)) + 1)
        points = p + parameter[:, None] * (q - p)
        bore = bore_a + parameter * (bore_b - bore_a)
        branches.append(Branch(name, a, b, Curve([0] * 4 + [1] * 4, control), parameter, points, bore, length, 0.01))
    dropped = (Dropped(DropReason.ISLAND, (70.0, 52.0), 3.25),)
    return ChannelGraph(SIZE_MM, 0.5, 0.21, nodes, tuple(branches), dropped)


def blank(stock_mm: float = 0.5) -> Blank:
    faces = (
        CylinderFace("carrier", FaceRole.PART, 0.0, RADIUS_MM, True),
        PlaneFace("foot", FaceRole.PORT, stock_mm, np.array([0, 0, FOOT_MM]), np.array([0, 0, -1.0])),
        PlaneFace("top", FaceRole.OUTER, 0.0, np.array([0, 0, TOP_MM]), np.array([0, 0, 1.0])),
    )
    return Blank(faces, (FOOT_MM, TOP_MM), RADIUS_MM, None, None)


def _plan_branch(name, kind, a, b, sheet, xyz, bore, through) -> PlanBranch:
    room = np.full(len(xyz), 6.0)
    length = float(np.linalg.norm(np.diff(xyz, axis=0), axis=1).sum())
    capped = np.zeros(len(xyz), bool)
    by = ("face:carrier",) * len(xyz)
    return PlanBranch(name, kind, a, b, sheet, xyz, bore, bore, room, by, capped, length, through)


def plan(wrapped) -> ChannelPlan:
    place = {node.id: xyz for node, xyz in zip(wrapped.graph.nodes, wrapped.nodes_mm, strict=True)}
    nodes = [PlanNode(n.id, n.kind, n.port, n.sheet_mm, place[n.id]) for n in wrapped.graph.nodes]
    items = []
    for flat, bent in zip(wrapped.graph.branches, wrapped.branches, strict=True):
        through = flat.id != "B7"
        items.append(
            _plan_branch(
                flat.id, BranchKind.CHANNEL, flat.start, flat.end, flat.sheet_mm, bent.xyz_mm, flat.bore_mm, through
            )
        )
    exits = []
    for port, role, node in (("feed", Role.IN, "N1"), ("return", Role.OUT, "N2")):
        top = place[node]
        end = np.array([top[0], top[1], FOOT_MM])
        xyz = top + np.linspace(0, 1, 20)[:, None] * (end - top)
        nodes.append(PlanNode(f"X-{port}", NodeKind.EXIT, port, None, end))
        items.append(_plan_branch(f"L-{port}", BranchKind.LEAD, node, f"X-{port}", None, xyz, np.full(20, 4.0), True))
        exits.append(Exit(port, role, f"X-{port}", f"L-{port}", end, np.array([0, 0, -1.0]), "foot", 4.0, 4.5))
    circuit = (tuple(item.id for item in items),)
    caps = (Cap("B8", 4.0, 1.25, "face:carrier"),)
    return ChannelPlan(tuple(nodes), tuple(items), tuple(exits), circuit, caps, (), 0.6)


def _tubes(plan: ChannelPlan, overshoot_mm: float):
    """The union of tapered tubes with balls at their joints, by trimesh and its boolean engine."""
    import trimesh

    solids = []
    for item in plan.branches:
        points, bore = item.xyz_mm[::4], item.bore_mm[::4]
        points, bore = np.vstack([points, item.xyz_mm[-1:]]), np.append(bore, item.bore_mm[-1])
        if item.kind is BranchKind.LEAD:
            points = np.vstack([points, points[-1] - [0, 0, overshoot_mm]])
            bore = np.append(bore, bore[-1])
        balls = []
        for point, width in zip(points, bore, strict=True):
            ball = trimesh.creation.icosphere(subdivisions=2, radius=width / 2)
            ball.apply_translation(point)
            balls.append(ball.vertices)
        for one, two in itertools.pairwise(balls):
            solids.append(trimesh.convex.convex_hull(np.vstack([one, two])))
    return trimesh.boolean.union(solids, engine="manifold")


def _stored(mesh) -> Mesh:
    vertices = mesh.vertices.astype(np.float32)
    unique, index = np.unique(vertices, axis=0, return_inverse=True)
    triangles = index.reshape(-1)[mesh.faces].reshape(-1, 3)
    keep = (triangles != np.roll(triangles, 1, axis=1)).all(axis=1)
    return Mesh(unique.astype(np.float64), triangles[keep])


def solid_and_insert(plan: ChannelPlan, blank: Blank) -> tuple[ChannelSolid, Insert]:
    import trimesh

    tubes = _tubes(plan, 4.5)
    stock = blank.face("foot").stock_mm

    def body(foot_mm):
        part = trimesh.creation.cylinder(RADIUS_MM, TOP_MM - foot_mm, sections=128)
        part.apply_translation([0, 0, 0.5 * (TOP_MM + foot_mm)])
        return part

    printed = body(FOOT_MM - stock)
    trimmed = trimesh.boolean.intersection([tubes, body(FOOT_MM)], engine="manifold")
    cut = trimesh.boolean.difference([printed, tubes], engine="manifold")
    mesh = _stored(cut)
    middle = mesh.vertices_mm[mesh.triangles].mean(axis=1)
    skin = (np.hypot(middle[:, 0], middle[:, 1]) > RADIUS_MM - 0.05) | (middle[:, 2] > TOP_MM - 1e-4)
    skin |= middle[:, 2] < FOOT_MM - stock + 1e-4
    rims = []
    for exit_ in plan.exits:
        angle = np.arange(24) * np.pi / 12
        rim = exit_.xyz_mm + 2.0 * np.column_stack([np.cos(angle), np.sin(angle), 0 * angle]) - [0, 0, stock]
        rims.append(Opening(rim, rim.mean(axis=0), 4.0, "foot"))
    insert = Insert(mesh, (~skin).astype(int), float(printed.volume), 0, tuple(rims))
    return ChannelSolid(_stored(tubes), _stored(trimmed), 0.25, 0, 12345), insert


def verdicts(plan: ChannelPlan) -> tuple[Verdict, ...]:
    """Rows as the checks write them; the wall of B9 to the carrier is worked out on the centreline."""
    wide = next(b for b in plan.branches if b.id == "B9")
    radial = wide.xyz_mm[0] * [1, 1, 0] / np.hypot(*wide.xyz_mm[0, :2])
    wall = DEPTH_MM - wide.bore_mm[0] / 2
    middle = wide.xyz_mm[0] + radial * (wide.bore_mm[0] / 2 + wall / 2)
    at = tuple(float(v) for v in middle)
    return (
        Verdict(
            "wall-face",
            Outcome.WATCH,
            f"The wall from B9 to part face carrier is {wall:.2f} mm.",
            wall,
            "mm",
            5.2,
            "least",
            0.12,
            "[service] wall_face_bores",
            ("B9",),
            (45.0, 50.0),
            at,
            "Lay the channels deeper.",
        ),
        Verdict(
            "powder",
            Outcome.FAIL,
            "B7 keeps its powder: no way through.",
            1.0,
            "count",
            0.0,
            "most",
            0.0,
            branch_ids=("B7",),
            sheet_mm=(45.0, 38.0),
            hint="Join B7 to another branch, or add an access port.",
        ),
        Verdict("openings", Outcome.PASS, "2 openings found, 2 declared.", 2.0, "count", 2.0, "equal"),
        Verdict("flow", Outcome.NOT_CHECKED, "Flow was not calculated.", hint="Measure it on the printed insert."),
        Verdict("temperature", Outcome.NOT_CHECKED, "Face temperature was not calculated."),
    )


def parts(name: str = "hand-core", seen_from: SeenFrom = SeenFrom.PART) -> dict:
    settings = job(name, seen_from)
    carrier = make_cylinder(settings.carrier, SIZE_MM, seen_from, DEPTH_MM)
    wrapped = wrap_graph(graph(), carrier, DEPTH_MM)
    made_plan, made_blank = plan(wrapped), blank()
    solid, insert = solid_and_insert(made_plan, made_blank)
    return {
        "job": settings,
        "density": density(),
        "graph": wrapped.graph,
        "wrapped": wrapped,
        "blank": made_blank,
        "plan": made_plan,
        "solid": solid,
        "insert": insert,
        "verdicts": verdicts(made_plan),
        "notices": (Notice("bore-clamped", "B3 is clamped to 3.20 mm.", ("B3",), (40.0, 15.0)),),
    }
