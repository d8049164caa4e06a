"""Channels drawn as closed outlines in a DXF file, through the library ezdxf."""

from __future__ import annotations

import io
import itertools
from typing import Any

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import InputError
from morph.read.image_fault import damaged, not_its_kind, too_large
from morph.read.outline import CLOSED_MM, FLAT_MM, Outlines

DRAWN = ("LINE", "ARC", "CIRCLE", "ELLIPSE", "SPLINE", "LWPOLYLINE", "POLYLINE", "HATCH", "SOLID")
MOST_ENTITIES = 50_000
BINARY_MAGIC = b"AutoCAD Binary DXF"


def read_dxf(content: bytes, name: str) -> Outlines:
    """Returns the outlines of the model space: closed curves, and open ones to be joined end to end.

    The drawing's unit ($INSUNITS) is turned into mm; without one the numbers are mm. The drawing's origin is the
    sheet's lower left corner.

    Raises:
        InputError: no DXF, damaged, too large, or the library to read it is not installed.
    """
    try:
        import ezdxf
        from ezdxf import disassemble, units
    except ImportError as error:
        raise InputError(
            "reader-missing",
            expected="the library ezdxf, which reads DXF files",
            found="none installed",
            where=name,
            do="Install it with: pip install morph-channels[drawings]",
        ) from error
    if b"SECTION" not in content[:4096] and not content.startswith(BINARY_MAGIC):
        raise not_its_kind(".dxf", name)
    try:
        document = _document(ezdxf, content)
        parts = disassemble.recursive_decompose(document.modelspace())
        entities = list(itertools.islice(parts, MOST_ENTITIES + 1))
        if len(entities) > MOST_ENTITIES:
            raise too_large(f"more than {MOST_ENTITIES} entities", name)
        scale = units.conversion_factor(document.units, ezdxf.enums.InsertUnits.Millimeters) if document.units else 1.0
        rings, lines, left = _split(entities, scale)
    except InputError:
        raise
    except Exception as error:  # the library on hostile bytes
        raise damaged("a complete DXF file", "missing or broken data", name) from error
    unit = f"unit of the drawing {scale:g} mm" if document.units else "no unit in the drawing, taken as mm"
    listed = ", ".join(f"{count} {kind}" for kind, count in sorted(left.items()))
    remarks = (f"Left out of the drawing, as no outline: {listed}.",) if left else ()
    return Outlines(tuple(rings), tuple(lines), f"DXF drawing, {unit}, origin at the sheet's lower left", remarks)


def _document(ezdxf: Any, content: bytes) -> Any:
    if content.startswith(BINARY_MAGIC):
        from ezdxf.lldxf.tagger import binary_tags_loader

        tags = binary_tags_loader(content)
        return ezdxf.document.Drawing.load(tags)
    from ezdxf import recover

    document, _ = recover.read(io.BytesIO(content))
    return document


def _split(entities: list[Any], scale: float) -> tuple[list[Floats], list[Floats], dict[str, int]]:
    """Returns closed outlines and open lines in mm, and how many entities of other kinds there are."""
    from ezdxf import path

    rings: list[Floats] = []
    lines: list[Floats] = []
    left: dict[str, int] = {}
    for entity in entities:
        kind = entity.dxftype()
        if kind not in DRAWN:
            left[kind] = left.get(kind, 0) + 1
            continue
        for whole in path.from_hatch(entity) if kind == "HATCH" else [path.make_path(entity)]:
            for part in whole.sub_paths():
                corner = np.array([(v.x, v.y) for v in part.flattening(FLAT_MM / scale, 8)]) * scale
                if len(corner) < 2:
                    continue
                closed = kind in {"HATCH", "SOLID"} or float(np.hypot(*(corner[0] - corner[-1]))) <= CLOSED_MM
                if closed:
                    same = float(np.hypot(*(corner[0] - corner[-1]))) <= CLOSED_MM
                    rings.append(corner[:-1] if same else corner)
                else:
                    lines.append(corner)
    return rings, lines, left
