"""Binary STL against its layout (80 bytes, uint32 count, 50 bytes a triangle) and an independent reader."""

import io
import struct

import numpy as np
import pytest
import trimesh

from morph.core.errors import ExportError
from morph.export.stl import stl_bytes
from morph.geometry.mesh import Mesh

pytestmark = pytest.mark.quick


def test_layout_is_that_of_the_format(box):
    data = stl_bytes(box)
    assert len(data) == 84 + 50 * 12
    assert not data.startswith(b"solid")
    assert struct.unpack("<I", data[80:84]) == (12,)
    normal_and_corners = struct.unpack("<12fH", data[84:134])
    assert normal_and_corners[12] == 0
    a, b, c = np.array(normal_and_corners[3:12]).reshape(3, 3)
    assert np.allclose(np.cross(b - a, c - a), normal_and_corners[:3])


def test_reads_back_closed_outward_and_of_the_same_size(box_of):
    mesh = trimesh.load(io.BytesIO(stl_bytes(box_of((-1.5, 2.0, 3.0), (4.0, 9.0, 5.25)))), file_type="stl")
    assert mesh.is_watertight and mesh.is_winding_consistent
    assert mesh.volume == pytest.approx(5.5 * 7.0 * 2.25, rel=1e-6)


def test_same_solid_gives_same_bytes_in_any_order(box):
    rng = np.random.default_rng(5)
    shuffle, rename = rng.permutation(12), rng.permutation(8)
    turned = np.array([np.roll(t, k) for t, k in zip(box.triangles[shuffle], rng.integers(0, 3, 12), strict=True)])
    back = np.argsort(rename)
    assert stl_bytes(Mesh(box.vertices_mm[rename], back[turned])) == stl_bytes(box)


def test_triangles_are_sorted_and_start_at_their_lowest_corner(box):
    body = np.frombuffer(stl_bytes(box)[84:], dtype=[("n", "<f4", 3), ("c", "<f4", (3, 3)), ("a", "<u2")])
    rows = [tuple(map(tuple, t.tolist())) for t in body["c"]]
    assert rows == sorted(rows)
    assert all(t[0] == min(t) for t in rows)


def test_minus_zero_is_zero(box):
    flipped = Mesh(box.vertices_mm * -1.0 + 0.0, box.triangles[:, ::-1])
    minus = Mesh(np.where(flipped.vertices_mm == 0.0, -0.0, flipped.vertices_mm), flipped.triangles)
    assert stl_bytes(minus) == stl_bytes(flipped)


def test_empty_mesh_is_refused():
    with pytest.raises(ExportError) as caught:
        stl_bytes(Mesh(np.zeros((3, 3)), np.zeros((0, 3), int)), "channels")
    assert caught.value.code == "mesh-empty" and "channels" in caught.value.sentence()


def test_far_coordinates_are_refused(box):
    # single precision has a spacing of 2^-9 mm at 10 m, so 10000.0007 would move by 7e-4 mm
    with pytest.raises(ExportError) as caught:
        stl_bytes(Mesh(box.vertices_mm + 10000.0007, box.triangles))
    assert caught.value.code == "mesh-not-single-precision" and "7 more" in caught.value.found
    with pytest.raises(ExportError):
        stl_bytes(Mesh(box.vertices_mm * 1e39, box.triangles))


def test_folded_triangle_is_refused(box):
    # 3e-8 mm beside 64 mm is below the spacing of single precision (7.6e-6 mm)
    vertices = np.vstack([box.vertices_mm + 64.0, [[64.0, 64.0, 64.00000003]]])
    with pytest.raises(ExportError) as caught:
        stl_bytes(Mesh(vertices, np.vstack([box.triangles, [[0, 8, 1]]])))
    assert caught.value.code == "mesh-triangle-folded"
