"""VTK image data (.vti): a regular grid in XML with its values as text, base64 or appended bytes.

Follows the published description of VTK's XML file formats (serial ImageData): blocks of bytes are led by their
size, or, when compressed by zlib, by the number and sizes of their parts; x runs fastest, then y, so the first row
lies at the bottom. Point data are values at nodes, cell data values of cells. A document type declaration, and with
it every entity, is refused; extents are held against what is there before anything is unpacked.
"""

from __future__ import annotations

import base64
import binascii
import zlib
from dataclasses import dataclass, field
from typing import Any, NoReturn

import numpy as np
from numpy.typing import NDArray

from morph.core.errors import InputError
from morph.read.image_fault import Decoded, damaged, not_its_kind, require_shape
from morph.read.xml_events import read_xml

TYPES = {
    "Float64": "f8", "Float32": "f4", "Int8": "i1", "UInt8": "u1", "Int16": "i2", "UInt16": "u2", "Int32": "i4",
    "UInt32": "u4", "Int64": "i8", "UInt64": "u8",
}  # fmt: skip
NAMES = ("density", "rho", "x", "value")
"""Of several arrays the first of these names is the density, then the one the file calls its scalars."""
MOST_ARRAYS = 1000
LARGEST_EXTENT = 2**31


@dataclass(slots=True)
class _Array:
    """A DataArray of the file: the data it belongs to ("nodes" or "cells"), its attributes, its own text."""

    samples: str
    attributes: dict[str, str]
    text: list[str] = field(default_factory=list)

    @property
    def name(self) -> str:
        return self.attributes.get("Name", "")


@dataclass(slots=True)
class _File:
    """What the XML says: attributes of the elements, the arrays, and the appended bytes."""

    name: str
    root: dict[str, str] = field(default_factory=dict)
    image: dict[str, str] = field(default_factory=dict)
    pieces: list[dict[str, str]] = field(default_factory=list)
    scalars: dict[str, str] = field(default_factory=dict)
    arrays: list[_Array] = field(default_factory=list)
    appended: bytes | None = None
    appended_base64: bool = False

    def other_kind(self, expected: str, found: str) -> NoReturn:
        """Raises the error for a file that is whole but of a kind that is not read."""
        raise InputError(
            "image-vti-kind",
            expected=expected,
            found=found[:120],
            where=self.name,
            do="Write one flat piece of image data (.vti) with one array of one component.",
        )


def read_vti(content: bytes, name: str) -> Decoded:
    """Returns the density of a VTK image data file.

    Raises:
        InputError: no such file, unsafe XML, damaged, not flat, or of a kind that is not read.
    """
    file = _read_elements(content, name)
    points = _extent(file)
    array = _choose(file)
    cells = [max(1, n - 1) for n in points] if array.samples == "cells" else points
    wide = [axis for axis in range(3) if cells[axis] > 1]
    shape = tuple(cells[axis] for axis in reversed(wide))
    require_shape(shape, name)
    value = _values(file, array, int(np.prod(shape))).reshape(shape)
    spacing = [*_numbers(file, "Spacing", "1 1 1"), 1.0, 1.0]
    size = tuple((points[axis] - 1) * spacing[axis] for axis in wide)
    grid = f'VTK image data, array "{array.name[:40]}" of {shape[1]} x {shape[0]} values on {array.samples}'
    plane = "".join("xyz"[axis] for axis in wide)
    note = f"{grid}, plane {plane}, {size[0]:.6g} x {size[1]:.6g} in the file's own unit"
    return Decoded(value, note, "bottom-up", array.samples, True, (size[0], size[1]))


def _read_elements(content: bytes, name: str) -> _File:
    file, stack = _File(name), list[str]()
    head, file.appended, file.appended_base64 = _split_appended(content, name)

    def start(tag: str, attributes: dict[str, str]) -> None:
        stack.append(tag)
        path = tuple(stack)
        if len(path) == 1:
            if tag != "VTKFile":
                raise not_its_kind(".vti", name)
            file.root = attributes
        elif path == ("VTKFile", "ImageData"):
            file.image = attributes
        elif path == ("VTKFile", "ImageData", "Piece"):
            file.pieces.append(attributes)
        elif path[3:] in {("PointData",), ("CellData",)}:
            file.scalars["nodes" if tag == "PointData" else "cells"] = attributes.get("Scalars", "")
        elif path[4:] == ("DataArray",) and path[3] in {"PointData", "CellData"}:
            file.arrays.append(_Array("nodes" if path[3] == "PointData" else "cells", attributes))

    def text(data: str) -> None:
        if len(stack) == 5 and stack[4] == "DataArray" and stack[3] in {"PointData", "CellData"}:
            file.arrays[-1].text.append(data)

    read_xml(head, name, start, lambda _: stack.pop(), text)
    if file.root.get("type") != "ImageData":
        file.other_kind('type="ImageData"', f'type="{file.root.get("type", "")}"')
    return file


def _split_appended(content: bytes, name: str) -> tuple[bytes, bytes | None, bool]:
    """Returns the XML without its appended data, those data after their underscore, and whether they are base64."""
    at = content.find(b"<AppendedData")
    if at < 0:
        return content, None, False
    tag_end = content.find(b">", at)
    mark = content.find(b"_", tag_end)
    if tag_end < 0 or mark < 0 or content[tag_end + 1 : mark].strip():
        raise damaged("an underscore before the appended data", "none", name)
    return content[:at] + b"</VTKFile>", content[mark + 1 :], b"base64" in content[at:tag_end]


def _numbers(file: _File, key: str, default: str) -> list[float]:
    """Returns the numbers of an attribute of ImageData."""
    text = file.image.get(key, default)
    try:
        found = [float(item) for item in text.split()]
    except ValueError:
        found = []
    if not found or not np.isfinite(found).all():
        raise damaged(f"numbers in {key}", f'"{text[:60]}"', file.name)
    return found


def _extent(file: _File) -> list[int]:
    """Returns the numbers of grid points along x, y and z.

    Raises:
        InputError: the extent makes no sense, there are several pieces, or the grid is turned.
    """
    if len(file.pieces) != 1:
        file.other_kind("one piece", f"{len(file.pieces)} pieces")
    whole = _numbers(file, "WholeExtent", "")
    if len(whole) != 6 or max(map(abs, whole)) > LARGEST_EXTENT or any(item != int(item) for item in whole):
        raise damaged("six whole numbers in WholeExtent", f'"{file.image.get("WholeExtent", "")[:60]}"', file.name)
    if file.pieces[0].get("Extent", file.image["WholeExtent"]).split() != file.image["WholeExtent"].split():
        file.other_kind("a piece that covers the whole extent", f'Extent="{file.pieces[0]["Extent"]}"')
    spacing, direction = _numbers(file, "Spacing", "1 1 1"), _numbers(file, "Direction", "1 0 0 0 1 0 0 0 1")
    spacing += [1.0] * (3 - len(spacing))
    if len(spacing) != 3 or min(spacing) <= 0.0:
        file.other_kind("three positive numbers as Spacing", f'"{file.image.get("Spacing", "")}"')
    if len(direction) != 9 or not np.allclose(direction, np.eye(3).ravel(), atol=1e-9):
        file.other_kind("axes that are not turned", f'Direction="{file.image.get("Direction", "")}"')
    points = [int(whole[2 * axis + 1]) - int(whole[2 * axis]) + 1 for axis in range(3)]
    if min(points) < 1:
        raise damaged("an extent that holds points", f'"{file.image["WholeExtent"][:60]}"', file.name)
    return points


def _choose(file: _File) -> _Array:
    single = [item for item in file.arrays if item.attributes.get("NumberOfComponents", "1") in {"1", "", "0"}]
    if len(single) == 1:
        return single[0]
    named = [item for name in NAMES for item in single if item.name.lower() == name]
    active = [item for item in single if item.name and item.name == file.scalars.get(item.samples)]
    if named or len(active) == 1:
        return (named or active)[0]
    listed = ", ".join(sorted(item.name[:40] for item in file.arrays[:8])) or "nothing"
    raise InputError(
        "image-array-choice",
        expected="one array of one component, or one called density or rho",
        found=f"{len(single)} of them (in all: {listed})",
        where=file.name,
        do="Write the density alone, or call it density.",
    )


def _values(file: _File, array: _Array, n: int) -> NDArray[Any]:
    """Returns the `n` values of an array."""
    kind = TYPES.get(array.attributes.get("type", ""))
    order = {"LittleEndian": "<", "BigEndian": ">"}.get(file.root.get("byte_order", "LittleEndian"))
    if kind is None or order is None:
        file.other_kind(
            "numbers of a known type and byte order", f"{array.attributes.get('type')}, {file.root.get('byte_order')}"
        )
    how, text = array.attributes.get("format", "ascii"), "".join(array.text)
    if how == "ascii":
        value = _ascii(file, text, n)
    else:
        data = _block(file, array, text, how, n * int(kind[1:]), order)
        value = np.frombuffer(data, dtype=order + kind)
    if kind[0] in "iu" and (value.min() < 0 or value.max() > 1):
        raise InputError(
            "image-integers",
            expected="values 0..1",
            found=f"integers {value.min():g}..{value.max():g}",
            where=file.name,
            do="Divide by the full scale before saving, so that 0..1 is what the optimiser meant.",
        )
    return value


def _ascii(file: _File, text: str, n: int) -> NDArray[Any]:
    words = text.split()
    if len(words) != n:
        raise damaged(f"{n} values, as its extent says", f"{len(words)} values", file.name)
    try:
        return np.array(words, dtype=np.float64)
    except ValueError as error:
        raise damaged("numbers", "other words among the values", file.name) from error


def _block(file: _File, array: _Array, text: str, how: str, n_bytes: int, order: str) -> bytes:
    """Returns the `n_bytes` bytes of an array in base64 or appended form."""
    if how == "binary":
        source, is_base64 = "".join(text.split()).encode("ascii", "replace"), True
    elif how in {"appended", "append"} and file.appended is not None:
        offset = array.attributes.get("offset", "")
        if not offset.isdecimal() or int(offset) > len(file.appended):
            raise damaged("an offset within the appended data", f'offset="{offset[:30]}"', file.name)
        source, is_base64 = file.appended[int(offset) :], file.appended_base64
        source = source.lstrip() if is_base64 else source
    else:
        file.other_kind("values as ascii, binary or appended", f'format="{how}"')
    width = {"UInt32": 4, "UInt64": 8}.get(file.root.get("header_type", "UInt32"))
    if width is None:
        file.other_kind("a header_type UInt32 or UInt64", str(file.root.get("header_type")))
    compressor = file.root.get("compressor", "")
    if compressor not in {"", "vtkZLibDataCompressor"}:
        file.other_kind("data as they are or compressed by zlib", compressor)
    take = _Source(file.name, source, is_base64, f"{order}u{width}")
    return take.compressed(n_bytes) if compressor else take.plain(n_bytes)


class _Source:
    """Bytes of a block, read from its start; in base64 every stretch that was written at once is padded for itself."""

    def __init__(self, name: str, source: bytes, is_base64: bool, header: str) -> None:
        self.name, self.source, self.is_base64, self.header = name, source, is_base64, np.dtype(header)

    def _short(self, wanted: int, found: int) -> InputError:
        return damaged(f"{wanted} bytes of values, as its extent says", f"{found} bytes", self.name)

    def _take(self, n: int) -> bytes:
        """Returns the next `n` bytes, written as one stretch."""
        if not self.is_base64:
            found, self.source = self.source[:n], self.source[n:]
            return found
        n_letters = 4 * ((n + 2) // 3)
        letters, self.source = self.source[:n_letters], self.source[n_letters:]
        try:
            return base64.b64decode(letters, validate=True)[:n]
        except (binascii.Error, ValueError) as error:
            raise damaged("base64 text", "other characters", self.name) from error

    def _sizes(self, n: int) -> list[int]:
        content = self._take(n * self.header.itemsize)
        if len(content) < n * self.header.itemsize:
            raise self._short(n * self.header.itemsize, len(content))
        return [int(item) for item in np.frombuffer(content, dtype=self.header)]

    def plain(self, n_bytes: int) -> bytes:
        """Returns a block led by its size."""
        width = self.header.itemsize
        whole, again = self.source, 4 * ((width + 2) // 3)
        if self.is_base64 and whole[again - 1 : again] != b"=":  # size and values are one stretch
            content = self._take(width + n_bytes)
            size, data = (
                int.from_bytes(content[:width], "big" if self.header.str[0] == ">" else "little"),
                content[width:],
            )
        else:
            size = self._sizes(1)[0]
            data = self._take(n_bytes) if size == n_bytes else b""
        if size != n_bytes:
            raise self._short(n_bytes, size)
        if len(data) != n_bytes:
            raise self._short(n_bytes, len(data))
        return data

    def compressed(self, n_bytes: int) -> bytes:
        """Returns a block of zlib parts led by their number, their size, the last one's size, and packed sizes."""
        n_parts, part, last = self._first_sizes()
        if n_parts == 0 or (n_parts - (last > 0)) * part + last != n_bytes or n_parts > n_bytes:
            raise self._short(n_bytes, (n_parts - (last > 0)) * part + last)
        packed = self._packed_sizes(n_parts)
        content = self._take(sum(packed)) if sum(packed) <= len(self.source) else b""
        if len(content) != sum(packed):
            raise self._short(sum(packed), len(content))
        found, at = [], 0
        for index, size in enumerate(packed):
            wanted = last if last and index == n_parts - 1 else part
            try:
                unpacked = zlib.decompressobj().decompress(content[at : at + size], wanted + 1)
            except zlib.error as error:
                raise damaged("data compressed by zlib", "other bytes", self.name) from error
            if len(unpacked) != wanted:
                raise self._short(wanted, len(unpacked))
            found.append(unpacked)
            at += size
        return b"".join(found)

    def _first_sizes(self) -> tuple[int, int, int]:
        """Returns number of parts, size of a part, size of a shorter last part; the source stays where it is."""
        kept = self.source
        n_parts, part, last = self._sizes(3)
        self.source = kept
        return n_parts, part, last

    def _packed_sizes(self, n_parts: int) -> list[int]:
        if (3 + n_parts) * self.header.itemsize > len(self.source):
            raise self._short((3 + n_parts) * self.header.itemsize, len(self.source))
        return self._sizes(3 + n_parts)[3:]
