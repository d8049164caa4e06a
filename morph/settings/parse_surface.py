"""The [carrier] tables of surfaces that are not cylinders or cones: revolved profiles and free-form files."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from morph.settings.job import FreeformSettings, Least, Metal, RevolvedSettings, TrueAt
from morph.settings.table import Table

LARGEST_MM = 5000.0
MOST_POINTS = 2000
"""Points of a profile: more say nothing that a smooth curve through these does not."""

_DEPTH_KEYS = ("depth_mm", "wall_to_face_mm", "true_at")
REVOLVED_KEYS = ("kind", "profile_mm", "metal", *_DEPTH_KEYS)
FREEFORM_KEYS = ("kind", "file", "anchor_mm", "up", "up_at_mm", "metal_at_mm", "least", *_DEPTH_KEYS)


def parse_depths(table: Table) -> tuple[float | None, float | None]:
    """Returns depth_mm and wall_to_face_mm, exactly one of them given.

    Raises:
        SettingError: `depth-choice`, or a number out of range.
    """
    if table.has("depth_mm") == table.has("wall_to_face_mm"):
        both = table.has("depth_mm")
        table.refuse(
            "depth-choice",
            "depth_mm",
            expected="exactly one of depth_mm and wall_to_face_mm",
            found="both" if both else "neither",
            do="Remove one of the two." if both else "Give the depth of the centreline or the wall to the face.",
        )
    depth_mm = table.optional_number("depth_mm", above=0.0, most=LARGEST_MM)
    return depth_mm, table.optional_number("wall_to_face_mm", above=0.0, most=LARGEST_MM)


def parse_revolved(values: Any, file: str) -> RevolvedSettings:
    """Returns the [carrier] settings of a revolved surface.

    Raises:
        SettingError: a setting is missing, unknown, wrong or out of range.
    """
    table = Table(values, file, "[carrier]", REVOLVED_KEYS)
    table.word("kind", ["revolved"])
    depth_mm, wall_mm = parse_depths(table)
    return RevolvedSettings(
        profile_mm=_profile(table),
        metal=table.choice("metal", Metal),
        depth_mm=depth_mm,
        wall_to_face_mm=wall_mm,
        true_at=table.choice("true_at", TrueAt, TrueAt.DEPTH),
    )


def _profile(table: Table) -> tuple[tuple[float, float], ...]:
    rows = table.require("profile_mm")
    example = "Write it like [[30.0, -40.0], [32.0, 0.0], [30.0, 40.0]], from the lowest point upwards."
    if not isinstance(rows, list) or not 2 <= len(rows) <= MOST_POINTS:
        count = f"{len(rows)} rows" if isinstance(rows, list) else None
        expected = f"a list of 2 to {MOST_POINTS} rows [r, z]"
        table.refuse("setting-type", "profile_mm", expected=expected, found=count, do=example)
    points = []
    for k, row in enumerate(rows):
        line = Table({"row": row}, table.file, f"[carrier] profile_mm, row {k + 1}:", ["row"])
        r, z = line.numbers("row", 2, least=-LARGEST_MM, most=LARGEST_MM)
        points.append((r, z))
    return tuple(points)


def parse_freeform(values: Any, file: str, folder: Path) -> FreeformSettings:
    """Returns the [carrier] settings of a free-form surface.

    Args:
        values: the table.
        file: base name of the job file, for messages.
        folder: of the job file; the surface's file is relative to it.

    Raises:
        SettingError: a setting is missing, unknown, wrong or out of range; `up-choice` unless the heading is given
            in exactly one way.
    """
    table = Table(values, file, "[carrier]", FREEFORM_KEYS)
    table.word("kind", ["freeform"])
    depth_mm, wall_mm = parse_depths(table)
    anchor = _point(table, "anchor_mm")
    return FreeformSettings(
        file=folder / table.text("file"),
        anchor_mm=anchor,
        up=_up(table, anchor),
        metal_at_mm=_point(table, "metal_at_mm"),
        depth_mm=depth_mm,
        wall_to_face_mm=wall_mm,
        true_at=table.choice("true_at", TrueAt, TrueAt.DEPTH),
        least=table.choice("least", Least, Least.RMS),
    )


def _point(table: Table, key: str) -> tuple[float, float, float]:
    x, y, z = table.numbers(key, 3, least=-LARGEST_MM, most=LARGEST_MM)
    return (x, y, z)


def _up(table: Table, anchor: tuple[float, float, float]) -> tuple[float, float, float]:
    """Returns the direction of sheet y: `up` itself, or from the anchor to the point `up_at_mm`."""
    if table.has("up") == table.has("up_at_mm"):
        both = table.has("up")
        table.refuse(
            "up-choice",
            "up",
            expected="exactly one of up (a direction) and up_at_mm (a point above the anchor on the sheet)",
            found="both" if both else "neither",
            do="Remove one of the two." if both else "Give the direction of sheet y.",
        )
    if table.has("up"):
        x, y, z = table.numbers("up", 3, least=-LARGEST_MM, most=LARGEST_MM, unit="")
        way, key = (x, y, z), "up"
    else:
        to = _point(table, "up_at_mm")
        way, key = (to[0] - anchor[0], to[1] - anchor[1], to[2] - anchor[2]), "up_at_mm"
    if math.hypot(*way) < 1e-9:
        table.refuse(
            "setting-range", key, expected="a direction", found="no length", do="Give a direction such as [0, 0, 1]."
        )
    return way
