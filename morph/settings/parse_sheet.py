"""The [[accept]] and [[keep_out]] tables of a job: what is said about places on the sheet besides its ports."""

from __future__ import annotations

import re
from typing import Any

from morph.settings.job import AcceptSettings, KeepOutSettings
from morph.settings.table import Table

MOST_ACCEPTS = 1000
MOST_KEEP_OUTS = 200
MOST_CORNERS = 1000
FARTHEST_MM = 10_000.0
LARGEST_CLEARANCE_MM = 100.0

_ID = {"bridge": re.compile(r"G[1-9][0-9]{0,5}"), "trim": re.compile(r"D[1-9][0-9]{0,5}")}
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,39}")


def parse_accepts(values: list[Any], file: str) -> tuple[AcceptSettings, ...]:
    """Returns the accepted suggestions in the order of the file.

    Args:
        values: the parsed [[accept]] tables.
        file: base name of the job file, for messages.

    Raises:
        SettingError: a table holds not exactly one of bridge and trim, or no id and no place.
    """
    return tuple(_accept(item, file, number) for number, item in enumerate(values, 1))


def _accept(values: Any, file: str, number: int) -> AcceptSettings:
    table = Table(values, file, f"[[accept]] {number}", ("bridge", "trim", "at_mm"))
    given = [key for key in _ID if table.has(key)]
    if len(given) != 1:
        table.refuse(
            "accept-what",
            "",
            expected='one of bridge = "G1" and trim = "D1"',
            found=" and ".join(given) or "neither",
            do="Write one table per suggestion; the report lists their ids and places.",
        )
    key = given[0]
    value = table.raw(key)
    at_mm = _place(table, "at_mm") if table.has("at_mm") else None
    if isinstance(value, list):
        table.not_used(["at_mm"], f"beside a place as {key}")
        value, at_mm = True, _place(table, key)
    if value is True and at_mm is not None:
        return AcceptSettings(**{key: True}, at_mm=at_mm)
    if not isinstance(value, str) or not _ID[key].fullmatch(value):
        table.refuse(
            "accept-id",
            key,
            expected=f'an id such as "{"G1" if key == "bridge" else "D1"}", or true with at_mm = [x, y]',
            do="The report lists the suggestions and dead ends with ids and places.",
        )
    return AcceptSettings(**{key: value}, at_mm=at_mm)


def _place(table: Table, key: str) -> tuple[float, float]:
    x_mm, y_mm = table.numbers(key, 2, least=-FARTHEST_MM, most=FARTHEST_MM)
    return x_mm, y_mm


def parse_keep_outs(values: list[Any], file: str) -> tuple[KeepOutSettings, ...]:
    """Returns the keep-outs in the order of the file, each a disc or a polygon that does not cross itself.

    Args:
        values: the parsed [[keep_out]] tables.
        file: base name of the job file, for messages.

    Raises:
        SettingError: a table is neither a disc nor a polygon, or its outline is none.
    """
    found: list[KeepOutSettings] = []
    for number, item in enumerate(values, 1):
        keep_out = _keep_out(item, file, number)
        if any(keep_out.name.lower() == other.name.lower() for other in found):
            Table(item, file, f"[[keep_out]] {number}", _KEEP_OUT_KEYS).refuse(
                "keep-out-name-twice",
                "name",
                expected="a name of its own for every keep-out",
                found=f"{keep_out.name} a second time",
                do="Rename one of them.",
            )
        found.append(keep_out)
    return tuple(found)


_KEEP_OUT_KEYS = ("name", "at_mm", "diameter_mm", "polygon_mm", "clearance_mm")


def _keep_out(values: Any, file: str, number: int) -> KeepOutSettings:
    table = Table(values, file, f"[[keep_out]] {number}", _KEEP_OUT_KEYS)
    name = table.text("name") if table.has("name") else f"keep-out-{number}"
    if not _NAME.fullmatch(name):
        table.refuse(
            "keep-out-name",
            "name",
            expected="at most 40 letters, digits, points, hyphens and underscores, a letter or digit first",
            do="Choose a plain name.",
        )
    clearance_mm = table.number("clearance_mm", 0.0, least=0.0, most=LARGEST_CLEARANCE_MM)
    if table.has("polygon_mm"):
        table.not_used(["at_mm", "diameter_mm"], "beside polygon_mm")
        return KeepOutSettings(name, polygon_mm=_polygon(table), clearance_mm=clearance_mm)
    if not table.has("at_mm"):
        table.refuse(
            "keep-out-shape",
            "",
            expected="a disc (at_mm and diameter_mm) or a polygon (polygon_mm)",
            found="neither",
            do="Write at_mm = [x, y] and diameter_mm, or polygon_mm = [[x, y], [x, y], [x, y]].",
        )
    diameter_mm = table.number("diameter_mm", above=0.0, most=FARTHEST_MM)
    return KeepOutSettings(name, _place(table, "at_mm"), diameter_mm, None, clearance_mm)


def _polygon(table: Table) -> tuple[tuple[float, float], ...]:
    value = table.raw("polygon_mm")
    if not isinstance(value, list) or not 3 <= len(value) <= MOST_CORNERS:
        table.refuse(
            "setting-type",
            "polygon_mm",
            expected=f"a list of 3 to {MOST_CORNERS} corners",
            do="Write it like [[0.0, 0.0], [10.0, 0.0], [5.0, 8.0]].",
        )
    corners = []
    for number, corner in enumerate(value, 1):
        row = Table({"corner": corner}, table.file, f"{table.label} polygon_mm {number}", ("corner",))
        corners.append(_place(row, "corner"))
    if corners[0] == corners[-1]:
        corners.pop()
    _require_simple(table, corners)
    return tuple(corners)


def _require_simple(table: Table, corners: list[tuple[float, float]]) -> None:
    """Raises unless the corners enclose an area and no two edges cross or touch."""
    from shapely import Polygon
    from shapely.validation import explain_validity

    outline = Polygon(corners) if len(corners) >= 3 else None
    if outline is None or not outline.is_valid or outline.area < 1e-6:
        table.refuse(
            "keep-out-outline",
            "polygon_mm",
            expected="corners in order around an area, edges that do not cross",
            found="no area" if outline is None or outline.is_valid else explain_validity(outline),
            do="Give the corners one after the other, as a pencil would draw the outline.",
        )
