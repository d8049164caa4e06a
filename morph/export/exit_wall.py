"""The metal around an exit, and how straight the channel runs behind it.

The rim of an opening is taken as the circle of its bore, square to the direction in which the
channel leaves, laid along that direction through the exit's centre.
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

STRAIGHT_WITHIN_MM = 0.05
"""A lead counts as straight while its centreline keeps within this of the exit's axis."""


def rim_mm(exit_: Exit) -> Floats:
    """Returns the rim of `exit_` as (360, 3) points in mm."""
    least = int(np.argmin(np.abs(exit_.leave)))
    across = np.cross(exit_.leave, np.eye(3)[least])
    across /= np.linalg.norm(across)
    along = np.cross(exit_.leave, across)
    angle = np.arange(RIM_POINTS) * (2.0 * np.pi / RIM_POINTS)
    circle = np.cos(angle)[:, None] * across + np.sin(angle)[:, None] * along
    rim: Floats = exit_.xyz_mm + 0.5 * exit_.bore_mm * circle
    return rim


def least_wall_around(exit_: Exit, exits: Sequence[Exit], blank: Blank) -> tuple[float, str]:
    """Returns the least metal in mm around the opening of `exit_`, and the name of what lies behind it.

    Args:
        exit_: the exit in question.
        exits: all exits of the insert.
        blank: its faces (but the exit's own) and holes are the neighbours.
    """
    rim = rim_mm(exit_)
    found = [
        (float(face.distance_mm(rim).min()), f"face:{face.name}") for face in blank.faces if face.name != exit_.face
    ]
    found += [(float(distance_to_hole_mm(hole, rim).min()), f"hole:{hole.id}") for hole in blank.holes]
    for other in exits:
        if other.node != exit_.node:
            gap = np.linalg.norm(rim[:, None, :] - rim_mm(other)[None, :, :], axis=2)
            apart = float(np.linalg.norm(exit_.xyz_mm - other.xyz_mm)) - 0.5 * (exit_.bore_mm + other.bore_mm)
            found.append((min(float(gap.min()), apart) if apart < 0.0 else float(gap.min()), f"exit:{other.port}"))
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
