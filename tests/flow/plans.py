"""Small channel plans written by hand, and networks made of them."""

import numpy as np

from morph.body.plan import BranchKind, ChannelPlan, Exit, PlanBranch, PlanNode
from morph.layout.graph import NodeKind
from morph.settings.job import CoolantSettings, Role

UP = np.array([0.0, 0.0, 1.0])


def line(start, end, bore, spacing=0.5):
    a, b = np.asarray(start, dtype=float), np.asarray(end, dtype=float)
    n = max(int(np.ceil(np.linalg.norm(b - a) / spacing)), 2) + 1
    return a + (b - a) * np.linspace(0.0, 1.0, n)[:, None], np.full(n, float(bore))


def make_branch(name, start, end, points, bore, through=True, kind=BranchKind.CHANNEL):
    points, bore = np.asarray(points), np.asarray(bore)
    return PlanBranch(
        id=name,
        kind=kind,
        start=start,
        end=end,
        sheet_mm=None,
        xyz_mm=points,
        bore_mm=bore,
        wanted_mm=bore,
        room_mm=bore,
        room_by=("face:top",) * len(bore),
        capped=np.zeros(len(bore), dtype=bool),
        length_mm=float(np.linalg.norm(np.diff(points, axis=0), axis=1).sum()),
        through_flow=through,
    )


def make_plan(places, pipes, ports, finishes=None, through=None, section=None):
    """A plan of straight pipes; `pipes` name: (from, to, bore), `ports` node: role; each port gets a lead of 5 mm."""
    finishes = finishes or {}
    degree = {name: sum(name in pipe[:2] for pipe in pipes.values()) for name in places}
    nodes = [
        PlanNode(
            name,
            NodeKind.PORT if name in ports else NodeKind.JUNCTION,
            name if name in ports else None,
            None,
            np.asarray(place, dtype=float),
        )
        for name, place in places.items()
    ]
    branches, exits, circuits = [], [], []
    for name, (a, b, bore) in pipes.items():
        points, bores = line(places[a], places[b], bore)
        branches.append(make_branch(name, a, b, points, bores, through is None or name in through))
    for name, role in ports.items():
        away = np.asarray(places[name], dtype=float)
        bore = next(pipe[2] for pipe in pipes.values() if name in pipe[:2])
        inward = next(
            np.asarray(places[p[1] if p[0] == name else p[0]], dtype=float) for p in pipes.values() if name in p[:2]
        )
        heading = away - inward if degree[name] == 1 else -UP
        heading = heading / np.linalg.norm(heading)
        out = away + 5.0 * heading
        nodes.append(PlanNode(f"X-{name}", NodeKind.EXIT, name, None, out))
        points, bores = line(away, out, bore)
        branches.append(
            make_branch(f"L-{name}", name, f"X-{name}", points, bores, role is not Role.ACCESS, BranchKind.LEAD)
        )
        extra = {"finish": finishes[name]} if name in finishes else {}
        exits.append(Exit(name, role, f"X-{name}", f"L-{name}", out, heading, "foot", bore, bore, **extra))
    joined = {node.id: node.id for node in nodes}

    def root(name):
        while joined[name] != name:
            name = joined[name]
        return name

    for one in branches:
        joined[root(one.end)] = root(one.start)
    for piece in sorted({root(one.start) for one in branches}):
        circuits.append(tuple(one.id for one in branches if root(one.start) == piece))
    extra = {} if section is None else {"section": section}
    return ChannelPlan(tuple(nodes), tuple(branches), tuple(exits), tuple(circuits), (), (), 0.6, **extra)


def ladder(rungs, bore=4.0, header=6.0, pitch=12.0, height=30.0, opposite=True):
    """Feed and return headers joined by rungs."""
    places, pipes = {}, {}
    for k in range(rungs):
        places[f"A{k}"] = (pitch * k, 0.0, 0.0)
        places[f"B{k}"] = (pitch * k, height, 0.0)
        pipes[f"R{k}"] = (f"A{k}", f"B{k}", bore)
        if k:
            pipes[f"HA{k}"] = (f"A{k - 1}", f"A{k}", header)
            pipes[f"HB{k}"] = (f"B{k - 1}", f"B{k}", header)
    places["in"], pipes["I"] = (-pitch, 0.0, 0.0), ("in", "A0", header)
    last = rungs - 1 if opposite else 0
    step = pitch if opposite else -pitch
    places["out"] = (pitch * last + step, height, 0.0)
    pipes["O"] = (f"B{last}", "out", header)
    return make_plan(places, pipes, {"in": Role.IN, "out": Role.OUT})


def coolant(**values):
    return (
        CoolantSettings(**({"flow_l_min": 6.0} | values))
        if not {"drop_bar", "pump"} & values.keys()
        else CoolantSettings(**values)
    )
