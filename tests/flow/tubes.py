"""Closed tubes, plans and small nets for the tests of the 3D flow solution."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from morph.geometry.mesh import Mesh
from morph.settings.job import Role
from tests.solid import plans


def tube_mesh(points_mm, radius_mm: float, sides: int = 96) -> Mesh:
    """A closed tube along a polyline (k, 3), its rings of the same area as the circle."""
    points = np.asarray(points_mm, float)
    tangent = np.gradient(points, axis=0)
    tangent /= np.linalg.norm(tangent, axis=1)[:, None]
    side = np.cross(tangent[0], [0.3, 0.5, 0.8])
    angle = 2.0 * np.pi * np.arange(sides) / sides
    widen = 1.0 / np.sqrt(np.sin(2.0 * np.pi / sides) / (2.0 * np.pi / sides))
    rings, triangles, k = [], [], len(points)
    for point, along in zip(points, tangent, strict=True):
        side = side - along * (side @ along)
        side /= np.linalg.norm(side)
        ring = np.cos(angle)[:, None] * side + np.sin(angle)[:, None] * np.cross(along, side)
        rings.append(point + widen * radius_mm * ring)
    for i in range(k - 1):
        for j in range(sides):
            p, q = i * sides + j, i * sides + (j + 1) % sides
            triangles += [[p, q, q + sides], [p, q + sides, p + sides]]
    first, last, end = k * sides, k * sides + 1, (k - 1) * sides
    for j in range(sides):
        triangles += [[first, (j + 1) % sides, j], [last, end + j, end + (j + 1) % sides]]
    return Mesh(np.concatenate([*rings, points[:1], points[-1:]]), np.array(triangles))


def tube_plan(points_mm, bore_mm: float):
    """A plan of two leads that meet in the middle of a polyline (k, 3): in at its start, out at its end."""
    points = np.asarray(points_mm, float)
    n = len(points) // 2
    out_of_start, out_of_end = points[0] - points[1], points[-1] - points[-2]
    leads = [
        plans.branch("L-in", "m", "a", points[: n + 1][::-1], bore_mm, lead=True),
        plans.branch("L-out", "m", "b", points[n:], bore_mm, lead=True),
    ]
    exits = [
        ("in", "in", "L-in", "-x", out_of_start / np.linalg.norm(out_of_start), 0.0),
        ("out", "out", "L-out", "+x", out_of_end / np.linalg.norm(out_of_end), 0.0),
    ]
    return plans.plan_of(leads, exits)


def straight(direction, length_mm: float, bore_mm: float):
    """(mesh, plan) of a straight round tube."""
    unit = np.asarray(direction, float) / np.linalg.norm(direction)
    points = np.linspace(0.0, length_mm, 4 * int(length_mm) + 1)[:, None] * unit
    return tube_mesh(points[::8], 0.5 * bore_mm), tube_plan(points, bore_mm)


def bend(bend_radius_mm: float, sweep_deg: float, bore_mm: float):
    """(mesh, plan, length of the centreline) of a round bend."""
    sweep = np.radians(sweep_deg)
    angle = np.linspace(0.0, sweep, int(bend_radius_mm * sweep / 0.25) + 1)
    points = bend_radius_mm * np.stack([np.cos(angle), np.sin(angle), 0.0 * angle], axis=1)
    return tube_mesh(points, 0.5 * bore_mm), tube_plan(points, bore_mm), bend_radius_mm * sweep


def with_roles(plan, *roles: str):
    """The plan with other roles at its exits."""
    exits = tuple(replace(exit_, role=Role(role)) for exit_, role in zip(plan.exits, roles, strict=True))
    return replace(plan, exits=exits)


def _curve(start, middle, end, n=80):
    t = np.linspace(0.0, 1.0, n)[:, None]
    return (1 - t) ** 2 * np.array(start) + 2 * t * (1 - t) * np.array(middle) + t**2 * np.array(end)


def unequal_wye():
    """(plan, blank): one way in, two bowed tapered branches of unequal bore, two ways out."""
    z, fork = 15.0, (20.0, 20.0, 15.0)
    one, two = (45.0, 30.0, z), (45.0, 10.0, z)
    items = [
        plans.branch("B1", "A", "C", _curve(fork, (30.0, 32.0, z), one), np.linspace(4.5, 3.2, 80)),
        plans.branch("B2", "A", "D", _curve(fork, (28.0, 8.0, z), two), np.linspace(5.0, 4.4, 80)),
        plans.branch("L-in", "A", "X", plans.sampled([fork, (0.0, 20.0, z)], 5.5), 5.5, lead=True),
        plans.branch("L-one", "C", "Y", plans.sampled([one, (60.0, 30.0, z)], 3.2), 3.2, lead=True),
        plans.branch("L-two", "D", "Z", plans.sampled([two, (60.0, 10.0, z)], 4.4), 4.4, lead=True),
    ]
    exits = [
        ("in", "in", "L-in", "-x", (-1.0, 0.0, 0.0), 0.0),
        ("one", "out", "L-one", "+x", (1.0, 0.0, 0.0), 0.0),
        ("two", "out", "L-two", "+x", (1.0, 0.0, 0.0), 0.0),
    ]
    return plans.plan_of(items, exits), plans.box_blank()


def ladder(rung_bores, header_bore_mm: float = 5.0):
    """(plan, blank): rungs of these bores between two headers, in and out at opposite ends."""
    at, low, high, z = np.linspace(12.0, 48.0, len(rung_bores)), 8.0, 32.0, 12.0
    items = []
    for i, (x, bore) in enumerate(zip(at, rung_bores, strict=True)):
        items.append(plans.branch(f"R{i}", f"A{i}", f"C{i}", plans.sampled([(x, low, z), (x, high, z)], bore), bore))
        for name, row, y in (("H", "A", low), ("K", "C", high)):
            if i:
                path = plans.sampled([(at[i - 1], y, z), (x, y, z)], header_bore_mm)
                items.append(plans.branch(f"{name}{i}", f"{row}{i - 1}", f"{row}{i}", path, header_bore_mm))
    last = len(at) - 1
    for name, node, end, path in (
        ("L-in", "A0", "X", [(at[0], low, z), (0.0, low, z)]),
        ("L-out", f"C{last}", "Z", [(at[-1], high, z), (60.0, high, z)]),
    ):
        items.append(plans.branch(name, node, end, plans.sampled(path, header_bore_mm), header_bore_mm, lead=True))
    exits = [
        ("in", "in", "L-in", "-x", (-1.0, 0.0, 0.0), 0.0),
        ("out", "out", "L-out", "+x", (1.0, 0.0, 0.0), 0.0),
    ]
    return plans.plan_of(items, exits), plans.box_blank()
