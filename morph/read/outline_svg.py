"""Channels drawn as outlines in an SVG file, through the library svgelements.

The XML is read once for itself before the library sees it: no document type, no entities, no copies of elements
(`use`), no scripts. The sheet's upper left corner is the drawing's; one user unit is as long as the drawing's width
in mm says, or 1 mm when it says nothing.
"""

from __future__ import annotations

import importlib
import io
import math
import re
from typing import Any

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import InputError
from morph.read.image_fault import damaged, not_its_kind
from morph.read.outline import CLOSED_MM, FLAT_MM, Outlines
from morph.read.xml_events import read_xml

FORBIDDEN = ("use", "script", "foreignObject", "image", "animate", "animateTransform", "set")
PER_INCH = 25.4
"""Dots per inch at which a dot is 1 mm."""
MOST_CHORDS = 2000
UNITS_MM = {"": 1.0, "px": 1.0, "mm": 1.0, "cm": 10.0, "in": 25.4, "pt": 25.4 / 72.0, "pc": 25.4 / 6.0}
_LENGTH = re.compile(r"([0-9]*\.?[0-9]+(?:[eE][+-]?[0-9]+)?)(mm|cm|in|pt|pc|px|)")


def read_svg(content: bytes, name: str) -> Outlines:
    """Returns the outlines of the shapes in an SVG.

    Raises:
        InputError: no SVG, unsafe XML, damaged, or the library to read it is not installed.
    """
    try:
        svgelements: Any = importlib.import_module("svgelements")
    except ImportError as error:
        raise InputError(
            "reader-missing",
            expected="the library svgelements, which reads SVG files",
            found="none installed",
            where=name,
            do="Install it with: pip install morph-channels[drawings]",
        ) from error
    root = _require_plain(content, name)
    try:
        svg = svgelements.SVG.parse(io.BytesIO(content), reify=True, ppi=PER_INCH)
        rings, lines, left = _split(svgelements, svg)
        size_mm, scale = _size_mm(root, svg)
    except Exception as error:  # the library on hostile bytes
        raise damaged("a complete SVG file", "missing or broken data", name) from error
    stated = root.get("width", "").strip().endswith(("mm", "cm", "in", "pt", "pc")) and size_mm is not None
    unit = "mm by the drawing's width" if stated else "no length unit in the drawing, user units taken as mm"
    remarks = (f"Left out of the drawing, as no outline: {left} other elements.",) if left else ()
    note = f"SVG drawing, {unit}, y down from the sheet's upper left corner"
    rings, lines = [ring * scale for ring in rings], [line * scale for line in lines]
    return Outlines(tuple(rings), tuple(lines), note, remarks, size_mm, flip=True)


def _size_mm(root: dict[str, str], svg: Any) -> tuple[tuple[float, float] | None, float]:
    """Returns width and height in mm by the root's own numbers, None without, and what lengths are to be scaled by.

    The library rounds the length of an inch to six digits; the scale takes that off.
    """
    sides = [_LENGTH.fullmatch(root.get(key, "").strip()) for key in ("width", "height")]
    if sides[0] is None or sides[1] is None:
        return None, 1.0
    width, height = (float(side[1]) * UNITS_MM[side[2]] for side in sides if side is not None)
    return (width, height), width / float(svg.width)


def _require_plain(content: bytes, name: str) -> dict[str, str]:
    """Returns the attributes of the root after the whole XML is found plain."""
    root: dict[str, str] = {}
    tags: list[str] = []

    def start(tag: str, attributes: dict[str, str]) -> None:
        if not tags:
            if tag != "svg":
                raise not_its_kind(".svg", name)
            root.update(attributes)
        if tag in FORBIDDEN:
            raise InputError(
                "outline-svg-kind",
                expected="shapes drawn where they are",
                found=f"an element <{tag}>",
                where=name,
                do="Expand copies and images into paths before saving.",
            )
        tags.append(tag)

    read_xml(content, name, start, lambda _: None, lambda _: None)
    return root


def _split(svgelements: Any, svg: Any) -> tuple[list[Floats], list[Floats], int]:
    """Returns closed outlines, open lines, and how many shown elements are neither."""
    rings: list[Floats] = []
    lines: list[Floats] = []
    left = 0
    for element in svg.elements():
        if isinstance(element, svgelements.Text):
            left += 1
        if not isinstance(element, svgelements.Shape) or _hidden(element):
            continue
        filled = element.fill is not None and element.fill.value is not None
        for part in abs(svgelements.Path(element)).as_subpaths():
            corner = _corners(svgelements, svgelements.Path(part))
            if len(corner) < 2:
                continue
            same = math.dist(corner[0], corner[-1]) <= CLOSED_MM
            if same or filled:
                rings.append(corner[:-1] if same else corner)
            else:
                lines.append(corner)
    return rings, lines, left


def _hidden(element: Any) -> bool:
    values = element.values
    return values.get("display") == "none" or values.get("visibility") in {"hidden", "collapse"}


def _corners(svgelements: Any, path: Any) -> Floats:
    """Returns the corners (k, 2) of a path, curves cut into chords that stay near."""
    found: list[tuple[float, float]] = []
    for segment in path:
        if isinstance(segment, svgelements.Move) or segment.start is None or segment.end is None:
            continue
        straight = isinstance(segment, svgelements.Line | svgelements.Close)
        n = 1 if straight else _n_chords(segment)
        for share in np.linspace(0.0, 1.0, n + 1)[1 if found else 0 :]:
            point = segment.point(float(share))
            found.append((float(point.x), float(point.y)))
    place = np.array(found).reshape(-1, 2)
    if not np.isfinite(place).all():
        raise ValueError("a place that is no number")
    keep = np.ones(len(place), dtype=np.bool_)
    keep[1:] = np.hypot(*np.diff(place, axis=0).T) > 1e-9
    return place[keep]


def _n_chords(segment: Any) -> int:
    """Returns how many chords keep within the tolerance of a curve, from its turning by sampling."""
    place = np.array([(p.x, p.y) for p in (segment.point(float(t)) for t in np.linspace(0.0, 1.0, 33))])
    sag = np.hypot(*(place[2:] - 2.0 * place[1:-1] + place[:-2]).T) / 8.0
    worst = float(sag.max()) if len(sag) else 0.0
    return int(np.clip(math.ceil(32.0 * math.sqrt(4.0 * worst / FLAT_MM)), 8, MOST_CHORDS))
