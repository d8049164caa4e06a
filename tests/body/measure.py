"""Measures a plan again by other means: dense points, every wall written out, no code of the body stage's room."""

from __future__ import annotations

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


def apart(plan, one, two, clear_mm):
    """Least wall between two branches, leaving out what is within `clear_mm` along either of a shared node."""
    shared = {one.start, one.end} & {two.start, two.end}
    kept = []
    for branch in (one, two):
        points, bore, at = dense(branch)
        keep = np.ones(len(points), dtype=bool)
        if branch.start in shared:
            keep &= at > clear_mm
        if branch.end in shared:
            keep &= at[-1] - at > clear_mm
        kept.append((points[keep], bore[keep]))
    (a, bore_a), (b, bore_b) = kept
    if not len(a) or not len(b):
        return np.inf
    distance, near = cKDTree(b).query(a)
    return float((distance - bore_a / 2 - bore_b[near] / 2).min())


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
