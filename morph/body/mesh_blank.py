"""A blank given as a mesh: read, checked, laid against the carrier, and its skin divided into named faces.

The mesh lies where it lies in the part frame. Its skin on the carrier is the face `carrier`; flat ends are
`foot` (against the build direction), `top` (along it), `back` (away from the sheet's centre), and `-x` to `+z`;
all the rest of the outside is `side`. Under the sheet the skin must lie on the carrier: that is the part face.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.carrier_face import carrier_face
from morph.body.face import Face, FaceRole, PlaneFace
from morph.body.flat_region import LEAST_WIDTH_MM, FlatRegion, find_flat_region, least_heights_mm, make_flat_search
from morph.body.part_face import ON_CARRIER_MM, PartFace, require_part_face
from morph.body.skin import Skin
from morph.body.skin_face import FlatFace, SkinFace
from morph.core.arrays import Bools, Floats, unit_rows
from morph.core.errors import GeometryError, SettingError
from morph.core.progress import SILENT, Progress
from morph.core.verdict import Notice
from morph.geometry.mesh import Mesh, triangle_normals
from morph.read.mesh_body import require_body
from morph.read.mesh_file import MeshFile, read_mesh
from morph.settings.job import BlankSettings, MeshBlankSettings
from morph.surface.carrier import Carrier

FACING_COSINE = float(np.cos(np.radians(30.0)))
"""Skin on the carrier faces within this of the carrier's own normal."""

SKEW = 0.1
"""A direction within 6 degrees of the build direction has no part across it worth calling back."""

AXES = {f"{'-+'[sign > 0]}{'xyz'[axis]}": (axis, sign) for axis in range(3) for sign in (-1.0, 1.0)}


@dataclass(frozen=True, slots=True, eq=False)
class MeshBody:
    """A mesh blank before its faces have roles.

    Args:
        faces: the carrier first. synonyms: other names of some of them.
        skin: the finished body.
        notices: what was found in the file.
    """

    faces: tuple[FlatFace | SkinFace, ...]
    synonyms: dict[str, str]
    skin: Skin
    notices: tuple[Notice, ...]


def make_mesh_body(
    settings: MeshBlankSettings,
    carrier: Carrier,
    size_mm: tuple[float, float],
    build_direction: tuple[float, float, float],
    progress: Progress = SILENT,
) -> MeshBody:
    """Returns the body in a mesh file with its faces named.

    Args:
        settings: file and unit.
        carrier: the finished face with the sheet on it.
        size_mm: width and height of the sheet.
        build_direction: from the plate into the part.
        progress: told by the crossing test.

    Raises:
        InputError: the file or its mesh is not a body (read/mesh_file.py, read/mesh_body.py).
        SettingError: `mesh-unit-conflict`.
        GeometryError: `part-face-mismatch`, `part-face-other-side`.
    """
    file = read_mesh(settings.file, settings.unit)
    mesh, notices = require_body(file.mesh, file.source, progress)
    endless = carrier_face(carrier)
    on_carrier = _on_carrier(mesh, endless)
    found = require_part_face(mesh, on_carrier, carrier, endless, size_mm, file)
    up = unit_rows(np.array(build_direction, dtype=np.float64)[None, :])[0]
    flat, synonyms = _flat_regions(mesh, _directions(up, carrier, size_mm), ~on_carrier)
    region = np.full(len(mesh.triangles), 1 + len(flat), dtype=np.int64)
    region[on_carrier] = 0
    names = ["carrier", *flat]
    for k, one in enumerate(flat.values(), 1):
        region[one.triangle] = k
    if (region == len(names)).any():
        names.append("side")
    skin = Skin(mesh, region, tuple(names))
    faces = [_face(name, k, skin, flat) for k, name in enumerate(names)]
    return MeshBody(tuple(faces), synonyms, skin, (*notices, *_notices(file, mesh, found)))


def _on_carrier(mesh: Mesh, endless: Face) -> Bools:
    """Returns which triangles (m,) are skin on the carrier: all corners within ON_CARRIER_MM of it, facing its way."""
    away = np.abs(endless.distance_mm(mesh.vertices_mm)) <= ON_CARRIER_MM
    normals, area = triangle_normals(mesh)
    centre = mesh.vertices_mm[mesh.triangles].mean(axis=1)
    facing = np.einsum("ij,ij->i", normals, endless.outward(centre)) >= FACING_COSINE
    needle = least_heights_mm(mesh, area) < ON_CARRIER_MM
    near = np.abs(endless.distance_mm(centre)) <= ON_CARRIER_MM
    on = away[mesh.triangles].all(axis=1) & near & facing
    # a needle between triangles of the carrier has no normal of its own
    held = np.zeros(len(mesh.vertices_mm), dtype=np.bool_)
    held[mesh.triangles[on]] = True
    return np.asarray(on | (needle & near & held[mesh.triangles].all(axis=1)), dtype=np.bool_)


def _directions(up: Floats, carrier: Carrier, size_mm: tuple[float, float]) -> dict[str, Floats]:
    """Returns the unit directions in which flat ends are looked for, by name, the names a job prefers first."""
    inward = carrier.into_metal(np.array([[0.5 * size_mm[0], 0.5 * size_mm[1]]]))[0]
    across = inward - (inward @ up) * up
    back = across / np.linalg.norm(across) if float(np.linalg.norm(across)) > SKEW else inward
    axes = {name: sign * np.eye(3)[axis] for name, (axis, sign) in AXES.items()}
    return {"foot": -up, "top": up, "back": np.asarray(back, dtype=np.float64), **axes}


def _flat_regions(
    mesh: Mesh, directions: dict[str, Floats], free: Bools
) -> tuple[dict[str, FlatRegion], dict[str, str]]:
    """Returns the flat ends by name, and the names that mean one already found."""
    search = make_flat_search(mesh, free)
    found: dict[str, FlatRegion] = {}
    synonyms: dict[str, str] = {}
    owner = np.full(len(mesh.triangles), -1, dtype=np.int64)
    for name, direction in directions.items():
        one = find_flat_region(search, direction)
        if one is None or one.width_mm < LEAST_WIDTH_MM:
            continue
        taken = owner[one.triangle].max()
        if taken >= 0:
            synonyms[name] = list(found)[taken]
            continue
        owner[one.triangle] = len(found)
        found[name] = one
    return found, synonyms


def _face(name: str, region: int, skin: Skin, flat: dict[str, FlatRegion]) -> FlatFace | SkinFace:
    if name in flat:
        one = flat[name]
        return FlatFace(name, FaceRole.OUTER, 0.0, one.origin_mm, one.normal, skin, region)
    return SkinFace(name, FaceRole.OUTER, 0.0, skin, region)


def _notices(file: MeshFile, mesh: Mesh, found: PartFace) -> list[Notice]:
    unit = {"file": "as the file states", "job": "as the job states", "size": "taken, because the file states none"}
    size = " x ".join(f"{v:.3f}" for v in np.ptp(mesh.vertices_mm, axis=0))
    text = (
        f"The blank is the mesh {file.source}: {len(mesh.triangles)} triangles, {size} mm, unit {file.unit} "
        f"({unit[file.unit_from]}). Under the sheet its skin lies within {found.worst_mm:.4f} mm of the carrier "
        f"(mean {found.mean_mm:+.4f} mm, positive outside it), at {found.places} places; {ON_CARRIER_MM} mm are "
        "allowed. Walls are measured to the mesh."
    )
    if file.dropped:
        text += f" {file.dropped} triangles without area were left out."
    return [Notice("mesh-blank", text)]


def require_mesh_faces(body: MeshBody, settings: BlankSettings) -> None:
    """Raises when a job asks of a face of a mesh what only a flat end can give.

    Raises:
        GeometryError: `mesh-face-not-flat` for an end that is not flat. SettingError: `mesh-side-face`.
    """
    flat = [face.name for face in body.faces if isinstance(face, PlaneFace)]
    known = {face.name for face in body.faces} | set(body.synonyms)
    wanted = [*settings.part_faces, *settings.port_faces, *(name for name, _ in settings.stock_mm)]
    for name in wanted:
        if name not in known and (name in AXES or name in {"foot", "top", "back"}):
            raise GeometryError(
                "mesh-face-not-flat",
                expected=f"a flat end of the mesh at least {LEAST_WIDTH_MM:g} mm wide, square within 1 degree to the "
                f"direction of '{name}'",
                found="none there; its flat ends are " + (", ".join([*flat, *sorted(body.synonyms)]) or "none"),
                where=f"[blank] face '{name}'",
                do="Name one of these, turn [print] build_direction, or give the body a flat end there.",
            )
    with_stock = tuple(name for name, stock in settings.stock_mm if stock > 0.0)
    for key, names in (("port_faces", settings.port_faces), ("stock_mm", with_stock)):
        for name in names:
            if name in {"side", "carrier"} and name in known:
                raise SettingError(
                    "mesh-side-face",
                    expected="a flat end of the mesh: " + (", ".join(flat) or "it has none"),
                    found=f"'{name}', which need not be flat",
                    where=f"[blank] {key}",
                    do="Let ports come out of flat ends, and draw stock on other faces into the mesh.",
                )
