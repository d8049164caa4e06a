"""The process that reads a STEP file: `python -m morph.read.step_worker IN OUT CHORD ANGLE MOST MEMORY`.

It writes points and triangles as .npz and ends with 0, or ends with a number of step_shape.py.
"""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import numpy as np

from morph.read.step_shape import MISSING, NO_SOLID, TOO_MANY, UNREADABLE


def main(arguments: list[str]) -> int:
    """Reads, meshes and writes; returns the exit status."""
    source, target, chord, angle, most, memory = arguments
    _limit_memory(int(memory))
    try:
        from OCP.BRepMesh import BRepMesh_IncrementalMesh
        from OCP.IFSelect import IFSelect_RetDone
        from OCP.STEPControl import STEPControl_Reader
    except ImportError:
        return MISSING

    reader = STEPControl_Reader()
    if reader.ReadFile(source) != IFSelect_RetDone or reader.TransferRoots() == 0:
        return UNREADABLE
    shape = reader.OneShape()
    if shape.IsNull() or not _has_solid(shape):
        return NO_SOLID
    BRepMesh_IncrementalMesh(shape, float(chord), False, float(angle), False)
    parts = _faces(shape, int(most))
    if parts is None:
        return TOO_MANY
    points, triangles, first = [], [], 0
    for own, corners in parts:
        points.append(own)
        triangles.append(corners + first)
        first += len(own)
    np.savez(target, points=np.concatenate(points), triangles=np.concatenate(triangles))
    return 0


def _limit_memory(most_bytes: int) -> None:
    try:
        import resource
    except ImportError:  # not on this platform: the time limit still holds
        return
    resource.setrlimit(resource.RLIMIT_AS, (most_bytes, most_bytes))


def _has_solid(shape: Any) -> bool:
    from OCP.TopAbs import TopAbs_ShapeEnum
    from OCP.TopExp import TopExp_Explorer

    return bool(TopExp_Explorer(shape, TopAbs_ShapeEnum.TopAbs_SOLID).More())


def _faces(shape: Any, most: int) -> list[tuple[np.ndarray, np.ndarray]] | None:
    """Returns points (n, 3) in mm and triangles (m, 3) of each face of the solids, or None past `most` triangles."""
    from OCP.BRep import BRep_Tool
    from OCP.TopAbs import TopAbs_Orientation, TopAbs_ShapeEnum
    from OCP.TopExp import TopExp_Explorer
    from OCP.TopLoc import TopLoc_Location
    from OCP.TopoDS import TopoDS

    out: list[tuple[np.ndarray, np.ndarray]] = []
    total, explorer = 0, TopExp_Explorer(shape, TopAbs_ShapeEnum.TopAbs_FACE)
    cast = getattr(TopoDS, "Face_s", None) or TopoDS.Face
    while explorer.More():
        face, location = cast(explorer.Current()), TopLoc_Location()
        mesh = BRep_Tool.Triangulation_s(face, location)
        explorer.Next()
        if mesh is None:
            continue
        total += mesh.NbTriangles()
        if total > most:
            return None
        move = location.Transformation()
        points = [mesh.Node(k).Transformed(move) for k in range(1, mesh.NbNodes() + 1)]
        corners = np.array([mesh.Triangle(k).Get() for k in range(1, mesh.NbTriangles() + 1)], dtype=np.int64) - 1
        if face.Orientation() == TopAbs_Orientation.TopAbs_REVERSED:
            corners = corners[:, ::-1]
        out.append((np.array([[p.X(), p.Y(), p.Z()] for p in points]), np.ascontiguousarray(corners)))
    return out


if __name__ == "__main__":
    if not Path(sys.argv[1]).is_file():
        sys.exit(UNREADABLE)
    sys.exit(main(sys.argv[1:]))
