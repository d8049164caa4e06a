"""The metal around an exit, and how straight the channel runs behind it.

The rim of an opening is the circle of its bore, or of the wider one that is cut there later (a thread
counts from its major diameter), square to the direction in which the channel leaves; below the
face it is repeated over the depth of the cut.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from morph.body.blank import Blank
from morph.body.hole import distance_to_hole_mm
from morph.body.plan import Exit, PlanBranch
from morph.core.arrays import Floats

RIM_POINTS = 360
"""Points on a rim: a distance read at them is at most 4e-5 bores too large."""

LEVELS = 24
"""Rims over the depth of a cut."""

STRAIGHT_WITHIN_MM = 0.05
"""A lead counts as straight while its centreline keeps within this of the exit's axis."""


def rim_mm(exit_: Exit) -> Floats:
    """Returns the rim of `exit_`, and of what is cut there, as (360 n, 3) points in mm; the face's own rim first."""
    least = int(np.argmin(np.abs(exit_.leave)))
    across = np.cross(exit_.leave, np.eye(3)[least])
    across /= np.linalg.norm(across)
    along = np.cross(exit_.leave, across)
    angle = np.arange(RIM_POINTS) * (2.0 * np.pi / RIM_POINTS)
    circle = np.cos(angle)[:, None] * across + np.sin(angle)[:, None] * along
    finish = exit_.finish
    levels = np.linspace(0.0, finish.cut_depth_mm, LEVELS if finish.cut_depth_mm > 0.0 else 1)
    rim = 0.5 * max(exit_.bore_mm, finish.cut_mm) * circle - levels[:, None, None] * exit_.leave
    return np.asarray((exit_.xyz_mm + rim).reshape(-1, 3), dtype=np.float64)


def least_wall_around(exit_: Exit, exits: Sequence[Exit], blank: Blank) -> tuple[float, str]:
    """Returns the least metal in mm around the opening of `exit_`, and the name of what lies behind it.

    Args:
        exit_: the exit in question.
        exits: all exits of the insert.
        blank: its faces (but the exit's own) and holes are the neighbours.
    """
    from scipy.spatial import cKDTree

    rim = rim_mm(exit_)
    found = [
        (float(face.distance_mm(rim).min()), f"face:{face.name}") for face in blank.faces if face.name != exit_.face
    ]
    found += [(float(distance_to_hole_mm(hole, rim).min()), f"hole:{hole.id}") for hole in blank.holes]
    for other in exits:
        if other.node != exit_.node:
            gap = float(np.min(cKDTree(rim).query(rim_mm(other))[0]))
            widths = sum(max(one.bore_mm, one.finish.cut_mm) for one in (exit_, other))
            apart = float(np.linalg.norm(exit_.xyz_mm - other.xyz_mm)) - 0.5 * widths
            found.append((min(gap, apart) if apart < 0.0 else gap, f"exit:{other.port}"))
    if not found:
        return float("nan"), ""
    return min(found)


def straight_run_mm(lead: PlanBranch, exit_: Exit) -> float:
    """Returns how far behind the exit the centreline of `lead` keeps to the exit's axis, in mm."""
    offset = lead.xyz_mm[::-1] - exit_.xyz_mm
    depth = -np.einsum("ij,j->i", offset, exit_.leave)
    aside = np.linalg.norm(offset + depth[:, None] * exit_.leave, axis=1)
    off_axis = np.flatnonzero(aside > STRAIGHT_WITHIN_MM)
    last = len(depth) - 1 if len(off_axis) == 0 else max(int(off_axis[0]) - 1, 0)
    return max(float(depth[last]), 0.0)
