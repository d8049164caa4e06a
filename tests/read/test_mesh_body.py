"""Whether a mesh bounds one body: every fault by its own code, with its place where it has one."""

import numpy as np
import pytest
import trimesh

from morph.core.errors import MorphError
from morph.geometry.mesh import Mesh, mesh_volume_mm3
from morph.read.mesh_body import require_body
from tests.read import bodies

BOX = Mesh(bodies.BOX_POINTS, bodies.BOX_TRIANGLES)


def mesh_of(body):
    return Mesh(np.asarray(body.vertices, float), np.asarray(body.faces))


def refused(mesh, code):
    with pytest.raises(MorphError) as caught:
        require_body(mesh, "body.stl")
    assert caught.value.code == code and caught.value.where.startswith("body.stl")
    return caught.value


def shifted(*move):
    body = trimesh.Trimesh(bodies.BOX_POINTS, bodies.BOX_TRIANGLES, process=False)
    body.apply_translation(move)
    return body


def test_bodies_of_any_genus_pass_as_they_are():
    for body in (mesh_of(trimesh.creation.torus(30.0, 8.0)), BOX, mesh_of(trimesh.creation.annulus(10.0, 20.0, 5.0))):
        found, notices = require_body(body, "body.stl")
        assert found is body and notices == ()


def test_a_body_inside_out_is_turned_with_a_notice():
    found, notices = require_body(Mesh(BOX.vertices_mm, BOX.triangles[:, ::-1]), "body.stl")
    assert mesh_volume_mm3(found) == pytest.approx(24000.0)
    assert [notice.code for notice in notices] == ["mesh-turned-outwards"]


def test_a_hole_is_told_with_its_rim():
    # the triangle (1, 5, 7) on z = 40 left out: sides 20, 30 and their diagonal
    rows = np.delete(bodies.BOX_TRIANGLES, 10, axis=0)
    found = refused(Mesh(BOX.vertices_mm, rows), "mesh-open")
    assert "1 hole with 3 open edges" in found.found and f"{50.0 + np.hypot(20.0, 30.0):.3f} mm" in found.found
    assert "40.000) mm" in found.where


def test_mixed_orientation():
    rows = bodies.BOX_TRIANGLES.copy()
    rows[0] = rows[0][::-1]
    assert "3 edges" in refused(Mesh(BOX.vertices_mm, rows), "mesh-mixed-orientation").found


def test_edges_of_three_and_bodies_that_touch_along_an_edge():
    fin = np.vstack([bodies.BOX_TRIANGLES, [[0, 1, 8]]])
    refused(Mesh(np.vstack([BOX.vertices_mm, [[-9.0, -9.0, 20.0]]]), fin), "mesh-edge-of-three")
    touching = shifted(0, 0, 0) + shifted(20, 30, 0)
    touching.merge_vertices()
    assert "at most 4" in refused(mesh_of(touching), "mesh-edge-of-three").found


def test_bodies_that_touch_in_a_point():
    touching = shifted(0, 0, 0) + shifted(20, 30, 40)
    touching.merge_vertices()
    assert "(20.000, 30.000, 40.000) mm" in refused(mesh_of(touching), "mesh-pinched").where


def test_several_bodies_and_inner_voids():
    assert (
        "2 pieces of 24000, 24000 mm3"
        in refused(mesh_of(shifted(0, 0, 0) + shifted(50, 0, 0)), "mesh-several-bodies").found
    )
    void = trimesh.creation.box((4, 4, 4))
    void.apply_translation([10, 15, 20])
    void.invert()
    assert "void inside" in refused(mesh_of(shifted(0, 0, 0) + void), "mesh-several-bodies").found


def test_a_sheet_folded_onto_itself_has_no_volume():
    flat = Mesh(BOX.vertices_mm * [1.0, 1.0, 1e-7], BOX.triangles)
    refused(flat, "mesh-no-volume")


def test_a_surface_through_itself_is_told_with_its_place():
    points = BOX.vertices_mm.copy()
    points[7] = [-20.0, 10.0, 10.0]  # the corner (20, 30, 40) pulled out through the side x = 0
    refused(Mesh(points, BOX.triangles), "mesh-crosses-itself")
