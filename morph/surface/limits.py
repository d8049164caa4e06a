"""What every carrier about an axis requires of its sizes."""

from __future__ import annotations

import math

from morph.core.errors import SettingError

LEAST_RADIUS_MM = 2.0
"""Least centreline radius: below it opposite sides of the sheet meet at the axis (common practice, no source)."""

TURN_SLACK = 1e-6
"""Relative slack on a sheet that is exactly one turn wide."""


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
