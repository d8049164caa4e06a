"""Wavefront OBJ: points and polygons without a unit; texture, normals, groups and materials are passed over."""

from __future__ import annotations

import numpy as np

from morph.read.mesh_fault import MOST_POINTS, Soup, damaged, not_its_format, require_few, require_indices
from morph.read.polygon import MOST_CORNERS, fan_polygons

PASSED_OVER = {
    *("vt", "vn", "vp", "g", "o", "s", "l", "p", "usemtl", "mtllib", "mg", "lod", "usemap", "maplib"),
    *("bevel", "c_interp", "d_interp", "shadow_obj", "trace_obj"),
}
CURVED = {"cstype", "deg", "curv", "curv2", "surf", "parm", "trim", "hole", "scrv", "sp", "bmat", "step", "con"}
LONGEST_WORD = 40


def read_obj(content: bytes, name: str) -> Soup:
    """Returns the faces of an OBJ file as triangles.

    Args:
        content: the whole file.
        name: its base name, for messages.

    Raises:
        InputError: `mesh-damaged`, `mesh-not-its-format`, `mesh-polygon`, `mesh-too-many-triangles`.
    """
    coordinates: list[float] = []
    polygons: list[list[int]] = []
    n_triangles = 0
    for number, line in enumerate(content.replace(b"\\\r\n", b" ").replace(b"\\\n", b" ").splitlines(), 1):
        words = line.split(b"#", 1)[0].split()
        if not words:
            continue
        kind = words[0].decode("ascii", "replace")
        if kind == "v":
            coordinates += _place(words, number, name)
            if len(coordinates) > 3 * MOST_POINTS:
                raise damaged(name, f"at most {MOST_POINTS} points", "more")
        elif kind in {"f", "fo"}:
            polygons.append(_face(words, len(coordinates) // 3, number, name))
            n_triangles += len(polygons[-1]) - 2
            require_few(n_triangles, name)
        elif kind in CURVED:
            raise not_its_format(name, "polygons", f"a curved surface ({kind}) in line {number}")
        elif kind not in PASSED_OVER:
            raise not_its_format(name, "OBJ statements", f"'{kind[:LONGEST_WORD]}' in line {number}")
    points = np.array(coordinates, dtype=np.float64).reshape(-1, 3)
    corners = np.array([c for polygon in polygons for c in polygon], dtype=np.int64).reshape(-1, 1)
    require_indices(corners, len(points), name)
    return Soup(points, fan_polygons(points, polygons, name))


def _place(words: list[bytes], number: int, name: str) -> list[float]:
    try:
        place = [float(word) for word in words[1:4]]
    except ValueError:
        place = []
    if len(place) != 3:
        raise damaged(name, "v followed by three numbers", f"something else in line {number}")
    return place


def _face(words: list[bytes], n_points: int, number: int, name: str) -> list[int]:
    if not 3 <= len(words) - 1 <= MOST_CORNERS:
        raise damaged(name, f"faces of 3 to {MOST_CORNERS} corners", f"{len(words) - 1} in line {number}")
    try:
        corner = [int(word.split(b"/", 1)[0]) for word in words[1:]]
    except ValueError:
        raise damaged(name, "f followed by numbers of points", f"something else in line {number}") from None
    if 0 in corner or max(abs(c) for c in corner) > MOST_POINTS:
        raise damaged(name, "points counted from 1, or from the last with -1", f"another number in line {number}")
    return [c - 1 if c > 0 else n_points + c for c in corner]
