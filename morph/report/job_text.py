"""The job as it ran, written as a job file: every default included, ready to be pasted and changed.

What is not set stands as a comment, because TOML has no word for it.
"""

from __future__ import annotations

import dataclasses
from enum import Enum
from pathlib import PurePath
from typing import Any

from morph.settings.job import (
    BoxBlankSettings,
    ConeSettings,
    CylinderBlankSettings,
    FaceSealEnd,
    Job,
    MeshBlankSettings,
    PortSettings,
    ThreadEnd,
)

Rows = list[tuple[str, Any]]


def toml_value(value: Any) -> str:
    r"""Returns a setting as TOML.

    >>> print(toml_value((10.0, 0.5)), toml_value('a "b"'), toml_value(True))
    [10.0, 0.5] "a \"b\"" true
    """
    if isinstance(value, Enum):
        value = value.value
    if isinstance(value, PurePath):
        value = value.name
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return repr(value)
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return "{ " + ", ".join(f"{key} = {toml_value(item)}" for key, item in _rows(value)) + " }"
    if isinstance(value, tuple | list):
        return "[" + ", ".join(toml_value(item) for item in value) + "]"
    return '"' + "".join(_escaped(letter) for letter in str(value)) + '"'


def _escaped(letter: str) -> str:
    if letter in '\\"':
        return "\\" + letter
    return f"\\u{ord(letter):04x}" if ord(letter) < 0x20 or ord(letter) == 0x7F else letter


def _rows(record: Any, without: tuple[str, ...] = ()) -> Rows:
    return [(f.name, getattr(record, f.name)) for f in dataclasses.fields(record) if f.name not in without]


def _port(port: PortSettings) -> Rows:
    rows, end = _rows(port, ("end",)), port.end
    if isinstance(end, ThreadEnd):
        return [*rows, ("end", "thread"), ("thread", end.designation), *_rows(end, ("designation",))]
    if isinstance(end, FaceSealEnd):
        return [*rows, ("end", "face-seal"), *_rows(end)]
    return [*rows, ("end", "plain")]


def _blank(job: Job) -> Rows:
    shape = job.blank.shape
    kind = "carrier"
    if isinstance(shape, CylinderBlankSettings):
        kind = "cylinder"
    if isinstance(shape, BoxBlankSettings):
        kind = "box"
    if isinstance(shape, MeshBlankSettings):
        kind = "mesh"
    return [("kind", kind), *_rows(shape), *_rows(job.blank, ("shape", "stock_mm"))]


def _tables(job: Job) -> list[tuple[str, Rows]]:
    carrier = "cone" if isinstance(job.carrier, ConeSettings) else "cylinder"
    return [
        ("", [("name", job.name)]),
        ("[layout]", _rows(job.layout)),
        *(("[[port]]", _port(port)) for port in job.ports),
        ("[carrier]", [("kind", carrier), *_rows(job.carrier)]),
        ("[section]", _rows(job.section)),
        ("[print]", [("process", job.printing.profile.name), ("build_direction", job.printing.build_direction)]),
        ("[service]", _rows(job.service)),
        ("[blank]", _blank(job)),
        *(("[[hole]]", _rows(hole)) for hole in job.holes),
        ("[quality]", _rows(job.quality)),
        *(("[[accept]]", _rows(accepted)) for accepted in job.accepts),
        *(("[[keep_out]]", _rows(keep_out)) for keep_out in job.keep_outs),
        *_coolant(job),
    ]


def _coolant(job: Job) -> list[tuple[str, Rows]]:
    if job.coolant is None:
        return []
    fluid = job.coolant.fluid
    name = fluid.kind.value + (f"-{fluid.glycol_percent:g}" if fluid.glycol_percent else "")
    own = [] if fluid.own is None else _rows(fluid.own)
    return [("[coolant]", [("fluid", name), *own, *_rows(job.coolant, ("fluid",))])]


def job_text(job: Job) -> str:
    """Returns `job` as the text of a job file; a process profile of its own is named, not included."""
    lines: list[str] = []
    for head, rows in _tables(job):
        lines += ["", head] if head else []
        lines += [f"# {key}: not set" if value is None else f"{key} = {toml_value(value)}" for key, value in rows]
        if head == "[blank]" and job.blank.stock_mm:
            stock = ", ".join(f"{toml_value(name)} = {toml_value(mm)}" for name, mm in job.blank.stock_mm)
            lines.append(f"stock_mm = {{ {stock} }}")
    return "\n".join(lines) + "\n"
