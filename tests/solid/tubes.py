"""The independent way to the same channels: a polygonal tube per branch, balls at the nodes, united by manifold3d.

Shares no code with the field: rings of points square to the centreline, joined by triangles. Rings have the
area of the circle they stand for.
"""

from __future__ import annotations

import manifold3d
import numpy as np


def same_area(radius: float, sides: int) -> float:
    angle = 2.0 * np.pi / sides
    return radius * np.sqrt(angle / np.sin(angle))


def tube(xyz: np.ndarray, radius: np.ndarray, sides: int) -> manifold3d.Manifold:
    """A closed tube with flat ends through `xyz (k, 3)`; its rings lie in the planes that halve the bends."""
    step = np.diff(xyz, axis=0)
    step = step / np.linalg.norm(step, axis=1)[:, None]
    tangent = np.vstack([step[:1], step[:-1] + step[1:], step[-1:]])
    tangent /= np.linalg.norm(tangent, axis=1)[:, None]
    side = np.cross(tangent[0], np.eye(3)[np.abs(tangent[0]).argmin()])
    rings = []
    for point, t, r in zip(xyz, tangent, radius, strict=True):
        side = side - (side @ t) * t
        side /= np.linalg.norm(side)
        other = np.cross(t, side)
        angle = 2.0 * np.pi * np.arange(sides) / sides
        rings.append(point + same_area(r, sides) * (np.cos(angle)[:, None] * side + np.sin(angle)[:, None] * other))
    vertices = np.vstack([*rings, xyz[:1], xyz[-1:]])
    k = np.arange(sides)
    n = (k + 1) % sides
    faces = []
    for i in range(len(xyz) - 1):
        a, b = i * sides, (i + 1) * sides
        faces += [np.column_stack([a + k, a + n, b + n]), np.column_stack([a + k, b + n, b + k])]
    last = (len(xyz) - 1) * sides
    faces.append(np.column_stack([n, k, np.full(sides, len(vertices) - 2)]))
    faces.append(np.column_stack([last + k, last + n, np.full(sides, len(vertices) - 1)]))
    body = manifold3d.Manifold(manifold3d.Mesh64(vertices, np.vstack(faces).astype(np.uint64)))
    assert body.status() == manifold3d.Error.NoError
    return body


def tube_union(plan, sides: int = 64) -> manifold3d.Manifold:
    """All branches, leads and overshoots of a plan as one body."""
    beyond = {item.node: item for item in plan.exits}
    parts, widest = [], {}
    for item in plan.branches:
        xyz, bore = item.xyz_mm, item.bore_mm
        for node, width in ((item.start, bore[0]), (item.end, bore[-1])):
            widest[node] = max(widest.get(node, 0.0), float(width))
        if item.end in beyond:
            leave = beyond[item.end]
            xyz = np.vstack([xyz, leave.xyz_mm + leave.overshoot_mm * leave.leave])
            bore = np.append(bore, bore[-1])
        parts.append(tube(xyz, 0.5 * bore, sides))
    for node in plan.nodes:
        if node.id not in beyond:
            radius = 0.5 * widest[node.id]
            parts.append(manifold3d.Manifold.sphere(radius, sides).translate(node.xyz_mm.tolist()))
    return manifold3d.Manifold.batch_boolean(parts, manifold3d.OpType.Add)
