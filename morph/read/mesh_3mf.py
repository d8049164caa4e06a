"""3MF: the bodies a package would make, placed by its build items, in the unit the model states.

The package is a ZIP archive with an XML model. Nothing is unpacked past LARGEST_MODEL_BYTES, a document type
(the door to entity bombs and outside files) is refused, and the instances that components would make
are counted before any is made. Source of the rules: 3MF Core Specification 1.3, chapters 2 to 4.
"""

from __future__ import annotations

import io
import lzma
import struct
import zipfile
import zlib
from array import array
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from xml.parsers import expat

import numpy as np

from morph.core.arrays import Floats, Ints
from morph.core.errors import InputError
from morph.read.mesh_fault import (
    MOST_POINTS,
    Soup,
    damaged,
    not_its_format,
    require_few,
    require_indices,
)

CORE = "http://schemas.microsoft.com/3dmanufacturing/core/2015/02"
RELATION = "http://schemas.openxmlformats.org/package/2006/relationships"
START_PART = "http://schemas.microsoft.com/3dmanufacturing/2013/01/3dmodel"
LARGEST_MODEL_BYTES = 600_000_000
LARGEST_RELATIONS_BYTES = 1 << 20
MOST_ENTRIES = 10_000
MOST_INSTANCES = 10_000
DEEPEST = 64
READ_BYTES = 1 << 20
UNITS = {"micron": "micron", "millimeter": "mm", "centimeter": "cm", "inch": "inch", "foot": "foot", "meter": "m"}

_ZIP_FAULTS = (
    *(zipfile.BadZipFile, zlib.error, lzma.LZMAError, struct.error),
    *(EOFError, NotImplementedError, RuntimeError, ValueError, OSError),
)
"""What the archive reader raises on damaged, encrypted or oddly packed entries."""

Placed = tuple[str, Floats]
"""An object's id and its transform (4, 3): rows x, y, z, shift, for points as rows."""


@dataclass(slots=True)
class _Object:
    """One object of the model: its mesh or its components."""

    kind: str
    points: array[float] = field(default_factory=lambda: array("d"))
    triangles: array[int] = field(default_factory=lambda: array("q"))
    components: list[Placed] = field(default_factory=list)


def read_3mf(content: bytes, name: str) -> Soup:
    """Returns the triangles a 3MF package would make, its build items placed; the unit is the model's.

    Args:
        content: the whole file.
        name: its base name, for messages.

    Raises:
        InputError: `mesh-damaged`, `mesh-not-its-format`, `mesh-too-many-triangles`, `mesh-xml-refused`,
            `mesh-unpacks-too-large`, `mesh-3mf-extension`.
    """
    try:
        archive = zipfile.ZipFile(io.BytesIO(content))
    except _ZIP_FAULTS as error:
        raise not_its_format(name, "a 3MF package (a ZIP archive)", str(error)[:80].lower()) from None
    with archive:
        return _read(archive, name)


def _read(archive: zipfile.ZipFile, name: str) -> Soup:
    if len(archive.infolist()) > MOST_ENTRIES:
        raise _too_large(name, f"{len(archive.infolist())} entries")
    part = _start_part(archive, name)
    model = _Model(name)
    _parse(archive, part, LARGEST_MODEL_BYTES, model.start, name)
    if not model.seen:
        raise not_its_format(name, "a model of the 3MF core namespace", "another document")
    return model.soup()


def _too_large(name: str, found: str) -> InputError:
    return InputError(
        "mesh-unpacks-too-large",
        expected=f"a package that unpacks to at most {LARGEST_MODEL_BYTES / 1e6:.0f} MB in {MOST_ENTRIES} entries, and "
        f"components that make at most {MOST_INSTANCES} bodies",
        found=found,
        where=name,
        do="Export the body alone, with a coarser chord tolerance.",
    )


def _start_part(archive: zipfile.ZipFile, name: str) -> str:
    """Returns the entry that holds the model: the target of the package's relationship to it."""
    names = {entry.filename.lower(): entry.filename for entry in archive.infolist()}
    found: list[str] = []

    def start(tag: str, attributes: dict[str, str]) -> None:
        if tag == f"{RELATION} Relationship" and attributes.get("Type") == START_PART:
            found.append(attributes.get("Target", "").lstrip("/"))

    if "_rels/.rels" in names:
        _parse(archive, names["_rels/.rels"], LARGEST_RELATIONS_BYTES, start, name)
    part = names.get((found or ["3D/3dmodel.model"])[0].lower())
    if part is None:
        raise not_its_format(name, "a 3MF package with a model part", "an archive without one")
    return part


def _parse(
    archive: zipfile.ZipFile, entry: str, most_bytes: int, start: Callable[[str, dict[str, str]], None], name: str
) -> None:
    """Feeds an XML entry to `start`, element by element; refuses document types and more than `most_bytes`."""
    if archive.getinfo(entry).file_size > most_bytes:
        raise _too_large(name, f"{archive.getinfo(entry).file_size / 1e6:.0f} MB")

    def refuse(*_: object) -> None:
        raise InputError(
            "mesh-xml-refused",
            expected="XML without a document type or entities",
            found="a document type",
            where=name,
            do="Export the file again; 3MF forbids document types, and they can be made to fill the memory.",
        )

    parser = expat.ParserCreate(namespace_separator=" ")
    parser.StartDoctypeDeclHandler = refuse
    parser.EntityDeclHandler = refuse
    parser.StartElementHandler = start
    taken = 0
    try:
        for block in _blocks(archive, entry, name):
            taken += len(block)
            if taken > most_bytes:
                raise _too_large(name, f"more than {most_bytes / 1e6:.0f} MB")
            parser.Parse(block, False)
        parser.Parse(b"", True)
    except expat.ExpatError as error:
        raise damaged(name, "well-formed XML in its model", str(error)[:80]) from None


def _mirrors(transform: Floats) -> bool:
    """Returns whether a transform (4, 3) turns a body into its mirror image."""
    with np.errstate(over="ignore", invalid="ignore"):
        return bool(np.cross(transform[0], transform[1]) @ transform[2] < 0.0)


def _blocks(archive: zipfile.ZipFile, entry: str, name: str) -> Iterator[bytes]:
    """Yields the unpacked bytes of an entry."""
    try:
        with archive.open(entry) as stream:
            while block := stream.read(READ_BYTES):
                yield block
    except _ZIP_FAULTS as error:
        raise damaged(name, "a package that unpacks", str(error)[:80] or type(error).__name__) from None


class _Model:
    """Gathers objects and build items while the model is read."""

    def __init__(self, name: str) -> None:
        self.seen = False
        self._name = name
        self._unit = "mm"
        self._objects: dict[str, _Object] = {}
        self._items: list[Placed] = []
        self._open: _Object | None = None
        self._n_points = self._n_triangles = 0
        prefix = f"{CORE} "
        self._handlers: dict[str, Callable[[dict[str, str]], None]] = {
            prefix + "vertex": self._vertex,
            prefix + "triangle": self._triangle,
            prefix + "object": self._object,
            prefix + "component": self._component,
            prefix + "item": self._item,
            prefix + "model": self._model,
        }

    def start(self, tag: str, attributes: dict[str, str]) -> None:
        """Takes one element of the model."""
        handler = self._handlers.get(tag)
        if handler is not None:
            handler(attributes)

    def _model(self, attributes: dict[str, str]) -> None:
        self.seen = True
        unit = attributes.get("unit", "millimeter")
        if unit not in UNITS:
            raise damaged(self._name, "a unit out of " + ", ".join(UNITS), f"'{unit[:40]}'")
        self._unit = UNITS[unit]
        needed = attributes.get("requiredextensions", "").split()
        if needed:
            raise self._extension(f"the extension '{needed[0][:40]}' required")

    def _extension(self, found: str) -> InputError:
        return InputError(
            "mesh-3mf-extension",
            expected="a model of the 3MF core alone",
            found=found,
            where=self._name,
            do="Export plain triangle meshes in one model, without production, lattice or slice data.",
        )

    def _object(self, attributes: dict[str, str]) -> None:
        if len(self._objects) >= MOST_ENTRIES:
            raise _too_large(self._name, f"more than {MOST_ENTRIES} objects")
        key = attributes.get("id", "")
        if key in self._objects:
            raise damaged(self._name, "each object id once", f"'{key[:40]}' twice")
        self._open = self._objects[key] = _Object(attributes.get("type", "model"))

    def _vertex(self, attributes: dict[str, str]) -> None:
        self._n_points += 1
        if self._open is None or self._n_points > MOST_POINTS:
            raise damaged(self._name, f"at most {MOST_POINTS} points, all in objects", f"point {self._n_points}")
        try:
            self._open.points.extend([float(attributes["x"]), float(attributes["y"]), float(attributes["z"])])
        except (KeyError, ValueError):
            raise damaged(self._name, "vertices with x, y and z", f"another in vertex {self._n_points}") from None

    def _triangle(self, attributes: dict[str, str]) -> None:
        self._n_triangles += 1
        require_few(self._n_triangles, self._name)
        if self._open is None:
            raise damaged(self._name, "triangles in objects", "one outside")
        try:
            self._open.triangles.extend([int(attributes["v1"]), int(attributes["v2"]), int(attributes["v3"])])
        except (KeyError, ValueError, OverflowError):
            raise damaged(self._name, "triangles with v1, v2 and v3", f"another in {self._n_triangles}") from None

    def _placed(self, attributes: dict[str, str]) -> Placed:
        if any(key.split(" ")[-1] == "path" for key in attributes):
            raise self._extension("an object in another part of the package")
        words = attributes.get("transform", "1 0 0 0 1 0 0 0 1 0 0 0").split()
        try:
            numbers = np.array([float(word) for word in words], dtype=np.float64)
        except ValueError:
            numbers = np.empty(0)
        if len(numbers) != 12 or not np.isfinite(numbers).all():
            raise damaged(self._name, "transforms of 12 finite numbers", f"'{' '.join(words)[:60]}'")
        return attributes.get("objectid", ""), numbers.reshape(4, 3)

    def _component(self, attributes: dict[str, str]) -> None:
        if self._open is None or len(self._open.components) >= MOST_INSTANCES:
            raise damaged(self._name, f"at most {MOST_INSTANCES} components, in objects", "more, or one outside")
        self._open.components.append(self._placed(attributes))

    def _item(self, attributes: dict[str, str]) -> None:
        if len(self._items) >= MOST_INSTANCES:
            raise _too_large(self._name, f"more than {MOST_INSTANCES} build items")
        self._items.append(self._placed(attributes))

    def soup(self) -> Soup:
        """Returns the triangles of all build items of kind model, placed."""
        counted: dict[str, tuple[int, int]] = {}
        n_triangles = n_bodies = 0
        for key, _ in self._items:
            triangles, bodies = self._count(key, counted, ())
            n_triangles, n_bodies = n_triangles + triangles, n_bodies + bodies
        require_few(n_triangles, self._name)
        if n_bodies > MOST_INSTANCES:
            raise _too_large(self._name, f"{n_bodies} bodies")
        parts: list[tuple[Floats, Ints]] = []
        for key, transform in self._items:
            self._collect(key, transform, parts)
        shift = np.cumsum([0, *(len(points) for points, _ in parts)])
        points = np.concatenate([np.empty((0, 3)), *(points for points, _ in parts)])
        rows = [triangles + at for (_, triangles), at in zip(parts, shift[:-1], strict=True)]
        return Soup(points, np.concatenate([np.empty((0, 3), np.int64), *rows]), self._unit)

    def _count(self, key: str, counted: dict[str, tuple[int, int]], above: tuple[str, ...]) -> tuple[int, int]:
        """Returns how many triangles and bodies object `key` makes, refusing loops and deep nests."""
        if key in counted:
            return counted[key]
        if key not in self._objects or key in above or len(above) >= DEEPEST:
            found = "a loop" if key in above else "a deeper nest" if key in self._objects else f"'{key[:40]}'"
            raise damaged(self._name, f"components that name objects, at most {DEEPEST} deep", found)
        own = self._objects[key]
        triangles, bodies = len(own.triangles) // 3, 1
        for part, _ in own.components:
            more = self._count(part, counted, (*above, key))
            triangles, bodies = triangles + more[0], bodies + more[1]
        counted[key] = triangles, bodies
        return counted[key]

    def _collect(self, key: str, transform: Floats, parts: list[tuple[Floats, Ints]]) -> None:
        own = self._objects[key]
        if own.kind != "model":
            return
        points = np.array(own.points, dtype=np.float64).reshape(-1, 3)
        triangles = np.array(own.triangles, dtype=np.int64).reshape(-1, 3)
        require_indices(triangles, len(points), self._name)
        if len(triangles):
            if _mirrors(transform):
                triangles = triangles[:, ::-1]
            with np.errstate(over="ignore", invalid="ignore"):  # sizes beyond any body are refused later
                parts.append((np.einsum("ij,jk->ik", points, transform[:3]) + transform[3], triangles))
        for part, inner in own.components:
            with np.errstate(over="ignore", invalid="ignore"):
                placed = np.vstack([inner[:3] @ transform[:3], inner[3] @ transform[:3] + transform[3]])
            self._collect(part, placed, parts)
