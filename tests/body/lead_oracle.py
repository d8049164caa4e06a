"""Leads measured and refusals confirmed by other means: own distances, a voxel flood and a random tree.

Nothing here asks the code that lays leads. Distances are written out again from the sizes of faces and holes.
A refusal is confirmed when no way exists for a channel of the least bore with its walls: by a flood over
voxels that forgives half a voxel (a sound proof), or, where a flood finds one, when a random tree of
ways with bends of 1.5 bores and the straight end finds none (evidence, no proof; told apart).
"""

from __future__ import annotations

import re

import networkx as nx
import numpy as np
from scipy.ndimage import label
from scipy.spatial import cKDTree

from morph.body.plan import BranchKind
from morph.settings.job import SectionShape
from tests.body import measure

BAND_MM, BUILD_MM = 0.2, 0.03
"""Bands of the test profile (0.1 mm position, half of 0.2 mm bore), and what is planned on top for building."""

WALL_MM, LEAST_MM = 3.0, 3.0
ROOF = 1.0 / np.cos(np.radians(47.0))
"""A roof built 2 degrees steeper than 45 reaches this much further upwards."""

SLACK_MM = 5e-3


def face_distance(face, points):
    """Distance of points to a face, positive in the metal."""
    r = np.hypot(points[:, 0], points[:, 1])
    if hasattr(face, "outline"):  # a face of revolution with two edges
        a, b = np.array(face.start), np.array(face.end)
        p = np.column_stack([r, points[:, 2]])
        t = np.clip((p - a) @ (b - a) / ((b - a) @ (b - a)), 0.0, 1.0)
        away = np.linalg.norm(p - a - t[:, None] * (b - a), axis=1)
        core = face.outline.core
        core_r = core if isinstance(core, float) else core.radius_mm + points[:, 2] * np.tan(core.half_angle_rad)
        inside = (r <= core_r + 1e-9) | (
            (r <= face.outline.radius_mm + 1e-9) & (points[:, 2] <= face.outline.top_mm + 1e-9)
        )
        return np.where(inside, away, -away)
    if hasattr(face, "radius_mm"):
        return face.radius_mm - r if face.metal_inside else r - face.radius_mm
    if hasattr(face, "cone"):
        angle = face.cone.half_angle_rad
        outside = np.cos(angle) * (r - face.cone.radius_mm - points[:, 2] * np.tan(angle))
        return -outside if face.metal_inside else outside
    return (face.origin_mm - points) @ face.normal


def hole_distance(hole, points):
    """Distance of points to a flat-ended cylinder, negative inside."""
    offset = points - hole.start_mm
    along = offset @ hole.axis
    rho = np.sqrt(np.maximum((offset**2).sum(axis=1) - along**2, 0.0)) - hole.diameter_mm / 2
    beyond = np.abs(along - hole.length_mm / 2) - hole.length_mm / 2
    outside = np.hypot(np.maximum(rho, 0.0), np.maximum(beyond, 0.0))
    return np.where((rho > 0.0) | (beyond > 0.0), outside, np.maximum(rho, beyond))


def reach_to(distance, points, bore, shape):
    """How far channels reach toward where `distance` falls; auto is taken as round, its least."""
    if shape is not SectionShape.ROOFED:
        return bore / 2
    up = np.array([0.0, 0.0, 1e-4])
    rise = -(distance(points + up) - distance(points - up)) / 2e-4
    return bore / 2 * np.maximum(1.0, np.clip(rise, -1.0, 1.0) * ROOF)


def lead_faults(scene, plan):
    """Everything illegal about the leads of a plan, as words; empty when all are legal."""
    faults = []
    shape = scene.section.shape
    holes = list(scene.blank.holes)
    for exit_ in plan.exits:
        lead = next(b for b in plan.branches if b.id == exit_.lead)
        points, bore, arc = measure.dense(lead)
        face = scene.blank.face(exit_.face)
        if face.role != "port":
            faults.append(f"{lead.id} comes out of {face.name}")
        for other in scene.blank.faces:
            wall = face_distance(other, points) - reach_to(lambda p, f=other: face_distance(f, p), points, bore, shape)
            needed = np.maximum(WALL_MM, bore) if other.role == "part" else np.full(len(bore), WALL_MM)
            counts = np.ones(len(points), dtype=bool)
            if other.name == exit_.face:
                nearing = -np.diff(face_distance(other, points)) / np.linalg.norm(np.diff(points, axis=0), axis=1)
                flat = np.flatnonzero(nearing < 0.5 - 1e-3)
                counts[(flat[-1] + 2 if len(flat) else 0) :] = False
            lack = (needed + BAND_MM - wall)[counts]
            if len(lack) and lack.max() > SLACK_MM:
                faults.append(f"{lead.id} lacks {lack.max():.3f} mm to {other.name}")
        cuts = [c for e in plan.exits if e.port != exit_.port for c in e.finish.cut(e.port, e.xyz_mm, e.leave, WALL_MM)]
        for hole in holes + cuts:
            wall = hole_distance(hole, points) - reach_to(lambda p, h=hole: hole_distance(h, p), points, bore, shape)
            if (lack := float((hole.wall_mm + BAND_MM - wall).max())) > SLACK_MM:
                faults.append(f"{lead.id} lacks {lack:.3f} mm to {hole.id}")
        narrows = lead.bore_mm[0] > lead.bore_mm.min() + 1e-6
        if measure.sharpest_bend_bores(lead) < (1.4 if narrows else 1.5):
            faults.append(f"{lead.id} bends at {measure.sharpest_bend_bores(lead):.3f} bores")
        faults += _end_faults(scene, plan, exit_, lead, arc, points)
    return faults + _pair_faults(scene, plan)


def _end_faults(scene, plan, exit_, lead, arc, points):
    faults = []
    face = scene.blank.face(exit_.face)
    step = 1e-5 * np.eye(3)
    gradient = [
        face_distance(face, (exit_.xyz_mm + s)[None])[0] - face_distance(face, (exit_.xyz_mm - s)[None])[0]
        for s in step
    ]
    normal = -np.array(gradient) / np.linalg.norm(gradient)
    if abs(face_distance(face, exit_.xyz_mm[None])[0]) > 1e-6:
        faults.append(f"{exit_.port} ends off {face.name}")
    if exit_.leave @ normal < 1.0 - 1e-5:
        faults.append(f"{exit_.port} leaves askew")
    run = max(0.5 * float(lead.bore_mm[-1]), exit_.finish.cut_depth_mm)
    tail = points[arc[-1] - arc <= run] - exit_.xyz_mm
    if np.linalg.norm(np.cross(tail, exit_.leave), axis=1).max() > 0.02:
        faults.append(f"{exit_.port} is not straight over {run:.2f} mm")
    rim, land = end_points(exit_.xyz_mm, exit_.leave, exit_.finish)
    if exit_.finish.is_plain:
        return faults
    if np.abs(face_distance(face, land)).max() > 1e-6:
        faults.append(f"the land of {exit_.port} is not flat")
    for other in scene.blank.faces:
        if other.name != face.name:
            if face_distance(other, land).min() < -0.02:
                faults.append(f"the land of {exit_.port} hangs over to {other.name}")
            if face_distance(other, rim).min() < WALL_MM + BAND_MM - 0.02:
                faults.append(f"the cut of {exit_.port} is too near to {other.name}")
    for hole in scene.blank.holes:
        if hole_distance(hole, rim).min() < hole.wall_mm + BAND_MM - 0.02:
            faults.append(f"the cut of {exit_.port} is too near to {hole.id}")
        if hole_distance(hole, land).min() < -0.02:
            faults.append(f"the land of {exit_.port} is open at {hole.id}")
    for other in plan.exits:
        if other.port != exit_.port and other.face == exit_.face:
            both = exit_.finish.land_mm + max(other.finish.land_mm, other.bore_mm)
            if np.linalg.norm(other.xyz_mm - exit_.xyz_mm) < both / 2 - 1e-6:
                faults.append(f"the lands of {exit_.port} and {other.port} overlap")
    return faults


def end_points(exit_mm, leave, finish):
    """Points on the cylinder of the cut, and on the disc of the land."""
    first = np.cross(leave, [0.3, 0.5, 0.8])
    first /= np.linalg.norm(first)
    turn = np.linspace(0.0, 2.0 * np.pi, 72, endpoint=False)
    ring = np.cos(turn)[:, None] * first + np.sin(turn)[:, None] * np.cross(leave, first)
    depths = np.linspace(0.0, finish.cut_depth_mm, 30)
    rim = exit_mm + 0.5 * finish.cut_mm * ring - depths[:, None, None] * np.asarray(leave)
    land = exit_mm + 0.5 * finish.land_mm * np.linspace(0.0, 1.0, 8)[:, None, None] * ring
    return rim.reshape(-1, 3), land.reshape(-1, 3)


def _pair_faults(scene, plan):
    """Pairs with a lead that come too near where the way between them along the channels is long."""
    merged = {frozenset(merge.branch_ids) for merge in plan.merges}
    ways = measure.node_ways(plan)
    widest = max(float(b.bore_mm.max()) for b in plan.branches)
    clear = 3.0 * (widest * (ROOF if scene.section.shape is not SectionShape.ROUND else 1.0) + WALL_MM + 0.3)
    faults = []
    for k, one in enumerate(plan.branches):
        for two in plan.branches[k + 1 :]:
            if BranchKind.LEAD not in (one.kind, two.kind) or frozenset((one.id, two.id)) in merged:
                continue
            if (wall := measure.apart(plan, one, two, clear, ways) - BAND_MM) < WALL_MM - 0.02:
                faults.append(f"{one.id} and {two.id} leave {wall:.3f} mm")
    return faults


class Refusal:
    """The port an error is about and the metal around its channels."""

    def __init__(self, scene, error):
        self.scene, self.error = scene, error
        self.name = re.search(r"\[\[port\]\] '([^']+)'", error.where).group(1)
        self.port = next(p for p in scene.ports if p.name == self.name)
        graph, wrapped = scene.graph, scene.wrapped
        self.node = next(n for n in graph.nodes if n.port == self.name)
        links = nx.MultiGraph()
        for branch, laid in zip(graph.branches, wrapped.branches, strict=True):
            links.add_edge(branch.start, branch.end, weight=laid.length_mm)
        ways = nx.single_source_dijkstra_path_length(links, self.node.id)
        samples, way, headings = [], [], []
        for branch, laid in zip(graph.branches, wrapped.branches, strict=True):
            p = laid.xyz_mm
            arc = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(p, axis=0), axis=1))])
            samples.append(p)
            way.append(np.minimum(ways[branch.start] + arc, ways[branch.end] + arc[-1] - arc))
            if branch.start == self.node.id:
                headings.append(p[0] - p[1])
            if branch.end == self.node.id:
                headings.append(p[-1] - p[-2])
        self.samples, self.way = np.concatenate(samples), np.concatenate(way)
        self.start = scene.carrier.point_mm(np.asarray(self.node.sheet_mm)[None], scene.depth_mm)[0]
        inward = scene.carrier.into_metal(np.asarray(self.node.sheet_mm)[None])[0]
        self.headings = [inward]
        if len(headings) == 1:
            ahead = headings[0] / np.linalg.norm(headings[0])
            side = inward - (inward @ ahead) * ahead
            side /= np.linalg.norm(side)
            turns = np.radians([0.0, 45.0, 90.0])
            self.headings = [np.cos(t) * ahead + np.sin(t) * side for t in turns]

    def spare(self, points, way=None, open_face=""):
        """Metal to spare around a channel of the least bore: faces but one, holes, channels as far as they count."""
        shape, least = self.scene.section.shape, np.full(len(points), np.inf)
        bands = BAND_MM + BUILD_MM
        for face in self.scene.blank.faces:
            if face.name != open_face:
                reach = reach_to(lambda p, f=face: face_distance(f, p), points, LEAST_MM, shape)
                least = np.minimum(least, face_distance(face, points) - reach - WALL_MM - bands)
        for hole in self.scene.blank.holes:
            reach = reach_to(lambda p, h=hole: hole_distance(h, p), points, LEAST_MM, shape)
            least = np.minimum(least, hole_distance(hole, points) - reach - hole.wall_mm - bands)
        keep = LEAST_MM + WALL_MM + bands
        counts = self.way > 3.0 * keep
        if counts.any():
            least = np.minimum(least, cKDTree(self.samples[counts]).query(points)[0] - keep)
        if way is not None:
            for sample, behind in zip(self.samples[~counts][::2], self.way[~counts][::2], strict=True):
                here = np.flatnonzero(way + behind > 3.0 * keep)
                near = np.linalg.norm(points[here] - sample, axis=1) - keep
                least[here] = np.minimum(least[here], near)
        return least

    def port_faces(self):
        given = self.port.exit_mm
        faces = [face for face in self.scene.blank.faces if face.role == "port"]
        if given is None:
            return faces
        return [min(faces, key=lambda f: abs(face_distance(f, np.array([given]))[0]))]


STEP_MM = 1.25


def flood_finds_none(refusal):
    """Whether no free voxels join the port to a port face (or the given exit), half a voxel's diagonal forgiven."""
    blank = refusal.scene.blank
    wide = max(np.abs(refusal.samples[:, :2]).max() + 40.0, 20.0)
    low, high = np.array([-wide, -wide, blank.z_mm[0]]), np.array([wide, wide, blank.z_mm[1]])
    shape = tuple(np.ceil((high - low) / STEP_MM).astype(int) + 1)
    points = low + STEP_MM * np.stack(np.meshgrid(*map(np.arange, shape), indexing="ij"), axis=-1).reshape(-1, 3)
    forgiven = 0.5 * np.sqrt(3.0) * STEP_MM
    inside = np.min([face_distance(face, points) for face in blank.faces], axis=0) > -forgiven
    points_in = points[inside]
    begin = np.linalg.norm(points_in - refusal.start, axis=1) < 2.0 * STEP_MM
    for face in refusal.port_faces():
        free = (refusal.spare(points_in, open_face=face.name) > -forgiven) | begin
        out = np.abs(face_distance(face, points_in)) < STEP_MM
        if refusal.port.exit_mm is not None:
            out &= np.linalg.norm(points_in - np.array(refusal.port.exit_mm), axis=1) < 2.0 * STEP_MM
        solid = np.zeros(len(points), dtype=bool)
        solid[np.flatnonzero(inside)[free]] = True
        pieces, _ = label(solid.reshape(shape), structure=np.ones((3, 3, 3)))
        pieces = pieces.ravel()[inside]
        if np.isin(pieces[out & (pieces > 0)], pieces[begin]).any():
            return False
    return True


def tree_finds_way(refusal, seed, straight_mm=0.5 * LEAST_MM, rounds=70, batch=700):
    """Whether a random tree of bends (1.5 bores) from the port finds a straight way out; other leads are ignored."""
    rng = np.random.default_rng(seed)
    radius = 1.5 * LEAST_MM
    place = np.repeat(refusal.start[None], len(refusal.headings), axis=0)
    heading, way = np.array(refusal.headings), np.zeros(len(refusal.headings))
    for _ in range(rounds):
        cell = np.unique(np.floor(np.column_stack([place / 3.0, heading * 1.5])), axis=0, return_inverse=True)[
            1
        ].ravel()
        weight = 1.0 / np.bincount(cell)[cell]
        pick = rng.choice(len(place), batch, p=weight / weight.sum())
        length = rng.uniform(1.5, 7.0, batch)
        bent = np.where(rng.random(batch) < 0.3, 1e-9, rng.uniform(0.2, 1.0, batch) / radius)
        side = np.cross(heading[pick], rng.normal(size=(batch, 3)))
        side /= np.linalg.norm(side, axis=1)[:, None]
        share = np.linspace(0.25, 1.0, 4)[:, None, None]
        turn = share * (length * bent)[:, None]
        line = place[pick] + (np.sin(turn) * heading[pick] + (1.0 - np.cos(turn)) * side) / bent[:, None]
        gone = np.broadcast_to(way[pick] + share[..., 0] * length, line.shape[:2])
        free = (refusal.spare(line.reshape(-1, 3), gone.ravel()) >= 0.0).reshape(4, batch).all(axis=0)
        angle = (length * bent)[:, None]
        ahead = np.cos(angle) * heading[pick] + np.sin(angle) * side
        place, heading = np.concatenate([place, line[-1][free]]), np.concatenate([heading, ahead[free]])
        way = np.concatenate([way, gone[-1][free]])
        if free.any() and _comes_out(refusal, line[-1][free], ahead[free], gone[-1][free], radius, straight_mm):
            return True
    return False


def _comes_out(refusal, place, heading, way, radius, straight_mm):
    """Whether one bend and a straight line lead any of the states out of a port face, or two onto the given exit."""
    given = refusal.port.exit_mm
    for face in refusal.port_faces():
        if given is None:
            out, corner = _outward(face, place), place
            for _ in range(3):
                turn = _angle(heading, out)
                corner = place + (radius * np.tan(0.5 * np.minimum(turn, 2.27)))[:, None] * heading
                out = _outward(face, corner)
            exits = corner + face_distance(face, corner)[:, None] * out
            chains = [np.stack([place, corner, exits], axis=1)]
        else:
            exit_mm = np.array(given)
            out = np.broadcast_to(_outward(face, exit_mm[None]), place.shape)
            chains = []
            for height in straight_mm + radius * np.array([0.3, 1.0, 1.6, 2.5]):
                last = exit_mm - height * out
                corner = place
                for _ in range(12):
                    turn = np.minimum(_angle(heading, last - corner), 2.27)
                    corner = place + (radius * np.tan(0.5 * turn) + 1e-4)[:, None] * heading
                chains.append(np.stack([place, corner, last, np.broadcast_to(exit_mm, place.shape)], axis=1))
        for chain in chains:
            for k in np.flatnonzero(_bendable(chain, radius, straight_mm)):
                line, slope = _rounded(chain[k], radius, out[k])
                if refusal.spare(line[-1:], open_face=face.name)[0] < 0.0:
                    continue
                gone = way[k] + np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(line, axis=0), axis=1))])
                onward = np.logical_and.accumulate((slope >= 0.5)[::-1])[::-1]
                spare = np.where(onward, refusal.spare(line, gone, face.name), refusal.spare(line, gone))
                if (spare >= 0.0).all():
                    return True
    return False


def _outward(face, points):
    step = 1e-5 * np.eye(3)
    out = -np.column_stack([face_distance(face, points + s) - face_distance(face, points - s) for s in step])
    return out / np.maximum(np.linalg.norm(out, axis=1), 1e-12)[:, None]


def _angle(a, b):
    return np.arctan2(np.linalg.norm(np.cross(a, b), axis=-1), (a * b).sum(axis=-1))


def _bendable(chain, radius, straight_mm):
    """Which corner chains (n, m, 3) can be rounded with `radius` and keep the straight end."""
    legs = np.diff(chain, axis=1)
    turn = _angle(legs[:, :-1], legs[:, 1:])
    cut = radius * np.tan(0.5 * np.minimum(turn, 3.0))
    left = np.linalg.norm(legs, axis=2)
    left[:, :-1] -= cut
    left[:, 1:] -= cut
    return (turn < 2.27).all(axis=1) & (left >= -1e-6).all(axis=1) & (left[:, -1] >= straight_mm)


def _rounded(chain, radius, out):
    """Points along one rounded corner chain, and the cosine of the way there against `out`."""
    points, ways = [chain[0]], []
    for a, b, c in zip(chain[:-2], chain[1:-1], chain[2:], strict=True):
        one, two = (b - a) / np.linalg.norm(b - a), (c - b) / np.linalg.norm(c - b)
        turn = float(_angle(one, two))
        begin = b - radius * np.tan(turn / 2) * one
        n = max(int(np.linalg.norm(begin - points[-1]) / 0.7), 1)
        points += [points[-1] + (begin - points[-1]) * k / n for k in range(1, n + 1)]
        side = two - np.cos(turn) * one
        side /= max(np.linalg.norm(side), 1e-12)
        for angle in np.linspace(0.0, turn, 14)[1:]:
            points.append(begin + radius * (np.sin(angle) * one + (1.0 - np.cos(angle)) * side))
    n = max(int(np.linalg.norm(chain[-1] - points[-1]) / 0.7), 1)
    points += [points[-1] + (chain[-1] - points[-1]) * k / n for k in range(1, n + 1)]
    line = np.array(points)
    ways = np.diff(line, axis=0)
    cosine = (ways @ out) / np.maximum(np.linalg.norm(ways, axis=1), 1e-12)
    return line, np.concatenate([cosine, cosine[-1:]])
