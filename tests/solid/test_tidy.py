"""What rounding to a file does to a mesh, and its repair."""

import numpy as np
import pytest

from morph.core.errors import GeometryError
from morph.geometry.mesh import Mesh, measure_condition, mesh_volume_mm3, triangle_normals
from morph.solid.tidy import is_closed, make_file_mesh, require_closed

pytestmark = pytest.mark.quick

BOX = np.array([[x, y, z] for x in (0.0, 1.0) for y in (0.0, 1.0) for z in (0.0, 1.0)])
BOX_FACES = np.array(
    [
        [0, 1, 3],
        [0, 3, 2],
        [4, 7, 5],
        [4, 6, 7],
        [0, 5, 1],
        [0, 4, 5],
        [2, 3, 7],
        [2, 7, 6],
        [0, 2, 6],
        [0, 6, 4],
        [1, 5, 7],
        [1, 7, 3],
    ]
)


def labels(n):
    return np.arange(n, dtype=np.int64)


def split_edge(vertices, faces, a, b, share, off=0.0):
    """The box with a vertex on edge a b, `off` mm aside: two triangles more, both hardly higher than `off`."""
    point = vertices[a] + share * (vertices[b] - vertices[a]) + off
    out, new = [], len(vertices)
    for face in faces.tolist():
        if a in face and b in face:
            k = next(k for k in range(3) if {face[k], face[(k + 1) % 3]} == {a, b})
            one, two, far = face[k], face[(k + 1) % 3], face[(k + 2) % 3]
            out += [[one, new, far], [new, two, far]]
        else:
            out.append(face)
    return np.vstack([vertices, point]), np.array(out)


def test_a_clean_mesh_only_changes_order():
    mesh, label = make_file_mesh(BOX, BOX_FACES[::-1], labels(12)[::-1], "box")
    assert is_closed(mesh) and mesh_volume_mm3(mesh) == 1.0
    assert (mesh.vertices_mm == BOX).all()
    other, other_label = make_file_mesh(BOX[::-1], 7 - np.roll(BOX_FACES, 1, axis=1), labels(12), "box")
    assert (other.triangles == mesh.triangles).all() and (other_label == label).all()


def test_vertices_that_round_to_one_are_welded():
    vertices, faces = split_edge(BOX, BOX_FACES, 0, 3, 1e-9)
    mesh, label = make_file_mesh(vertices, faces, labels(len(faces)), "box")
    assert len(mesh.vertices_mm) == 8 and len(mesh.triangles) == len(label) == 12 and is_closed(mesh)


def test_an_edge_shorter_than_the_weld_collapses():
    vertices, faces = split_edge(BOX, BOX_FACES, 0, 3, 4e-6)
    mesh, _ = make_file_mesh(vertices, faces, labels(len(faces)), "box")
    assert len(mesh.vertices_mm) == 8 and is_closed(mesh)


@pytest.mark.parametrize("share", [0.5, 0.3, 0.9])
def test_a_flat_triangle_is_flipped_away(share):
    """A sliver 0, middle, 1 laid on the edge 0-1: no height at all."""
    vertices, faces = split_edge(BOX, BOX_FACES, 0, 1, share)
    new = len(vertices) - 1
    # undo the split on one side and put the flat triangle in between
    kept = [f for f in faces.tolist() if not (new in f and 5 in f)]
    faces = np.array([*kept, [0, 5, 1], [0, 1, new]])
    assert measure_condition(Mesh(vertices, faces)).closed
    assert triangle_normals(Mesh(vertices, faces))[1].min() == 0.0
    mesh, label = make_file_mesh(vertices, faces, np.where(np.arange(len(faces)) == len(faces) - 1, 7, 1), "box")
    assert is_closed(mesh) and mesh_volume_mm3(mesh) == pytest.approx(1.0, abs=1e-6)
    assert triangle_normals(mesh)[1].min() > 0.01
    assert (label == 1).all()  # the flat triangle took the label of the triangle it was laid into


def test_an_open_mesh_is_refused():
    with pytest.raises(GeometryError) as caught:
        make_file_mesh(BOX, BOX_FACES[1:], labels(11), "the box")
    assert caught.value.code == "solid-not-closed"
    assert "3 open" in caught.value.found and caught.value.where == "the box"
    with pytest.raises(GeometryError):
        require_closed(Mesh(BOX, np.zeros((0, 3), int)), "nothing")


def test_positions_are_float32():
    mesh, _ = make_file_mesh(BOX * 0.1 + 1e3 / 3, BOX_FACES, labels(12), "box")
    assert (mesh.vertices_mm == mesh.vertices_mm.astype(np.float32)).all()
