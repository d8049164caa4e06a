"""The mesh as a file holds it: single precision, in one order, and the two ways that can go wrong.

A mesh file keeps 24 bits per coordinate. Where that moves a vertex by more than the weld length,
or folds two corners of a triangle together, the file would no longer be the solid that was checked,
so it is refused instead of written.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from morph.core.arrays import Ints
from morph.core.errors import ExportError
from morph.core.tolerance import WELD_MM
from morph.geometry.mesh import Mesh


def _place(point: NDArray[np.float64]) -> str:
    return "(" + ", ".join(f"{value:.4f}" for value in point) + ") mm"


@dataclass(frozen=True, slots=True, eq=False)
class WrittenMesh:
    """A mesh in single precision and in one order, however it was numbered before.

    Args:
        vertices_mm: (n, 3) different vertices, sorted by x, then y, then z.
        triangles: (m, 3) indices; each starts at its lowest vertex and keeps its turning sense; sorted.
    """

    vertices_mm: NDArray[np.float32]
    triangles: Ints

    @property
    def corners_mm(self) -> NDArray[np.float32]:
        """The corners (m, 3, 3) of the triangles."""
        return self.vertices_mm[self.triangles]


def _welded(stored: NDArray[np.float32]) -> tuple[NDArray[np.float32], Ints]:
    """Returns the different rows of `stored (n, 3)`, sorted, and for each old row its new index."""
    order = np.lexsort(stored.T[::-1])
    in_order = stored[order]
    is_new = np.concatenate([[True], (in_order[1:] != in_order[:-1]).any(axis=1)])
    index = np.empty(len(stored), dtype=np.int64)
    index[order] = np.cumsum(is_new) - 1
    return in_order[is_new], index


def _sorted_triangles(triangles: Ints) -> Ints:
    """Returns `triangles (m, 3)` each turned to its lowest index, in rising order."""
    lowest = np.argmin(triangles, axis=1)
    turned = triangles[np.arange(len(triangles))[:, None], (lowest[:, None] + np.arange(3)) % 3]
    return np.asarray(turned[np.lexsort(turned.T[::-1])], dtype=np.int64)


def _require_held(mesh: Mesh, stored: NDArray[np.float32], what: str) -> None:
    """Raises unless single precision holds every vertex to the weld length."""
    moved = np.abs(stored.astype(np.float64) - mesh.vertices_mm).max(axis=1)
    off = np.flatnonzero(~(moved <= WELD_MM))
    if len(off):
        worst = int(off[np.argmax(moved[off])])
        raise ExportError(
            "mesh-not-single-precision",
            expected=f"coordinates that single precision holds to {WELD_MM:g} mm",
            found=f"a vertex that would move by {moved[worst]:.3g} mm, and {len(off) - 1} more",
            where=f"{what}, vertex {worst} at {_place(mesh.vertices_mm[worst])}",
            do="Move the part nearer to the origin, or round the mesh to single precision and check that.",
        )


def make_written_mesh(mesh: Mesh, what: str) -> WrittenMesh:
    """Returns `mesh` in single precision, in mm, welded and sorted.

    Args:
        mesh: the solid to write.
        what: its name in a message.

    Raises:
        ExportError: there is no triangle, a coordinate moves by more than the weld length when
            stored, or two corners of a triangle fall together.
    """
    if len(mesh.triangles) == 0:
        raise ExportError(
            "mesh-empty",
            expected="at least one triangle",
            found="none",
            where=what,
            do="No file is written; look at the verdicts of the solid first.",
        )
    with np.errstate(over="ignore"):
        stored = mesh.vertices_mm.astype(np.float32) + np.float32(0.0)
    _require_held(mesh, stored, what)
    vertices, index = _welded(stored)
    triangles = index[mesh.triangles]
    folded = np.flatnonzero((triangles == np.roll(triangles, 1, axis=1)).any(axis=1))
    if len(folded):
        first = int(folded[0])
        raise ExportError(
            "mesh-triangle-folded",
            expected="three different corners in every triangle as stored",
            found=f"a triangle with two equal corners, and {len(folded) - 1} more",
            where=f"{what}, triangle {first} at {_place(mesh.vertices_mm[mesh.triangles[first, 0]])}",
            do="Weld the mesh at the weld length before writing it.",
        )
    return WrittenMesh(vertices, _sorted_triangles(triangles))
