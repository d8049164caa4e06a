"""The [layout] table and the [[port]] tables of a job: the flat drawing and where coolant enters and leaves."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

from morph.core.errors import SettingError
from morph.core.tolerance import COINCIDE_MM
from morph.settings.job import (
    CoolantEnd,
    LayoutSettings,
    LevelRule,
    MirrorAt,
    PortSettings,
    Role,
    Rows,
    Samples,
    Seam,
    SeenFrom,
    WideRule,
)
from morph.settings.parse_end import END_KEYS, parse_end
from morph.settings.table import Table, show

SMALLEST_SHEET_MM, LARGEST_SHEET_MM = 1.0, 2000.0
FARTHEST_MM = 10_000.0
MOST_PORTS = 200
LONGEST_NAME_BYTES = 255
FINEST_PIXEL_MM = 0.01
OUTLINES = (".dxf", ".svg")
STATED = (".vti", *OUTLINES)
"""Formats that say themselves where their first row lies and what a value stands for."""

_PORT_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,39}")
_LAYOUT_KEYS = (
    "image",
    "size_mm",
    "rows",
    "samples",
    "seen_from",
    "channel",
    "level",
    "area_ratio",
    "seam",
    "mirror_at",
    "crop_mm",
    "pixel_mm",
    "wide",
)
_PORT_KEYS = ("name", "role", "at_mm", "exit_mm", "leave", *END_KEYS)


def parse_layout(values: Any, file: str, folder: Path) -> LayoutSettings:
    """Returns the [layout] settings.

    Args:
        values: the parsed table.
        file: base name of the job file, for messages.
        folder: the job file's folder; the image path is relative to it.

    Raises:
        SettingError: a setting is missing, unknown, wrong, or not available yet.
    """
    table = Table(values, file, "[layout]", _LAYOUT_KEYS)
    width_mm, height_mm = table.numbers("size_mm", 2, above=0.0, most=LARGEST_SHEET_MM)
    if min(width_mm, height_mm) < SMALLEST_SHEET_MM:
        table.refuse(
            "setting-range",
            "size_mm",
            expected=f"width and height of at least {SMALLEST_SHEET_MM:g} mm; no channel fits on less",
            found=f"[{width_mm:g}, {height_mm:g}] mm",
            do="Is size_mm in metres? All lengths are mm.",
        )
    level, image = _level(table), _image(table)
    says_itself = image.lower().endswith(STATED)
    return LayoutSettings(
        image=folder / image,
        size_mm=(width_mm, height_mm),
        rows=None if says_itself and not table.has("rows") else table.choice("rows", Rows, Rows.TOP_DOWN),
        samples=None if says_itself and not table.has("samples") else table.choice("samples", Samples, Samples.CELLS),
        seen_from=table.choice("seen_from", SeenFrom, SeenFrom.PART),
        channel=table.choice("channel", CoolantEnd, CoolantEnd.HIGH),
        level=level,
        area_ratio=_area_ratio(table, level),
        seam=table.choice("seam", Seam, Seam.OPEN),
        mirror_at=table.choice("mirror_at", MirrorAt, MirrorAt.NONE),
        crop_mm=_crop(table, (width_mm, height_mm)) if table.has("crop_mm") else None,
        pixel_mm=_pixel(table, image),
        wide=table.choice("wide", WideRule, WideRule.CAP),
    )


def _image(table: Table) -> str:
    image = table.text("image")
    if any(len(part.encode("utf-8", "replace")) > LONGEST_NAME_BYTES for part in Path(image).parts):
        table.refuse(
            "setting-text",
            "image",
            expected=f"file and folder names of at most {LONGEST_NAME_BYTES} bytes",
            do="Give the image a shorter name.",
        )
    return image


def _crop(table: Table, size_mm: tuple[float, float]) -> tuple[float, float, float, float]:
    """Returns left, bottom, right, top of the crop, within the image and at least 1 mm wide and high."""
    left, bottom, right, top = table.numbers("crop_mm", 4)
    whole = min(left, bottom) >= -COINCIDE_MM
    whole = whole and right <= size_mm[0] + COINCIDE_MM and top <= size_mm[1] + COINCIDE_MM
    if not whole or right - left < SMALLEST_SHEET_MM or top - bottom < SMALLEST_SHEET_MM:
        table.refuse(
            "crop-range",
            "crop_mm",
            expected=f"left, bottom, right, top within 0 to {size_mm[0]:g} and 0 to {size_mm[1]:g} mm, at least "
            f"{SMALLEST_SHEET_MM:g} mm apart",
            found=f"[{left:g}, {bottom:g}, {right:g}, {top:g}] mm",
            do="The image's origin is its lower left corner, x right, y up; size_mm stays that of the whole image.",
        )
    if table.raw("seam") == Seam.JOINED.value and max(left, size_mm[0] - right) > COINCIDE_MM:
        table.refuse(
            "setting-conflict",
            "crop_mm",
            expected='the whole width beside seam = "joined"',
            do="Crop only below and above, or leave the seam open.",
        )
    return max(left, 0.0), max(bottom, 0.0), min(right, size_mm[0]), min(top, size_mm[1])


def _pixel(table: Table, image: str) -> float | None:
    if not image.lower().endswith(OUTLINES):
        table.not_used(["pixel_mm"], f"beside an image; it is for outline drawings ({', '.join(OUTLINES)})")
        return None
    table.not_used(["samples"], "beside an outline drawing, which is filled on cells")
    return table.optional_number("pixel_mm", least=FINEST_PIXEL_MM, most=10.0)


def _level(table: Table) -> LevelRule | float:
    value = table.raw("level")
    if not table.has("level"):
        return LevelRule.HALF
    if isinstance(value, str):
        return table.choice("level", LevelRule)
    if isinstance(value, bool) or not isinstance(value, int | float):
        table.refuse(
            "setting-type",
            "level",
            expected='"half", "keep-area" or a number between 0 and 1',
            do='Write level = "half" unless the optimiser used another level.',
        )
    level = table.number("level", unit="")
    if not 0.0 < level < 1.0:
        table.refuse(
            "setting-range", "level", expected="a number between 0 and 1, both excluded", do='Use "half" when unsure.'
        )
    return level


def _area_ratio(table: Table, level: LevelRule | float) -> float | None:
    if level != LevelRule.KEEP_AREA:
        table.not_used(["area_ratio"], 'unless level is "keep-area"')
        return None
    ratio = table.optional_number("area_ratio", above=0.0, unit="")
    if ratio is not None and not ratio < 1.0:
        table.refuse("setting-range", "area_ratio", expected="less than 1", do="Coolant area by whole sheet area.")
    return ratio


def parse_ports(values: list[Any], file: str, size_mm: tuple[float, float]) -> tuple[PortSettings, ...]:
    """Returns the ports in the order of the file: at least one in and one out, names unique, all on the sheet.

    Args:
        values: the parsed [[port]] tables.
        file: base name of the job file, for messages.
        size_mm: width and height of the sheet.

    Raises:
        SettingError: a port is wrong, two share a name or a place, or no port lets coolant in or out.
    """
    ports: list[PortSettings] = []
    for index, item in enumerate(values, 1):
        port = _port(item, file, index, size_mm)
        for other in ports:
            _require_distinct(port, other, f"{file}: [[port]] {index}")
        ports.append(port)
    for role in (Role.IN, Role.OUT):
        if not any(port.role is role for port in ports):
            raise SettingError(
                f"port-none-{role.value}",
                expected=f'at least one [[port]] with role = "{role.value}"',
                found="none",
                where=f"{file}: [[port]]",
                do=f"Declare where coolant {'enters' if role is Role.IN else 'leaves'}.",
            )
    return tuple(ports)


def _require_distinct(port: PortSettings, other: PortSettings, where: str) -> None:
    if port.name.lower() == other.name.lower():
        raise SettingError(
            "port-name-twice",
            expected="a name of its own for every port",
            found=f"{show(port.name)} a second time",
            where=f"{where} name",
            do="Rename one of them.",
        )
    if all(abs(a - b) <= COINCIDE_MM for a, b in zip(port.at_mm, other.at_mm, strict=True)):
        raise SettingError(
            "port-place-twice",
            expected="a place of its own for every port",
            found=f"[{port.at_mm[0]:g}, {port.at_mm[1]:g}] mm, where port {other.name} already is",
            where=f"{where} at_mm",
            do="Move or remove one of them.",
        )


def _port(values: Any, file: str, index: int, size_mm: tuple[float, float]) -> PortSettings:
    table = Table(values, file, f"[[port]] {index}", _PORT_KEYS)
    name = table.text("name")
    if not _PORT_NAME.fullmatch(name):
        table.refuse(
            "port-name",
            "name",
            expected="at most 40 letters, digits, points, hyphens and underscores, a letter or digit first",
            do="The name becomes part of ids in the result files; choose a plain one.",
        )
    return PortSettings(
        name=name,
        role=table.choice("role", Role),
        at_mm=_place(table, size_mm),
        exit_mm=_triple(table, "exit_mm") if table.has("exit_mm") else None,
        leave=direction(table, "leave") if table.has("leave") else None,
        end=parse_end(table),
    )


def _place(table: Table, size_mm: tuple[float, float]) -> tuple[float, float]:
    x_mm, y_mm = table.numbers("at_mm", 2)
    inside = all(-COINCIDE_MM <= at <= size + COINCIDE_MM for at, size in zip((x_mm, y_mm), size_mm, strict=True))
    if not inside:
        turned = -COINCIDE_MM <= x_mm <= size_mm[1] + COINCIDE_MM and -COINCIDE_MM <= y_mm <= size_mm[0] + COINCIDE_MM
        swapped = " With width and height swapped it would lie on the sheet: check size_mm." if turned else ""
        table.refuse(
            "port-outside",
            "at_mm",
            expected=f"a place on the sheet, x 0 to {size_mm[0]:g} mm and y 0 to {size_mm[1]:g} mm",
            found=f"[{x_mm:g}, {y_mm:g}] mm",
            do=f"The sheet's origin is its lower left corner, x to the right, y up.{swapped}",
        )
    return min(max(x_mm, 0.0), size_mm[0]), min(max(y_mm, 0.0), size_mm[1])


def _triple(table: Table, key: str) -> tuple[float, float, float]:
    x, y, z = table.numbers(key, 3, least=-FARTHEST_MM, most=FARTHEST_MM)
    return x, y, z


def direction(table: Table, key: str) -> tuple[float, float, float]:
    """Returns a required direction of three numbers, not all zero, scaled so that the largest is at most 1.

    Raises:
        SettingError: missing, wrong, or without length.
    """
    x, y, z = table.numbers(key, 3, unit="")
    largest = max(abs(x), abs(y), abs(z))
    if largest < 1e-9:
        table.refuse(
            "setting-zero-direction", key, expected="a direction with some length", do="Write it like [0, 0, 1]."
        )
    return (x, y, z) if largest <= 1.0 else (x / largest, y / largest, z / largest)
