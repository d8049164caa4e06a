"""What every carrier about an axis requires of its sizes, and how a full wrap closes."""

from __future__ import annotations

import math

from morph.core.errors import GeometryError, SettingError

LEAST_RADIUS_MM = 2.0
"""Least centreline radius: below it opposite sides of the sheet meet at the axis (common practice, no source)."""

TURN_SLACK = 1e-6
"""Relative slack on a sheet that is exactly one turn wide."""

SEAM_SLACK = 1e-3
"""A joined sheet may miss the circumference by this share; it is stretched to close exactly."""


def closed_radius_mm(width_mm: float, true_radius_mm: float, where_true: str) -> float:
    """Returns the radius at which a sheet `width_mm` wide closes exactly.

    Args:
        width_mm: width of the sheet.
        true_radius_mm: radius where the sheet keeps its lengths.
        where_true: names that place in messages.

    Raises:
        GeometryError: `seam-width` when the width is more than 0.1 % off one turn.

    >>> round(closed_radius_mm(138.3, 22.0, "at depth"), 4)
    22.0111
    """
    turn_mm = 2.0 * math.pi * true_radius_mm
    if abs(width_mm / turn_mm - 1.0) > SEAM_SLACK:
        raise GeometryError(
            "seam-width",
            expected=f"a sheet {turn_mm:.3f} mm wide (within 0.1 %), one turn {where_true}, "
            f"radius {true_radius_mm:.3f} mm",
            found=f"{width_mm:.3f} mm",
            where='[layout] size_mm with seam = "joined"',
            do=f"Make the sheet {turn_mm:.3f} mm wide, or choose the radius and the depth so that "
            f"the radius there is {width_mm / (2.0 * math.pi):.3f} mm.",
        )
    return width_mm / (2.0 * math.pi)


def require_positive(radius_mm: float, size_mm: tuple[float, float], depth_mm: float) -> None:
    """Raises SettingError `carrier-not-positive` unless radius, sheet and depth are positive numbers."""
    named = (
        ("[carrier] radius_mm", radius_mm),
        ("[layout] size_mm, width", size_mm[0]),
        ("[layout] size_mm, height", size_mm[1]),
        ("[carrier] depth", depth_mm),
    )
    for where, value in named:
        if not (math.isfinite(value) and value > 0.0):
            raise SettingError(
                "carrier-not-positive",
                expected="a length above 0 mm",
                found=f"{value} mm",
                where=where,
                do="Give the size of the real part in mm.",
            )
