"""A job file as a valid Job: every key is checked before any stage starts.

What the job format knows but this version cannot do yet is refused as ``not-available``; nothing
in a job file is ever ignored.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

from morph.core.errors import SettingError
from morph.settings.job import Job, PrintSettings, QualitySettings, ServiceSettings
from morph.settings.parse_carrier import parse_carrier
from morph.settings.parse_coolant import parse_coolant
from morph.settings.parse_layout import MOST_PORTS, direction, parse_layout, parse_ports
from morph.settings.parse_shape import (
    LARGEST_BORE_MM,
    LARGEST_WALL_MM,
    MOST_HOLES,
    parse_blank,
    parse_holes,
    parse_section,
)
from morph.settings.parse_sheet import MOST_ACCEPTS, MOST_KEEP_OUTS, parse_accepts, parse_keep_outs
from morph.settings.profile import read_profile
from morph.settings.table import Table
from morph.settings.toml_file import parse_toml, read_bounded

DEFAULT_PROCESS = "steel-40um"
FINEST_H_MM, COARSEST_H_MM = 0.05, 1.0

_NAME = re.compile(r"[A-Za-z0-9_-][A-Za-z0-9._-]{0,63}")
_TABLES = (
    "layout",
    "port",
    "carrier",
    "section",
    "print",
    "service",
    "blank",
    "hole",
    "quality",
    "accept",
    "keep_out",
    "coolant",
)
_LATER = {"moulding": "The thermal stage"}
_WALLS = ("wall_face_mm", "wall_between_mm", "wall_outer_mm", "wall_hole_mm")


def read_job(path: Path) -> Job:
    """Returns the valid Job of a TOML file.

    Args:
        path: the job file, UTF-8 TOML of at most 1 MB.

    Raises:
        InputError: there is no such file, it cannot be read, is too large or not text.
        SettingError: it is not TOML; or a setting is missing, unknown, wrong, in conflict with another, or
            belongs to a part that is not available yet.
    """
    content = read_bounded(path, "a job file (TOML)", "job")
    return parse_job(content, path)


def parse_job(content: bytes, path: Path) -> Job:
    """Returns the valid Job of a job file's bytes; `path` gives its name and the folder of relative paths.

    Raises:
        InputError: the bytes are not UTF-8 text.
        SettingError: as for `read_job`.
    """
    file, folder = path.name, path.parent
    top = Table(parse_toml(content, file), file, "", ("name", *_TABLES), _LATER)
    layout = parse_layout(_table(top, "layout"), file, folder)
    return Job(
        name=_name(top),
        file=path,
        layout=layout,
        ports=parse_ports(top.tables("port", MOST_PORTS), file, layout.sheet_mm),
        carrier=parse_carrier(_table(top, "carrier"), file),
        printing=_printing(top.raw("print") if top.has("print") else {}, file, folder),
        section=parse_section(top.raw("section") if top.has("section") else {}, file),
        service=_service(top.raw("service") if top.has("service") else {}, file),
        blank=parse_blank(top.raw("blank") if top.has("blank") else {}, file, folder),
        holes=parse_holes(top.tables("hole", MOST_HOLES), file),
        quality=_quality(top.raw("quality") if top.has("quality") else {}, file),
        accepts=parse_accepts(top.tables("accept", MOST_ACCEPTS), file),
        coolant=parse_coolant(top.raw("coolant"), file, folder) if top.has("coolant") else None,
        keep_outs=parse_keep_outs(top.tables("keep_out", MOST_KEEP_OUTS), file),
    )


def _table(top: Table, key: str) -> Any:
    if not top.has(key):
        raise SettingError(
            "setting-missing",
            expected=f"a table [{key}]",
            found="none",
            where=top.file,
            do=f"Add [{key}]; `morph start IMAGE` writes a first job file.",
        )
    return top.raw(key)


def _name(top: Table) -> str:
    name = top.text("name")
    if not _NAME.fullmatch(name):
        top.refuse(
            "job-name",
            "name",
            expected="1 to 64 letters, digits, points, hyphens and underscores, not starting with a point",
            do="The name becomes the folder of the results; choose a plain one.",
        )
    return name


def _printing(values: Any, file: str, folder: Path) -> PrintSettings:
    table = Table(values, file, "[print]", ("process", "build_direction"))
    process = table.text("process") if table.has("process") else DEFAULT_PROCESS
    profile = read_profile(process, folder)
    if not table.has("build_direction"):
        return PrintSettings(profile)
    return PrintSettings(profile, direction(table, "build_direction"))


def _service(values: Any, file: str) -> ServiceSettings:
    table = Table(values, file, "[service]", (*_WALLS, "wall_face_bores", "smallest_bore_mm"))
    walls = {key: table.number(key, 3.0, least=0.0, most=LARGEST_WALL_MM) for key in _WALLS}
    return ServiceSettings(
        wall_face_bores=table.number("wall_face_bores", 1.0, least=0.0, most=20.0, unit="bores"),
        smallest_bore_mm=table.number("smallest_bore_mm", 3.0, above=0.0, most=LARGEST_BORE_MM),
        **walls,
    )


def _quality(values: Any, file: str) -> QualitySettings:
    table = Table(values, file, "[quality]", ("h_mm",))
    return QualitySettings(table.optional_number("h_mm", least=FINEST_H_MM, most=COARSEST_H_MM))
