"""Channel plans and blanks made by hand, for every test that needs a solid without a layout.

Coordinates are chosen so that volumes, lengths, loops and openings can be worked out on paper.
The blanks are records only; their meshes come from morph.solid.cut.
"""

from __future__ import annotations

import itertools

import numpy as np

from morph.body.blank import Blank
from morph.body.face import CylinderFace, FaceRole, PlaneFace
from morph.body.plan import BranchKind, ChannelPlan, Exit, PlanBranch, PlanNode
from morph.layout.graph import NodeKind
from morph.settings.job import Role

BLEND_MM = 0.6
AXES = {"-x": (0, -1), "+x": (0, 1), "-y": (1, -1), "+y": (1, 1), "-z": (2, -1), "+z": (2, 1)}


def box_blank(low=(0.0, 0.0, 0.0), high=(60.0, 40.0, 30.0), part=("+z",), port=("-x", "+x"), stock=None) -> Blank:
    """A box 60 x 40 x 30 mm with its lowest corner at the origin; faces are called -x ... +z."""
    corner = np.array([low, high], dtype=float)
    faces = []
    for name, (axis, side) in AXES.items():
        normal = np.zeros(3)
        normal[axis] = side
        origin = 0.5 * (corner[0] + corner[1])
        origin[axis] = corner[(side + 1) // 2, axis]
        role = FaceRole.PART if name in part else FaceRole.PORT if name in port else FaceRole.OUTER
        faces.append(PlaneFace(name, role, (stock or {}).get(name, 0.0), origin, normal))
    return Blank(tuple(faces), (float(corner[0, 2]), float(corner[1, 2])), None, None, corner)


def cylinder_blank(radius_mm=30.0, z_mm=(0.0, 80.0), inner_radius_mm=None, stock=None) -> Blank:
    """A cylinder about z; the part face is called "carrier", ports come out of "foot" (z lowest)."""
    stock = stock or {}
    low, high = z_mm
    faces = [
        CylinderFace("carrier", FaceRole.PART, stock.get("carrier", 0.0), radius_mm, True),
        PlaneFace("foot", FaceRole.PORT, stock.get("foot", 0.0), np.array([0.0, 0.0, low]), np.array([0.0, 0.0, -1.0])),
        PlaneFace("top", FaceRole.OUTER, stock.get("top", 0.0), np.array([0.0, 0.0, high]), np.array([0.0, 0.0, 1.0])),
    ]
    if inner_radius_mm is not None:
        faces.append(CylinderFace("bore", FaceRole.OUTER, stock.get("bore", 0.0), inner_radius_mm, False))
    return Blank(tuple(faces), z_mm, radius_mm, inner_radius_mm, None)


def sampled(points_mm, bore_mm: float) -> np.ndarray:
    """The polyline through `points_mm` with samples at most min(bore / 4, 1 mm) apart."""
    points = np.asarray(points_mm, dtype=float)
    step = min(bore_mm / 4.0, 1.0)
    out = [points[:1]]
    for a, b in itertools.pairwise(points):
        n = max(1, int(np.ceil(np.linalg.norm(b - a) / step - 1e-9)))
        out.append(a + (b - a) * (np.arange(1, n + 1) / n)[:, None])
    return np.concatenate(out)


def arc(
    centre, radius_mm: float, from_deg: float, to_deg: float, bore_mm: float, u=(1, 0, 0), v=(0, 1, 0)
) -> np.ndarray:
    """Samples of a circular arc about `centre` in the plane of the unit vectors u, v."""
    sweep = np.radians(to_deg - from_deg)
    n = max(8, int(np.ceil(abs(sweep) * radius_mm / min(bore_mm / 4.0, 1.0))))
    angle = np.radians(from_deg) + sweep * np.arange(n + 1) / n
    return np.asarray(centre, float) + radius_mm * (
        np.cos(angle)[:, None] * np.asarray(u, float) + np.sin(angle)[:, None] * np.asarray(v, float)
    )


def branch(name: str, start: str, end: str, xyz_mm, bore_mm, *, lead=False, through=True) -> PlanBranch:
    """A branch or lead; `bore_mm` is one number or one per sample."""
    xyz = np.asarray(xyz_mm, dtype=float)
    bore = np.broadcast_to(np.asarray(bore_mm, dtype=float), len(xyz)).copy()
    return PlanBranch(
        id=name,
        kind=BranchKind.LEAD if lead else BranchKind.CHANNEL,
        start=start,
        end=end,
        sheet_mm=None if lead else xyz[:, :2],
        xyz_mm=xyz,
        bore_mm=bore,
        wanted_mm=bore,
        room_mm=np.full(len(xyz), 99.0),
        room_by=("face:+z",) * len(xyz),
        capped=np.zeros(len(xyz), bool),
        length_mm=float(np.linalg.norm(np.diff(xyz, axis=0), axis=1).sum()),
        through_flow=through,
    )


def plan_of(branches, exits=(), dead_ends=(), blend_mm: float = BLEND_MM) -> ChannelPlan:
    """A plan from its branches: nodes are read off the branch ends.

    Args:
        branches: PlanBranch records. exits: tuples (port, role, lead id, face, leave, stock).
        dead_ends: node ids that are dead ends.
    """
    place: dict[str, np.ndarray] = {}
    for item in branches:
        place.setdefault(item.start, item.xyz_mm[0])
        place.setdefault(item.end, item.xyz_mm[-1])
    by_id = {item.id: item for item in branches}
    records, exit_nodes, port_nodes = [], {}, {}
    for port, role, lead_id, face, leave, stock in exits:
        lead = by_id[lead_id]
        bore = float(lead.bore_mm[-1])
        exit_nodes[lead.end] = port
        port_nodes[lead.start] = port
        records.append(
            Exit(
                port, Role(role), lead.end, lead_id, lead.xyz_mm[-1], np.asarray(leave, float), face, bore, stock + bore
            )
        )
    nodes = []
    for name, xyz in place.items():
        kind = NodeKind.JUNCTION
        if name in exit_nodes:
            kind = NodeKind.EXIT
        elif name in port_nodes:
            kind = NodeKind.PORT
        elif name in dead_ends:
            kind = NodeKind.DEAD_END
        port = exit_nodes.get(name, port_nodes.get(name))
        sheet = None if kind is NodeKind.EXIT else xyz[:2]
        nodes.append(PlanNode(name, kind, port, sheet, xyz))
    return ChannelPlan(tuple(nodes), tuple(branches), tuple(records), _circuits(branches), (), (), blend_mm)


def _circuits(branches) -> tuple[tuple[str, ...], ...]:
    group = {name: name for item in branches for name in (item.start, item.end)}

    def root(name: str) -> str:
        while group[name] != name:
            name = group[name]
        return name

    for item in branches:
        group[root(item.end)] = root(item.start)
    pieces: dict[str, list[str]] = {}
    for item in branches:
        pieces.setdefault(root(item.start), []).append(item.id)
    return tuple(tuple(ids) for ids in pieces.values())


def straight_pipe(bore_mm: float = 6.0, stock_mm: float = 0.0, y: float = 20.0, z: float = 15.0) -> ChannelPlan:
    """A straight bore along x through the box: port nodes at x = 20 and 40, exits on -x and +x; no loop, 2 openings."""
    p = [(20.0, y, z), (40.0, y, z)]
    items = [
        branch("B1", "N1", "N2", sampled(p, bore_mm), bore_mm),
        branch("L-feed", "N1", "X-feed", sampled([p[0], (0.0, y, z)], bore_mm), bore_mm, lead=True),
        branch("L-return", "N2", "X-return", sampled([p[1], (60.0, y, z)], bore_mm), bore_mm, lead=True),
    ]
    ends = (
        ("feed", "in", "L-feed", "-x", (-1, 0, 0), stock_mm),
        ("return", "out", "L-return", "+x", (1, 0, 0), stock_mm),
    )
    return plan_of(items, ends)


def tee(bore_mm: float = 5.0, dead_end_mm: float = 12.0) -> ChannelPlan:
    """The straight pipe with a blind branch along +y from its middle; no loop, 2 openings, 1 dead end."""
    y, z = 15.0, 15.0
    middle = (30.0, y, z)
    items = [
        branch("B1", "N1", "N2", sampled([(15.0, y, z), middle], bore_mm), bore_mm),
        branch("B2", "N2", "N3", sampled([middle, (45.0, y, z)], bore_mm), bore_mm),
        branch("B3", "N2", "N4", sampled([middle, (30.0, y + dead_end_mm, z)], bore_mm), bore_mm, through=False),
        branch("L-feed", "N1", "X-feed", sampled([(15.0, y, z), (0.0, y, z)], bore_mm), bore_mm, lead=True),
        branch("L-return", "N3", "X-return", sampled([(45.0, y, z), (60.0, y, z)], bore_mm), bore_mm, lead=True),
    ]
    ends = (("feed", "in", "L-feed", "-x", (-1, 0, 0), 0.0), ("return", "out", "L-return", "+x", (1, 0, 0), 0.0))
    return plan_of(items, ends, dead_ends=("N4",))


def ring(bore_mm: float = 5.0, radius_mm: float = 12.0) -> ChannelPlan:
    """A circle about (30, 20, 15) fed from -x and drained to +x; 1 loop, 2 openings."""
    centre = (30.0, 20.0, 15.0)
    west, east = (30.0 - radius_mm, 20.0, 15.0), (30.0 + radius_mm, 20.0, 15.0)
    lower, upper = arc(centre, radius_mm, 180.0, 360.0, bore_mm), arc(centre, radius_mm, 180.0, 0.0, bore_mm)
    for path in (lower, upper):
        path[0], path[-1] = west, east
    items = [
        branch("B1", "N1", "N2", lower, bore_mm),
        branch("B2", "N1", "N2", upper, bore_mm),
        branch("L-feed", "N1", "X-feed", sampled([west, (0.0, 20.0, 15.0)], bore_mm), bore_mm, lead=True),
        branch("L-return", "N2", "X-return", sampled([east, (60.0, 20.0, 15.0)], bore_mm), bore_mm, lead=True),
    ]
    ends = (("feed", "in", "L-feed", "-x", (-1, 0, 0), 0.0), ("return", "out", "L-return", "+x", (1, 0, 0), 0.0))
    return plan_of(items, ends)


def ladder(
    n_rungs: int = 4, bore_mm: float = 4.0, radius_mm: float = 24.0, blank_radius_mm: float = 30.0
) -> ChannelPlan:
    """Two uprights 90 degrees apart on a cylinder about z with rungs between; exits on the foot.

    n_rungs - 1 loops, 2 openings; fits cylinder_blank(blank_radius_mm, (0, 80)). Rungs at z = 20 + 12 i.
    """
    if radius_mm + bore_mm / 2 >= blank_radius_mm:
        raise ValueError("the ladder breaks out of the blank")

    def on(angle_deg: float, z: float) -> tuple[float, float, float]:
        a = np.radians(angle_deg)
        return (radius_mm * float(np.cos(a)), radius_mm * float(np.sin(a)), z)

    items, height = [], [20.0 + 12.0 * i for i in range(n_rungs)]
    for side, angle in (("W", -45.0), ("E", 45.0)):
        for i in range(n_rungs - 1):
            path = sampled([on(angle, height[i]), on(angle, height[i + 1])], bore_mm)
            items.append(branch(f"B{len(items) + 1}", f"{side}{i}", f"{side}{i + 1}", path, bore_mm))
    for i, z in enumerate(height):
        path = arc((0.0, 0.0, z), radius_mm, -45.0, 45.0, bore_mm)
        path[0], path[-1] = on(-45.0, z), on(45.0, z)
        items.append(branch(f"B{len(items) + 1}", f"W{i}", f"E{i}", path, bore_mm))
    for port, side, angle in (("feed", "W", -45.0), ("return", "E", 45.0)):
        path = sampled([on(angle, height[0]), on(angle, 0.0)], bore_mm)
        items.append(branch(f"L-{port}", f"{side}0", f"X-{port}", path, bore_mm, lead=True))
    ends = (("feed", "in", "L-feed", "foot", (0, 0, -1), 0.0), ("return", "out", "L-return", "foot", (0, 0, -1), 0.0))
    return plan_of(items, ends)
