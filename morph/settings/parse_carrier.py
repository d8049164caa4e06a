"""The [carrier] table of a job: the guide surface the sheet is laid on."""

from __future__ import annotations

from typing import Any

from morph.settings.job import CarrierSettings, ConeMap, ConeSettings, Metal, TrueAt
from morph.settings.parse_surface import parse_depths
from morph.settings.table import Table

LARGEST_RADIUS_MM = 5000.0
STEEPEST_DEG = 80.0
"""Half angles nearer to 90 degrees are discs, on which a meridian hardly rises."""
FLATTEST_DEG = 0.01
"""Half angles nearer to 0 are cylinders: over 100 mm of height the radius changes by less than 0.02 mm."""

_KEYS = ("kind", "radius_mm", "half_angle_deg", "metal", "depth_mm", "wall_to_face_mm", "true_at", "map")
_LATER = {
    "profile_mm": "The revolved carrier",
    "file": "The free-form carrier",
    "anchor_mm": "The free-form carrier",
    "up": "The free-form carrier",
    "metal_at_mm": "The free-form carrier",
}
_KINDS_LATER = {"revolved": "The revolved carrier", "freeform": "The free-form carrier"}


def parse_carrier(values: Any, file: str) -> CarrierSettings | ConeSettings:
    """Returns the [carrier] settings of a cylinder or a cone.

    Raises:
        SettingError: a setting is missing, unknown, wrong, of another kind, or not available yet.
    """
    kind = values.get("kind") if isinstance(values, dict) else None
    if isinstance(kind, str) and kind in _KINDS_LATER:
        Table({"kind": kind}, file, "[carrier]", ["kind"]).not_available("kind", _KINDS_LATER[kind])
    table = Table(values, file, "[carrier]", _KEYS, _LATER)
    kind = table.word("kind", ["cylinder", "cone"])
    depth_mm, wall_mm = parse_depths(table)
    radius_mm = table.number("radius_mm", above=0.0, most=LARGEST_RADIUS_MM)
    metal = table.choice("metal", Metal)
    true_at = table.choice("true_at", TrueAt, TrueAt.DEPTH)
    if kind == "cylinder":
        table.not_used(["half_angle_deg", "map"], 'when kind is "cylinder"')
        return CarrierSettings(radius_mm, metal, depth_mm, wall_mm, true_at)
    return ConeSettings(
        radius_mm=radius_mm,
        half_angle_deg=_half_angle_deg(table),
        metal=metal,
        depth_mm=depth_mm,
        wall_to_face_mm=wall_mm,
        true_at=true_at,
        map=table.choice("map", ConeMap, ConeMap.FLAT),
    )


def _half_angle_deg(table: Table) -> float:
    angle = table.number("half_angle_deg", unit="deg")
    if not FLATTEST_DEG <= abs(angle) < STEEPEST_DEG:
        table.refuse(
            "setting-range",
            "half_angle_deg",
            expected=f"more than -{STEEPEST_DEG:g} and less than {STEEPEST_DEG:g} degrees, "
            f"and at least {FLATTEST_DEG:g} degrees off 0",
            do='Above 0 widens upwards, below 0 narrows; write kind = "cylinder" for a straight wall.',
        )
    return angle
