"""Tubes of 32 sides along the centrelines of a plan, united by manifold3d: the yardstick of the channel solid.

One closed tube per branch, rings square to the bisector of its polyline, each with its own bore; a ball of 32 sides at
every node. Samples are thinned to a chord tolerance in place and radius first (Ramer 1972; Douglas and Peucker 1973).
No roofs, no blends, no test of anything.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

SIDES = 32
CHORD_MM = 0.01


@dataclass
class Tubes:
    """The united body, and the triangles that went in and came out."""

    body: Any
    triangles_in: int
    triangles_out: int


def unite_tubes(plan, chord_mm=CHORD_MM, blank=None) -> Tubes:
    """Returns the union of the tubes of `plan`, cut at the faces of the manifold3d body `blank` when given."""
    import manifold3d

    beyond = {exit_.node: exit_ for exit_ in plan.exits}
    parts, balls, count = [], {}, 0
    for branch in plan.branches:
        kept = thin(np.column_stack([branch.xyz_mm, 0.5 * branch.bore_mm]), chord_mm)
        xyz, radius = branch.xyz_mm[kept], 0.5 * branch.bore_mm[kept]
        for node, end in ((branch.start, 0), (branch.end, -1)):
            if node in beyond:
                far = beyond[node].xyz_mm + beyond[node].overshoot_mm * beyond[node].leave
                at = 0 if end == 0 else len(xyz)
                xyz, radius = np.insert(xyz, at, far, axis=0), np.insert(radius, at, radius[end])
            else:
                place = branch.xyz_mm[end]
                balls[node] = (max(radius[end], balls.get(node, (0.0,))[0]), place)
        vertices, triangles = tube(xyz, radius)
        count += len(triangles)
        parts.append(manifold3d.Manifold(manifold3d.Mesh(np.float32(vertices), np.uint32(triangles))))
    for radius, place in balls.values():
        parts.append(manifold3d.Manifold.sphere(radius, SIDES).translate(place.tolist()))
        count += parts[-1].num_tri()
    body = manifold3d.Manifold.batch_boolean(parts, manifold3d.OpType.Add)
    if blank is not None:
        body = body ^ blank
    assert body.status() == manifold3d.Error.NoError
    return Tubes(body, count, len(body.to_mesh().tri_verts))


def thin(rows, chord_mm):
    """Which rows of a polyline are needed to keep the others within a chord tolerance of it."""
    kept = np.zeros(len(rows), bool)
    kept[[0, -1]] = True
    waiting = [(0, len(rows) - 1)]
    while waiting:
        a, b = waiting.pop()
        if b - a < 2:
            continue
        way = rows[b] - rows[a]
        share = np.clip((rows[a + 1 : b] - rows[a]) @ way / max(way @ way, 1e-24), 0.0, 1.0)
        away = np.linalg.norm(rows[a + 1 : b] - rows[a] - share[:, None] * way, axis=1)
        if away.max() > chord_mm:
            middle = a + 1 + int(away.argmax())
            kept[middle] = True
            waiting += [(a, middle), (middle, b)]
    return kept


def tube(xyz, radius):
    """A closed tube along a polyline, frames carried along without a twist."""
    step = np.diff(xyz, axis=0)
    step /= np.linalg.norm(step, axis=1)[:, None]
    tangent = np.vstack([step[:1], step[:-1] + step[1:], step[-1:]])
    tangent /= np.linalg.norm(tangent, axis=1)[:, None]
    side = np.empty_like(xyz)
    axis = np.cross(tangent[0], np.eye(3)[np.abs(tangent[0]).argmin()])
    for i, along in enumerate(tangent):
        axis = axis - (axis @ along) * along
        axis /= np.linalg.norm(axis)
        side[i] = axis
    turn = 2.0 * np.pi * np.arange(SIDES) / SIDES
    across = np.cross(tangent, side)
    ring = np.cos(turn)[None, :, None] * side[:, None] + np.sin(turn)[None, :, None] * across[:, None]
    vertices = (xyz[:, None] + radius[:, None, None] * ring).reshape(-1, 3)
    first, k = SIDES * np.arange(len(xyz) - 1)[:, None], np.arange(SIDES)
    a, b = first + k, first + (k + 1) % SIDES
    near = np.stack([a, b, b + SIDES], axis=-1).reshape(-1, 3)
    far = np.stack([a, b + SIDES, a + SIDES], axis=-1).reshape(-1, 3)
    k, last = np.arange(1, SIDES - 1), SIDES * (len(xyz) - 1)
    caps = [np.column_stack([0 * k, k + 1, k]), last + np.column_stack([0 * k, k, k + 1])]
    return vertices, np.concatenate([near, far, *caps])
