"""The mesh as a binary file holds it: single precision, and the two ways that can go wrong.

A mesh file keeps 24 bits per coordinate. Where that moves a vertex by more than the weld length,
or folds two corners of a triangle together, the file would no longer be the solid that was checked,
so it is refused instead of written.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from morph.core.errors import ExportError
from morph.core.tolerance import WELD_MM
from morph.geometry.mesh import Mesh


def _place(point: NDArray[np.float64]) -> str:
    return "(" + ", ".join(f"{value:.4f}" for value in point) + ") mm"


def single_precision_corners(mesh: Mesh, what: str) -> NDArray[np.float32]:
    """Returns the corners (m, 3, 3) of the triangles of `mesh` in single precision, in mm.

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
    moved = np.abs(stored.astype(np.float64) - mesh.vertices_mm).max(axis=1)
    worst = int(np.argmax(moved))
    if not moved[worst] <= WELD_MM:
        raise ExportError(
            "mesh-not-single-precision",
            expected=f"coordinates that single precision holds to {WELD_MM:g} mm",
            found=f"a vertex that would move by {moved[worst]:.3g} mm, and "
            f"{int(np.count_nonzero(~(moved <= WELD_MM))) - 1} more",
            where=f"{what}, vertex {worst} at {_place(mesh.vertices_mm[worst])}",
            do="Move the part nearer to the origin, or round the mesh to single precision and check that.",
        )
    corners: NDArray[np.float32] = np.ascontiguousarray(stored[mesh.triangles])
    same = [(corners[:, i] == corners[:, j]).all(axis=1) for i, j in ((0, 1), (1, 2), (2, 0))]
    folded = np.flatnonzero(np.logical_or.reduce(same))
    if len(folded):
        first = int(folded[0])
        raise ExportError(
            "mesh-triangle-folded",
            expected="three different corners in every triangle as stored",
            found=f"a triangle with two equal corners, and {len(folded) - 1} more",
            where=f"{what}, triangle {first} at {_place(corners[first, 0].astype(np.float64))}",
            do="Weld the mesh at the weld length before writing it.",
        )
    return corners
