"""Measures a plan again by other means: dense points, every wall written out, no code of the body stage's room."""

from __future__ import annotations

import networkx as nx
import numpy as np
from scipy.spatial import cKDTree

STEP_MM = 0.15


def dense(branch):
    """Points every 0.15 mm along a branch's polyline, with the bore there and the way from its start."""
    arc = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1))])
    at = np.linspace(0.0, arc[-1], int(np.ceil(arc[-1] / STEP_MM)) + 1)
    points = np.column_stack([np.interp(at, arc, branch.xyz_mm[:, k]) for k in range(3)])
    return points, np.interp(at, arc, branch.bore_mm), at


def face_walls(blank, plan, branch):
    """Yields (face, wall of every dense point, limit needs its bore) for faces; the way out of its own exit left out."""
    points, bore, _ = dense(branch)
    radius = np.hypot(points[:, 0], points[:, 1])
    exits = {exit_.lead: exit_ for exit_ in plan.exits}
    for face in blank.faces:
        if hasattr(face, "radius_mm"):
            distance = face.radius_mm - radius if face.metal_inside else radius - face.radius_mm
        elif hasattr(face, "cone"):
            angle = face.cone.half_angle_rad
            outside = np.cos(angle) * (radius - face.cone.radius_mm - points[:, 2] * np.tan(angle))
            distance = -outside if face.metal_inside else outside
        else:
            distance = (face.origin_mm - points) @ face.normal
        counts = np.ones(len(points), dtype=bool)
        if branch.id in exits and exits[branch.id].face == face.name:
            nearing = -np.diff(distance) / np.linalg.norm(np.diff(points, axis=0), axis=1)
            flat = np.flatnonzero(nearing < 0.5 - 1e-3)
            counts[(flat[-1] + 2 if len(flat) else 0) :] = False
        yield face, (distance - bore / 2)[counts], bore[counts]


def hole_walls(blank, branch):
    """Yields (hole, wall of every dense point): a hole is sampled as points on its axis, kept inside its ends."""
    points, bore, _ = dense(branch)
    for hole in blank.holes:
        along = np.linspace(0.0, hole.length_mm, 2000)
        distance, _ = cKDTree(hole.start_mm + along[:, None] * hole.axis).query(points)
        yield hole, distance - hole.diameter_mm / 2 - bore / 2


def node_ways(plan):
    """Shortest ways along the branches between all nodes, by a general-purpose graph library."""
    graph = nx.MultiGraph()
    for branch in plan.branches:
        graph.add_edge(branch.start, branch.end, weight=dense(branch)[2][-1])
    return dict(nx.all_pairs_dijkstra_path_length(graph))


def apart(plan, one, two, clear_mm, ways=None):
    """Least wall between two branches over places more than `clear_mm` apart along the channels, inf if wider than 12 mm."""
    ways = ways or node_ways(plan)
    (a, bore_a, at_a), (b, bore_b, at_b) = dense(one), dense(two)
    close = cKDTree(a).sparse_distance_matrix(cKDTree(b), 12.0, output_type="ndarray")
    i, j = close["i"], close["j"]
    way = np.full(len(i), np.inf)
    for near, rest in ((one.start, at_a[i]), (one.end, at_a[-1] - at_a[i])):
        for far, tail in ((two.start, at_b[j]), (two.end, at_b[-1] - at_b[j])):
            way = np.minimum(way, rest + ways[near].get(far, np.inf) + tail)
    wall = close["v"] - bore_a[i] / 2 - bore_b[j] / 2
    return float(wall[way > clear_mm].min(initial=np.inf))


def sharpest_bend_bores(branch, reach=4):
    """Least radius over bore of circles through samples a few steps apart (exact on an arc)."""
    p = branch.xyz_mm
    if len(p) < 2 * reach + 1:
        return np.inf
    a, b, c = p[: -2 * reach], p[reach:-reach], p[2 * reach :]
    area = np.linalg.norm(np.cross(b - a, c - b), axis=1)
    product = np.linalg.norm(b - a, axis=1) * np.linalg.norm(c - b, axis=1) * np.linalg.norm(c - a, axis=1)
    radius = np.where(area > 1e-9 * product, product / np.maximum(2 * area, 1e-12), np.inf)
    return float((radius / branch.bore_mm[reach:-reach]).min())
