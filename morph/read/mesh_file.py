"""A triangle mesh from a file: STL, 3MF, OBJ, PLY or STEP, every byte suspect until checked.

The reader of the format gives triangles as they lie; here their unit is settled, their size held
against what can be a mould insert, and equal points made one. Whether they bound a body is a later
question (mesh_body.py): a guide surface may be open.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.core.errors import InputError, SettingError
from morph.core.fingerprint import file_fingerprint
from morph.core.tolerance import WELD_MM
from morph.geometry.mesh import Mesh
from morph.read.mesh_fault import LARGEST_FILE_BYTES, Soup, without_triangles


class LengthUnit(StrEnum):
    """The units a mesh file may be drawn in; the names are those of the job file."""

    MICRON = "micron"
    MM = "mm"
    CM = "cm"
    INCH = "inch"
    FOOT = "foot"
    METRE = "m"


MM_PER_UNIT = {
    LengthUnit.MICRON: 1e-3,
    LengthUnit.MM: 1.0,
    LengthUnit.CM: 10.0,
    LengthUnit.INCH: 25.4,
    LengthUnit.FOOT: 304.8,
    LengthUnit.METRE: 1000.0,
}
"""Inch and foot exactly, by the international yard and pound agreement of 1959."""

SMALLEST_MM = 10.0
"""A channel of 3 mm with 3 mm of wall on both sides needs 9 mm: a body below this is drawn in another unit."""

LARGEST_MM = 3000.0
"""No powder bed holds a larger body (common practice, no source)."""


@dataclass(frozen=True, slots=True, eq=False)
class MeshFile:
    """A mesh as it lies in its file, in mm, equal points made one.

    Args:
        mesh: its triangles; none has two corners in one point.
        source: base name of the file. content: fingerprint of its bytes.
        unit: the unit it was drawn in. unit_from: "file", "job" or "size" (no unit stated: taken as mm).
        dropped: triangles left out because two of their corners are one point.
    """

    mesh: Mesh
    source: str
    content: str
    unit: LengthUnit
    unit_from: str
    dropped: int


def _readers() -> dict[str, Callable[[bytes, str], Soup]]:
    from morph.read.mesh_3mf import read_3mf
    from morph.read.mesh_obj import read_obj
    from morph.read.mesh_ply import read_ply
    from morph.read.mesh_stl import read_stl
    from morph.read.step_shape import read_step

    return {
        ".stl": read_stl,
        ".3mf": read_3mf,
        ".obj": read_obj,
        ".ply": read_ply,
        ".step": read_step,
        ".stp": read_step,
    }


def read_mesh(path: Path, unit: LengthUnit | None = None) -> MeshFile:
    """Returns the triangles of a mesh file in mm.

    Args:
        path: an STL, 3MF, OBJ, PLY or STEP file.
        unit: what the job says it is drawn in; None when it does not say. 3MF and STEP state their own.

    Raises:
        InputError: the file is missing, not what its name says, damaged, too large, not finite, or of a doubtful size.
        SettingError: `mesh-unit-conflict` when job and file state different units.
    """
    readers = _readers()
    kind = path.suffix.lower()
    if kind not in readers:
        raise InputError(
            "mesh-format-unknown",
            expected="a file of one of " + ", ".join(sorted(readers)),
            found=f"the extension {kind[:16] or '(none)'}",
            where=path.name,
            do="Export the body as 3MF, STL or STEP.",
        )
    content = _read_bytes(path)
    soup = readers[kind](content, path.name)
    if len(soup.triangles) == 0:
        raise without_triangles(path.name)
    _require_finite(soup, path.name)
    used, source = _settle_unit(soup, unit, path.name)
    with np.errstate(over="ignore"):  # a size of inf is too large as well
        points = soup.points * MM_PER_UNIT[used]
        size = np.ptp(points[soup.triangles.reshape(-1)], axis=0)
    _require_size(size, used, source, path.name)
    mesh, dropped = weld(points, soup.triangles)
    if len(mesh.triangles) == 0:
        raise without_triangles(path.name)
    return MeshFile(mesh, path.name, file_fingerprint(content), used, source, dropped)


def weld(points_mm: Floats, triangles: Ints) -> tuple[Mesh, int]:
    """Returns the mesh with equal points made one, and how many triangles that left without area.

    Only exactly equal points are joined at first; where edges stay open, those within WELD_MM are too, because
    some writers round the same corner twice.

    Args:
        points_mm: (n, 3).
        triangles: (m, 3).
    """
    mesh = _joined(triangles, *_equal_points(points_mm))
    if _is_open(mesh.triangles, len(mesh.vertices_mm)):
        mesh = _joined(mesh.triangles, *_near_points(mesh.vertices_mm))
    return mesh, len(triangles) - len(mesh.triangles)


def _equal_points(points: Floats) -> tuple[Floats, Ints]:
    points = points + 0.0  # -0 as 0
    order = np.lexsort((points[:, 2], points[:, 1], points[:, 0]))
    sorted_points = points[order]
    fresh = np.concatenate([[True], (sorted_points[1:] != sorted_points[:-1]).any(axis=1)])
    number = np.empty(len(points), np.int64)
    number[order] = np.cumsum(fresh) - 1
    return sorted_points[fresh], number


def _near_points(points: Floats) -> tuple[Floats, Ints]:
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    pairs = cKDTree(points).query_pairs(WELD_MM, output_type="ndarray")
    n = len(points)
    graph = coo_array((np.ones(len(pairs), np.int8), (pairs[:, 0], pairs[:, 1])), shape=(n, n))
    _, label = connected_components(graph, directed=False)
    _, first, number = np.unique(label, return_index=True, return_inverse=True)
    return points[first], number.astype(np.int64)


def _joined(triangles: Ints, kept: Floats, number: Ints) -> Mesh:
    """Returns the triangles on the `kept` points, those with a repeated corner left out, and only points in use."""
    rows = number[triangles]
    a, b, c = rows.T
    rows = rows[(a != b) & (b != c) & (c != a)]
    used = np.zeros(len(kept), np.bool_)
    used[rows] = True
    return Mesh(kept[used], (np.cumsum(used) - 1)[rows])


def _is_open(triangles: Ints, n_points: int) -> bool:
    start, end = triangles.ravel(), np.roll(triangles, -1, axis=1).ravel()
    low, high = np.minimum(start, end), np.maximum(start, end)
    _, count = np.unique(low * n_points + high, return_counts=True)
    return bool((count == 1).any())


def _require_finite(soup: Soup, name: str) -> None:
    bad: Bools = np.asarray(~np.isfinite(soup.points).all(axis=1), dtype=np.bool_)
    if bad.any():
        row = int(bad.argmax())
        raise InputError(
            "mesh-not-finite",
            expected="finite coordinates",
            found=f"{[float(v) for v in soup.points[row]]} at point {row + 1}, {int(bad.sum())} of {len(bad)} points",
            where=name,
            do="Repair the mesh in the program it comes from and export it again.",
        )


def _settle_unit(soup: Soup, unit: LengthUnit | None, name: str) -> tuple[LengthUnit, str]:
    """Returns the unit and where it is from: "file", "job", or "size" when nobody states it."""
    if soup.unit is None:
        return (LengthUnit.MM, "size") if unit is None else (unit, "job")
    own = LengthUnit(soup.unit)
    if unit is not None and unit is not own:
        raise SettingError(
            "mesh-unit-conflict",
            expected=f'no unit, because the file states its own (read as "{own}")',
            found=f'unit = "{unit}"',
            where=f"[blank] unit of {name}",
            do="Remove unit; if the file states the wrong one, export it again.",
        )
    return own, "file"


def _require_size(size_mm: Floats, unit: LengthUnit, source: str, name: str) -> None:
    """Raises `mesh-unit-doubtful` or `mesh-too-large` for a body no insert has the size of."""
    largest = float(size_mm.max())
    if SMALLEST_MM <= largest <= LARGEST_MM or (source != "size" and 0.0 < largest <= LARGEST_MM):
        return
    found = " x ".join(f"{v:.6g}" for v in size_mm) + f" mm, read as {unit}"
    if largest > LARGEST_MM:
        raise InputError(
            "mesh-too-large",
            expected=f"a body of at most {LARGEST_MM:.0f} mm",
            found=found,
            where=name,
            do='Check the unit: [blank] unit = "micron" if it is drawn in micrometres.',
        )
    fits = [
        f'unit = "{u}" makes {largest / MM_PER_UNIT[unit] * f:.6g} mm'
        for u, f in MM_PER_UNIT.items()
        if SMALLEST_MM <= largest / MM_PER_UNIT[unit] * f <= LARGEST_MM
    ]
    raise InputError(
        "mesh-unit-doubtful",
        expected=f"a largest side of at least {SMALLEST_MM:.0f} mm, or a unit in [blank]",
        found=found,
        where=name,
        do=f"Add the unit it is drawn in to [blank]: {', '.join(fits)}." if fits else "Export it in mm.",
    )


def _read_bytes(path: Path) -> bytes:
    def refuse(code: str, expected: str, found: str, do: str) -> InputError:
        return InputError(code, expected=expected, found=found, where=path.name, do=do)

    try:
        if path.is_dir():
            raise refuse("mesh-is-folder", "a file", "a folder", "Name the mesh file inside it.")
        if not path.exists():
            do = "Check the name in [blank] file; it is taken relative to the job file."
            raise refuse("mesh-missing", "an existing file", "no such file", do)
        if not path.is_file():
            raise refuse("mesh-unreadable", "a regular file", "a pipe or device", "Copy the mesh into a file.")
        size = path.stat().st_size
        if size > LARGEST_FILE_BYTES:
            most = f"a file of at most {LARGEST_FILE_BYTES / 1e6:.0f} MB"
            do = "Export it with a coarser chord tolerance, or as binary STL."
            raise refuse("mesh-file-too-large", most, f"{size / 1e6:.0f} MB", do)
        content = path.read_bytes()
    except (OSError, ValueError) as error:
        said = f"the system said: {getattr(error, 'strerror', None) or type(error).__name__}"
        raise refuse("mesh-unreadable", "a readable file", said, "Check the file's name and permissions.") from error
    if not content:
        do = "Export the mesh again; the writing may have been cut off."
        raise refuse("mesh-file-empty", "a mesh", "a file of 0 bytes", do)
    return content
