"""Between morph's meshes and manifold3d bodies: the only passage to the boolean library and back.

Meshes go in with float32 positions, which makes the library merge edges below float32's own
resolution; results come back as float64 arrays with a number per triangle saying which body it is from.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np

from morph.core.arrays import Floats, Ints
from morph.core.errors import GeometryError
from morph.geometry.mesh import Mesh


def body_from(vertices_mm: Floats, triangles: Ints, what: str) -> tuple[Any, int]:
    """Returns the manifold3d body of a closed mesh, and the id its triangles keep through cuts (see `arrays_of`).

    Args:
        vertices_mm: (n, 3).
        triangles: (m, 3).
        what: names the mesh in messages.

    Raises:
        GeometryError: ``solid-not-closed`` when the library refuses it.
    """
    import manifold3d

    source = int(manifold3d.Manifold.reserve_ids(1))
    body = manifold3d.Manifold(
        manifold3d.Mesh(
            np.ascontiguousarray(vertices_mm, np.float32),
            np.ascontiguousarray(triangles, np.uint32),
            run_index=np.array([0, 3 * len(triangles)], np.uint32),
            run_original_id=np.array([source], np.uint32),
        )
    )
    require_valid(body, what)
    return body, source


@lru_cache(maxsize=1)
def body_of(mesh: Mesh, what: str) -> tuple[Any, int]:
    """Returns the manifold3d body of `mesh` and its id; errors as `body_from`.

    The last one is kept, because trimming the channels and cutting the insert take the same mesh one after the other.
    """
    return body_from(mesh.vertices_mm, mesh.triangles, what)


def require_valid(body: Any, what: str) -> None:
    """Raises ``solid-not-closed`` when the library reports an error on `body`, ``solid-empty`` when it is empty."""
    status = body.status().name
    if status != "NoError":
        raise GeometryError(
            "solid-not-closed",
            expected="a closed mesh, every edge between two triangles",
            found=f"the boolean library's report {status}",
            where=what,
            do="Set another [quality] h_mm (some hundredths of a mm away); if it stays, report the job.",
        )
    if body.is_empty():
        raise GeometryError(
            "solid-empty",
            expected="a body with a volume",
            found="nothing left",
            where=what,
            do="Check that the channels lie inside the blank and do not fill it.",
        )


def arrays_of(body: Any) -> tuple[Floats, Ints, Ints]:
    """Returns vertices (n, 3) in mm, triangles (m, 3), and the id (m,) of the body each triangle comes from."""
    mesh = body.to_mesh64()
    vertices = np.ascontiguousarray(mesh.vert_properties[:, :3], dtype=np.float64)
    triangles = np.asarray(mesh.tri_verts, dtype=np.int64)
    ends = np.asarray(mesh.run_index, dtype=np.int64) // 3
    source = np.repeat(np.asarray(mesh.run_original_id, dtype=np.int64), np.diff(ends))
    merged = np.arange(len(vertices))
    merged[np.asarray(mesh.merge_from_vert, dtype=np.int64)] = np.asarray(mesh.merge_to_vert, dtype=np.int64)
    return vertices, merged[triangles], source
