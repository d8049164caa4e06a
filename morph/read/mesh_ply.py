"""PLY, ASCII and binary: points and polygons without a unit, every other element and property passed over.

The header is read first and held against the length of the file, so that a large count in a short file is
refused before anything is allocated.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.core.arrays import Floats
from morph.read.mesh_fault import MOST_POINTS, Soup, damaged, not_its_format, require_few, require_indices, truncated
from morph.read.polygon import MOST_CORNERS, fan_polygons

LONGEST_HEADER_BYTES = 1 << 16
_TYPES = {
    "char": "i1",
    "int8": "i1",
    "uchar": "u1",
    "uint8": "u1",
    "short": "i2",
    "int16": "i2",
    "ushort": "u2",
    "uint16": "u2",
    "int": "i4",
    "int32": "i4",
    "uint": "u4",
    "uint32": "u4",
    "float": "f4",
    "float32": "f4",
    "double": "f8",
    "float64": "f8",
}
_ORDERS = {"ascii": "", "binary_little_endian": "<", "binary_big_endian": ">"}
CORNER_LISTS = ("vertex_indices", "vertex_index")
MOST_ELEMENTS, MOST_PROPERTIES = 32, 128


@dataclass(frozen=True, slots=True)
class _Property:
    """A property: its name, type of its values, and type of its count when it is a list."""

    name: str
    kind: str
    count_kind: str | None


@dataclass(slots=True)
class _Element:
    """An element of the header: name, how many rows follow, and what each row holds."""

    name: str
    count: int
    properties: list[_Property]

    @property
    def least_bytes(self) -> int:
        """The least length of a binary row."""
        return sum(np.dtype(p.count_kind or p.kind).itemsize for p in self.properties)


def read_ply(content: bytes, name: str) -> Soup:
    """Returns the faces of a PLY file as triangles.

    Args:
        content: the whole file.
        name: its base name, for messages.

    Raises:
        InputError: `mesh-truncated`, `mesh-damaged`, `mesh-not-its-format`, `mesh-polygon`, `mesh-too-many-triangles`.
    """
    order, elements, body = _header(content, name)
    for element in elements:
        # a row of ASCII takes at least two bytes for each property but the last line's end
        least = element.count * (element.least_bytes if order else max(1, 2 * len(element.properties) - 1))
        if least > len(content) - body:
            raise truncated(
                name, f"at least {least} bytes for {element.count} rows of {element.name}", f"{len(content) - body}"
            )
        if element.name == "face":
            require_few(element.count, name)
        if element.name == "vertex" and element.count > MOST_POINTS:
            raise damaged(name, f"at most {MOST_POINTS} points", f"{element.count}")
    rows = _Text(content[body:], name) if not order else _Binary(content, body, order, name)
    points: Floats = np.empty((0, 3))
    polygons: list[list[int]] = []
    for element in elements:
        if element.name == "vertex":
            points = _points(rows, element, name)
        elif element.name == "face":
            polygons = _polygons(rows, element, name)
        else:
            for _ in range(element.count):
                rows.row(element)
    corners = np.array([c for polygon in polygons for c in polygon], dtype=np.int64).reshape(-1, 1)
    require_indices(corners, len(points), name)
    return Soup(points, fan_polygons(points, polygons, name))


def _header(content: bytes, name: str) -> tuple[str, list[_Element], int]:
    """Returns the byte order ("" for ASCII), the elements, and where the rows start."""
    end = content.find(b"end_header", 0, LONGEST_HEADER_BYTES)
    if not content.startswith(b"ply") or end < 0:
        raise not_its_format(name, "a PLY header from ply to end_header", "none")
    body = content.find(b"\n", end)
    lines = [line.split() for line in content[:end].decode("ascii", "replace").splitlines()[1:]]
    order: str | None = None
    elements: list[_Element] = []
    for words in lines:
        if not words or words[0] in {"comment", "obj_info"}:
            continue
        if words[0] == "format" and len(words) == 3 and words[1] in _ORDERS:
            order = _ORDERS[words[1]]
        elif words[0] == "element" and len(words) == 3 and words[2].isdecimal() and len(words[2]) < 12:
            elements.append(_Element(words[1], int(words[2]), []))
        elif words[0] == "property" and elements:
            elements[-1].properties.append(_property(words, name))
        else:
            raise damaged(name, "format, element and property lines in the header", f"'{' '.join(words)[:60]}'")
    wide = len(elements) > MOST_ELEMENTS or any(len(e.properties) > MOST_PROPERTIES for e in elements)
    if order is None or body < 0 or wide or any(e.count and not e.properties for e in elements):
        raise damaged(name, "a format and some elements with properties in the header", "another header")
    return order, elements, body + 1


def _property(words: list[str], name: str) -> _Property:
    if len(words) == 3 and words[1] in _TYPES:
        return _Property(words[2], _TYPES[words[1]], None)
    if len(words) == 5 and words[1] == "list" and words[2] in _TYPES and words[3] in _TYPES:
        return _Property(words[4], _TYPES[words[3]], _TYPES[words[2]])
    raise damaged(name, "property TYPE NAME or property list TYPE TYPE NAME", f"'{' '.join(words)[:60]}'")


class _Text:
    """Rows of an ASCII file."""

    def __init__(self, text: bytes, name: str) -> None:
        self._lines = iter(text.splitlines())
        self._name = name

    def row(self, element: _Element) -> list[Any]:
        """Returns the values of one row; a list property is a list."""
        words: list[bytes] = []
        while not words:
            line = next(self._lines, None)
            if line is None:
                raise truncated(self._name, f"{element.count} rows of {element.name}", "the end of the file")
            words = line.split()
        out: list[Any] = []
        at = 0
        try:
            for item in element.properties:
                if item.count_kind is None:
                    out.append(float(words[at]))
                    at += 1
                else:
                    count = int(words[at])
                    out.append([int(word) for word in words[at + 1 : at + 1 + count]])
                    at += 1 + count
                    if count < 0 or len(out[-1]) != count:
                        raise IndexError
        except (ValueError, IndexError, OverflowError):
            raise damaged(self._name, f"rows of {element.name} as the header says", "another row") from None
        return out

    def table(self, element: _Element) -> Floats:
        """Returns rows of plain properties as an array (n, properties)."""
        return np.array([self.row(element) for _ in range(element.count)], dtype=np.float64)


class _Binary:
    """Rows of a binary file."""

    def __init__(self, content: bytes, at: int, order: str, name: str) -> None:
        self._content, self._at, self._order, self._name = content, at, order, name

    def _take(self, kind: str, count: int) -> list[Any]:
        size = np.dtype(kind).itemsize * count
        if count < 0 or count > MOST_CORNERS:
            raise damaged(self._name, f"lists of at most {MOST_CORNERS} entries", f"{count}")
        if self._at + size > len(self._content):
            raise truncated(self._name, "all rows the header announces", f"the end after {len(self._content)} bytes")
        values: list[Any] = np.frombuffer(self._content, self._order + kind, count, self._at).tolist()
        self._at += size
        return values

    def row(self, element: _Element) -> list[Any]:
        """Returns the values of one row; a list property is a list."""
        out: list[Any] = []
        for item in element.properties:
            if item.count_kind is None:
                out += self._take(item.kind, 1)
            else:
                out.append(self._take(item.kind, int(self._take(item.count_kind, 1)[0])))
        return out

    def triangles(self, element: _Element) -> list[list[int]] | None:
        """Returns all rows of an element of one list when each holds three entries, else None."""
        only = element.properties[0]
        kind = np.dtype([("n", self._order + str(only.count_kind)), ("corner", self._order + only.kind, (3,))])
        if len(element.properties) != 1 or self._at + kind.itemsize * element.count > len(self._content):
            return None
        rows = np.frombuffer(self._content, kind, element.count, self._at)
        if not (rows["n"] == 3).all():
            return None
        self._at += kind.itemsize * element.count
        corners: list[list[int]] = rows["corner"].astype(np.int64).tolist()
        return corners

    def table(self, element: _Element) -> Floats:
        """Returns rows of plain properties as an array (n, properties)."""
        kind = np.dtype([(f"p{k}", self._order + item.kind) for k, item in enumerate(element.properties)])
        if self._at + kind.itemsize * element.count > len(self._content):
            raise truncated(self._name, "all rows the header announces", f"the end after {len(self._content)} bytes")
        rows = np.frombuffer(self._content, kind, element.count, self._at)
        self._at += kind.itemsize * element.count
        with np.errstate(invalid="ignore"):  # what is no number is refused later, by name
            return np.column_stack([rows[field].astype(np.float64) for field in kind.names or ()])


def _points(rows: _Text | _Binary, element: _Element, name: str) -> Floats:
    names = [item.name for item in element.properties]
    if any(axis not in names for axis in "xyz") or any(item.count_kind for item in element.properties):
        raise damaged(name, "vertices with plain properties x, y and z", ", ".join(names)[:80])
    if element.count == 0:
        return np.empty((0, 3))
    return np.ascontiguousarray(rows.table(element)[:, [names.index(axis) for axis in "xyz"]])


def _polygons(rows: _Text | _Binary, element: _Element, name: str) -> list[list[int]]:
    lists = [k for k, item in enumerate(element.properties) if item.name in CORNER_LISTS and item.count_kind]
    if not lists:
        raise damaged(name, "faces with a list vertex_indices", ", ".join(p.name for p in element.properties)[:80])
    whole = rows.triangles(element) if isinstance(rows, _Binary) else None
    if whole is not None:
        return whole
    out, n_triangles = [], 0
    for number in range(element.count):
        corners = [int(corner) for corner in rows.row(element)[lists[0]]]
        if len(corners) < 3:
            raise damaged(name, "faces of at least 3 corners", f"face {number + 1} of {len(corners)}")
        n_triangles += len(corners) - 2
        require_few(n_triangles, name)
        out.append(corners)
    return out
