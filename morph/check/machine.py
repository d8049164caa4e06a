"""Whether the insert fits the machine, posed along the build direction and turned about it."""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats, unit_rows
from morph.core.verdict import Outcome, Verdict, judge
from morph.geometry.mesh import Mesh
from morph.settings.profile import Profile

TURN_STEP_DEG = 0.5


def upright_frame(direction: Floats) -> Floats:
    """Returns a rotation (3, 3) whose rows are x, y of the plate and the build direction `direction (3,)`."""
    up = unit_rows(np.asarray(direction, dtype=np.float64)[None, :])[0]
    side = np.zeros(3)
    side[int(np.argmin(np.abs(up)))] = 1.0
    x = unit_rows((side - (side @ up) * up)[None, :])[0]
    return np.stack([x, np.cross(up, x), up])


def plan_hull_mm(plan_mm: Floats) -> Floats:
    """Returns the corners (k, 2) of the convex hull of points (n, 2); all points when they lie on a line."""
    from scipy.spatial import ConvexHull, QhullError

    try:
        return np.asarray(plan_mm[ConvexHull(plan_mm).vertices], dtype=np.float64)
    except QhullError:
        return plan_mm


def best_turn(plan_mm: Floats, room_mm: tuple[float, float]) -> tuple[float, float, float]:
    """Returns width, depth and slack in mm of points (n, 2) turned so that the slack to `room_mm` is largest.

    Tried are all multiples of TURN_STEP_DEG and the hull's own edges, where the least box lies; around the best
    of them a hundredth of that step.
    """
    hull = plan_hull_mm(plan_mm)
    edges = np.roll(hull, -1, axis=0) - hull
    along = np.mod(-np.arctan2(edges[:, 1], edges[:, 0]), np.pi)
    coarse = np.concatenate([np.radians(np.arange(0.0, 180.0, TURN_STEP_DEG)), along, along + 0.5 * np.pi])
    best = _best_angle(hull, coarse, room_mm)
    fine = best + np.radians(TURN_STEP_DEG) * np.linspace(-1.0, 1.0, 201)
    width, depth, slack = _turned(hull, np.array([_best_angle(hull, np.append(best, fine), room_mm)]), room_mm)
    return float(width[0]), float(depth[0]), float(slack[0])


def _turned(hull: Floats, angle: Floats, room_mm: tuple[float, float]) -> tuple[Floats, Floats, Floats]:
    """Returns width, depth and slack (k,) of the hull (n, 2) turned by `angle (k,)` in rad."""
    x = np.outer(np.cos(angle), hull[:, 0]) - np.outer(np.sin(angle), hull[:, 1])
    y = np.outer(np.sin(angle), hull[:, 0]) + np.outer(np.cos(angle), hull[:, 1])
    width, depth = np.ptp(x, axis=1), np.ptp(y, axis=1)
    return width, depth, np.minimum(room_mm[0] - width, room_mm[1] - depth)


def _best_angle(hull: Floats, angle: Floats, room_mm: tuple[float, float]) -> float:
    """Returns the first of the angles (k,) with the largest slack; slacks equal to 1e-9 mm are the same."""
    return float(angle[np.argmax(np.round(_turned(hull, angle, room_mm)[2], 9))])


def check_machine(mesh: Mesh, profile: Profile, direction: Floats) -> list[Verdict]:
    """Returns the `machine` row: the least slack between the posed mesh and the build volume."""
    posed = mesh.vertices_mm @ upright_frame(direction).T
    x, y, z = profile.machine_mm
    width, depth, slack = best_turn(posed[:, :2], (x.value, y.value))
    height = float(np.ptp(posed[:, 2]))
    slack = min(slack, z.value - height)
    outcome = judge(slack, 0.0, 0.0, "least")
    return [
        Verdict(
            "machine",
            outcome,
            f"Posed to print the insert measures {width:.1f} x {depth:.1f} x {height:.1f} mm; the machine holds "
            f"{x.value:.0f} x {y.value:.0f} x {z.value:.0f} mm: the least clearance along a side is {slack:.1f} mm.",
            value=slack,
            unit="mm",
            limit=0.0,
            source=x.source,
            hint="" if outcome is Outcome.PASS else "Choose a larger machine, another build direction, or split it.",
        )
    ]
