"""Random port sets for leads: four bodies, open and crowded, with fences of pins, given exits, threads and grooves.

One third of the sets is hard on purpose: a fence of pins around a port whose gap is near the width a
lead needs, exits on the far side of the body, exits on the wrong side, more lands than a face holds.
"""

from __future__ import annotations

import dataclasses

import numpy as np

from morph.settings.job import (
    BoxBlankSettings,
    CarrierBlankSettings,
    FaceSealEnd,
    FlangeSettings,
    HoleSettings,
    Metal,
    PlainEnd,
    SectionSettings,
    SectionShape,
    ThreadEnd,
)
from tests.body.scenes import Scene
from tests.surface.graphs import make_graph

BODIES = ("core", "shell", "cone", "box")
MOODS = ("open", "fence", "given", "crowd", "fence", "wrong side", "ends", "given")
SHAPES = (SectionShape.ROUND, SectionShape.ROOFED, SectionShape.AUTO)
RANGE_MM = (3.0, 12.0)
ENDS = (
    PlainEnd(),
    PlainEnd(),
    ThreadEnd("G1/8", thread_depth_mm=8.0),
    ThreadEnd("M10x1", thread_depth_mm=10.0),
    FaceSealEnd(12.0, 15.0, 1.4, 18.0),
)


def lead_scene(seed: int) -> tuple[Scene, str]:
    """Returns the scene of `seed` and its mood."""
    rng = np.random.default_rng(51_000 + seed)
    body, mood = BODIES[seed % 4], MOODS[(seed // 4) % len(MOODS)]
    graph = _graph(rng, 4 if mood == "crowd" else int(rng.integers(2, 5)))
    scene = _body(rng, body, mood, graph)
    shape = SHAPES[int(rng.integers(0, 3))]
    scene = dataclasses.replace(scene, section=SectionSettings(shape=shape, bore_range_mm=RANGE_MM))
    if mood == "fence":
        return dataclasses.replace(scene, holes=_fence(rng, scene)), mood
    if mood == "given":
        holes = scene.holes or _holes(rng, scene, 1)
        return dataclasses.replace(scene, exits=_given(rng, scene, wrong=False), holes=holes), mood
    if mood == "wrong side":
        return dataclasses.replace(scene, exits=_given(rng, scene, wrong=True)), mood
    if mood in ("crowd", "ends"):
        ends = [ENDS[int(rng.integers(1 if mood == "ends" else 2, len(ENDS)))] for _ in graph.nodes]
        exits = {n.port: {"end": end} for n, end in zip(graph.nodes, ends, strict=True) if n.port}
        return dataclasses.replace(scene, exits=exits), mood
    return scene, mood


def _graph(rng: np.random.Generator, n_ports: int):
    """A ring with ports on different edges of the sheet; one in six amid it."""
    w, h = float(rng.uniform(60, 90)), float(rng.uniform(45, 70))
    bore = float(rng.uniform(3.5, 6.5))
    ring = [(0.35, 0.35), (0.65, 0.35), (0.65, 0.65), (0.35, 0.65)]
    places = {f"R{k}": (x * w, y * h) for k, (x, y) in enumerate(ring)}
    links = [(f"R{k}", f"R{(k + 1) % 4}", bore) for k in range(4)]
    for k, side in enumerate(rng.permutation(4)[:n_ports]):
        share = float(rng.uniform(0.3, 0.7))
        place = [(share * w, 0.0), (w, share * h), (share * w, h), (0.0, share * h)][side]
        corner = f"R{(side + int(rng.integers(0, 2))) % 4}"
        if rng.random() < 1.0 / 6.0:
            place = tuple(0.5 * (np.array(place) + np.array(places[corner])))
        places[f"P{k}"] = (*place, f"port{k}")
        links.append((f"P{k}", corner, bore))
    return make_graph((w, h), places, links)


def _body(rng: np.random.Generator, body: str, mood: str, graph) -> Scene:
    w, h = graph.size_mm
    depth = float(rng.uniform(7.0, 11.0))
    low, high = (11.0, 15.0) if mood == "crowd" and rng.random() < 0.5 else (15.0, 25.0)
    margin = tuple(float(v) for v in rng.uniform(low, high, 2))
    radius = max(float(rng.uniform(28.0, 50.0)), w / 5.6 + depth)
    common = {"graph": graph, "depth_mm": depth, "radius_mm": radius}
    if body == "core":
        flange = FlangeSettings(radius + float(rng.uniform(8, 16)), 0.8 * margin[0]) if rng.random() < 0.4 else None
        return _with(Scene(**common, shape=CarrierBlankSettings(margin)), flange)
    if body == "cone":
        angle = float(rng.uniform(4.0, 12.0))
        radius += (0.5 * h + margin[0]) * np.tan(np.radians(angle))
        common["radius_mm"] = radius
        return Scene(**common, half_angle_deg=angle, shape=CarrierBlankSettings(margin))
    if body == "shell":
        ring = CarrierBlankSettings(margin, depth + float(rng.uniform(9.0, 26.0)))
        faces = [("foot",), ("outer",), ("foot", "top"), ("top",)][int(rng.integers(0, 4))]
        return Scene(**common, metal=Metal.AWAY_FROM_AXIS, shape=ring, port_faces=faces)
    reach = radius + depth + float(rng.uniform(14.0, 26.0))
    box = BoxBlankSettings((-reach, -reach, -h / 2 - margin[0]), (reach, reach, h / 2 + margin[1]))
    faces = [("+x", "-y", "foot"), ("foot",), ("-x",), ("+y", "top")][int(rng.integers(0, 4))]
    scene = Scene(**common, metal=Metal.AWAY_FROM_AXIS, shape=box, port_faces=faces)
    return dataclasses.replace(scene, holes=_holes(rng, scene, int(rng.integers(3, 8))))


def _with(scene: Scene, flange: FlangeSettings | None) -> Scene:
    return dataclasses.replace(scene, flange=flange) if flange is not None else scene


def _holes(rng: np.random.Generator, scene: Scene, n: int) -> tuple[HoleSettings, ...]:
    """Pins along z or along x or y, at least 9 mm off every channel's centreline."""
    channels = np.concatenate([branch.xyz_mm for branch in scene.wrapped.branches])
    outer = scene.radius_mm + (20.0 if scene.metal is Metal.AWAY_FROM_AXIS else -4.0)
    found: list[HoleSettings] = []
    for _ in range(60):
        axis = np.eye(3)[int(rng.integers(0, 3))]
        at = rng.uniform(-outer, outer, 3)
        at[2] = rng.uniform(*scene.blank.z_mm)
        aside = channels - at
        aside -= (aside @ axis)[:, None] * axis
        size = float(rng.uniform(4.0, 8.0))
        if np.linalg.norm(aside, axis=1).min() > 9.0 + 0.5 * size:
            start = at - 500.0 * axis
            found.append(HoleSettings(tuple(start), tuple(axis), size))
        if len(found) == n:
            break
    return _in_body(scene, found)


def _in_body(scene: Scene, holes) -> tuple[HoleSettings, ...]:
    """The holes whose axes meet the body."""
    from morph.core.errors import MorphError

    kept = []
    for hole in holes:
        try:
            dataclasses.replace(scene, holes=(hole,)).blank  # noqa: B018
        except MorphError:
            continue
        kept.append(hole)
    return tuple(kept)


def _fence(rng: np.random.Generator, scene: Scene) -> tuple[HoleSettings, ...]:
    """Pins square to the face in a ring around where a port's channel carries on, with gaps near what a lead needs."""
    carrier, found = scene.carrier, []
    for node in [node for node in scene.graph.nodes if node.port][: int(rng.integers(1, 3))]:
        sheet = np.asarray(node.sheet_mm, dtype=float)
        middle = np.array(scene.graph.size_mm) / 2.0
        ahead = sheet - middle
        ahead /= np.linalg.norm(ahead)
        n, size = int(rng.integers(3, 7)), float(rng.uniform(4.0, 7.0))
        needed = 3.0 + 2.0 * 3.23  # the least bore with a wall to either side
        pitch = size + needed * float(rng.uniform(0.8, 1.25))
        away = float(rng.uniform(8.0, 13.0)) + 0.5 * size
        for k in range(n):
            turn = (k - 0.5 * (n - 1)) * pitch / away
            if abs(turn) > 2.0:
                continue
            way = np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]]) @ ahead
            place = (sheet + away * way)[None, :]
            inward = carrier.into_metal(place)[0]
            at = carrier.point_mm(place, 0.0)[0]
            found.append(
                HoleSettings(tuple(at - 0.5 * inward), tuple(inward), size, depth_mm=float(rng.uniform(14, 45)))
            )
    clear = np.concatenate([branch.xyz_mm for branch in scene.wrapped.branches])
    far = [hole for hole in found if _off_line(hole, clear) > 6.6 + 0.5 * hole.diameter_mm]
    return _in_body(scene, far)


def _off_line(hole: HoleSettings, points: np.ndarray) -> float:
    axis = np.array(hole.axis) / np.linalg.norm(hole.axis)
    offset = points - np.array(hole.at_mm)
    return float(np.linalg.norm(offset - (offset @ axis)[:, None] * axis, axis=1).min())


def _given(rng: np.random.Generator, scene: Scene, wrong: bool) -> dict:
    """Exits on random places of the port faces for half of the ports or all; wrong: beside the farthest part of the face."""
    exits = {}
    blank = scene.blank
    faces = [face for face in blank.faces if face.role == "port"]
    for node in (node for node in scene.graph.nodes if node.port):
        if not wrong and rng.random() < 0.3:
            continue
        place = _on_face(rng, scene, faces[int(rng.integers(0, len(faces)))], wrong)
        if place is not None:
            end = ENDS[int(rng.integers(0, len(ENDS)))] if rng.random() < 0.4 else PlainEnd()
            exits[node.port] = {"exit_mm": tuple(place), "end": end}
    return exits


def _on_face(rng: np.random.Generator, scene: Scene, face, near_edge: bool) -> np.ndarray | None:
    """A random place on a face inside the body, 8 mm off the other faces (wrong side: 4 to 9 mm), or None."""
    blank = scene.blank
    size = 2.0 * scene.radius_mm + 60.0
    for _ in range(400):
        point = rng.uniform(-size / 2, size / 2, 3)
        point[2] = rng.uniform(*blank.z_mm)
        point = point + face.distance_mm(point[None])[0] * face.outward(point[None])[0]
        others = min(float(f.distance_mm(point[None])[0]) for f in blank.faces if f.name != face.name)
        low, high = (4.0, 9.0) if near_edge else (8.0, np.inf)
        if low < others < high and abs(float(face.distance_mm(point[None])[0])) < 1e-6:
            return np.round(point, 3)
    return None
