"""Binary STL: 80 bytes of constant header, a count, and 50 bytes per triangle, little endian.

The format has no unit; morph writes mm. To make equal solids equal files, whatever order their
triangles were made in, each triangle starts at its lowest corner (x, then y, then z; the turning
sense is kept) and the triangles are sorted by their nine coordinates.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from morph.export.written import make_written_mesh
from morph.geometry.mesh import Mesh

HEADER = b"morph binary mesh, unit mm".ljust(80, b" ")
"""Does not start with "solid", which readers take for the text form of the format."""

RECORD = np.dtype([("normal", "<f4", (3,)), ("corner", "<f4", (3, 3)), ("attribute", "<u2")])


def _normals(corners: NDArray[np.float32]) -> NDArray[np.float32]:
    wide = corners.astype(np.float64)
    cross = np.cross(wide[:, 1] - wide[:, 0], wide[:, 2] - wide[:, 0])
    length = np.linalg.norm(cross, axis=1)
    unit = cross / np.where(length > 0.0, length, 1.0)[:, None]
    return unit.astype(np.float32) + np.float32(0.0)


def stl_bytes(mesh: Mesh, what: str = "solid") -> bytes:
    """Returns `mesh` as the bytes of a binary STL file in mm.

    Args:
        mesh: triangles counter-clockwise seen from outside, coordinates in mm.
        what: the mesh's name in a message.

    Raises:
        ExportError: the mesh is empty or single precision cannot hold it.
    """
    corners = make_written_mesh(mesh, what).corners_mm
    record = np.zeros(len(corners), dtype=RECORD)
    record["normal"] = _normals(corners)
    record["corner"] = corners
    return b"".join([HEADER, len(corners).to_bytes(4, "little"), record.tobytes()])
