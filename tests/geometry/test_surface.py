"""Neighbours, sides and repair of triangle surfaces, against tiny cases by hand and trimesh."""

import numpy as np
import pytest
import trimesh

from morph.geometry.adjacency import border_loops, make_adjacency, vertex_normals
from morph.geometry.mesh import Mesh, measure_condition, mesh_area_mm2
from morph.geometry.repair import fill_hole, loop_length_mm, part_of, split_long_edges, weld
from morph.geometry.surface import make_signed, make_surface, turned_over

pytestmark = pytest.mark.quick


def box(size=(4.0, 6.0, 10.0)):
    body = trimesh.creation.box(size)
    return Mesh(body.vertices, body.faces)


def ball(subdivisions=3, radius=10.0):
    body = trimesh.creation.icosphere(subdivisions, radius)
    return Mesh(body.vertices, body.faces)


def test_two_triangles_by_hand():
    found = make_adjacency(np.array([[0, 1, 2], [2, 1, 3]]))
    # the shared edge 1-2 lies opposite corner 0 of the first and corner 2 (vertex 3) of the second
    assert found.neighbour.tolist() == [[1, -1, -1], [-1, -1, 0]]
    assert len(found.crowded) == 0 and len(found.same_way) == 0
    assert make_adjacency(np.array([[0, 1, 2], [1, 2, 3]])).same_way.tolist() == [[1, 2]]
    crowded = make_adjacency(np.array([[0, 1, 2], [2, 1, 3], [1, 2, 4]]))
    assert crowded.crowded.tolist() == [[1, 2]] and (crowded.neighbour == -1).all()


def test_neighbours_of_a_closed_body_agree_with_trimesh():
    mesh = ball()
    neighbour = make_adjacency(mesh.triangles).neighbour
    body = trimesh.Trimesh(mesh.vertices_mm, mesh.triangles, process=False)
    mine = {tuple(sorted((i, int(j)))) for i, row in enumerate(neighbour) for j in row}
    assert mine == {tuple(sorted(pair)) for pair in body.face_adjacency.tolist()}


def test_vertex_normals_do_not_see_how_a_box_is_cut():
    """At a corner of a box three right angles meet, so that the weighted normal is (1, 1, 1) / sqrt 3 for any diagonals."""
    mesh = box()
    np.testing.assert_allclose(vertex_normals(mesh), np.sign(mesh.vertices_mm) / np.sqrt(3.0), atol=1e-12)


@pytest.mark.parametrize("mesh", [box(), ball()], ids=["box", "ball"])
def test_signed_distances_agree_with_trimesh(mesh):
    points = np.random.default_rng(3).uniform(-14, 14, (500, 3))
    body = trimesh.Trimesh(mesh.vertices_mm, mesh.triangles, process=False)
    expected = trimesh.proximity.signed_distance(body, points)
    signed = make_signed(make_surface(mesh))
    np.testing.assert_allclose(signed.inside_mm(points), expected, atol=1e-9)
    other = make_signed(turned_over(signed.surface))
    np.testing.assert_allclose(other.inside_mm(points), -expected, atol=1e-9)


def test_the_side_is_right_straight_off_edges_and_corners():
    signed = make_signed(make_surface(box((2.0, 2.0, 2.0))))
    out = np.array([[1.5, 1.5, 0.3], [1.5, 1.5, 1.5], [-1.2, 0.4, 1.2], [0.9, 0.9, 0.9]])
    expected = [-np.hypot(0.5, 0.5), -np.sqrt(0.75), -np.hypot(0.2, 0.2), 0.1]
    np.testing.assert_allclose(signed.inside_mm(out), expected, atol=1e-12)


def test_weld_joins_a_soup_and_drops_what_collapses():
    mesh = ball()
    soup = Mesh(mesh.vertices_mm[mesh.triangles].reshape(-1, 3), np.arange(3 * len(mesh.triangles)).reshape(-1, 3))
    joined = weld(soup, 1e-5)
    assert len(joined.vertices_mm) == len(mesh.vertices_mm) and measure_condition(joined).closed
    twice = Mesh(mesh.vertices_mm, np.concatenate([mesh.triangles, mesh.triangles[:4], [[0, 0, 1]]]))
    assert len(weld(twice, 1e-5).triangles) == len(mesh.triangles)


@pytest.mark.parametrize("radius", [2.0, 4.5])
def test_a_hole_in_a_ball_is_filled_on_the_ball(radius):
    mesh = ball(4)
    gone = np.linalg.norm(mesh.vertices_mm[mesh.triangles].mean(axis=1) - (0, 0, 10.0), axis=1) < radius
    open_mesh = part_of(mesh, np.flatnonzero(~gone))[0]
    loops = border_loops(open_mesh.triangles, make_adjacency(open_mesh.triangles))
    assert len(loops) == 1
    assert loop_length_mm(open_mesh, loops[0]) == pytest.approx(2 * np.pi * radius, rel=0.5)  # the rim is jagged
    filled = fill_hole(open_mesh, loops[0], vertex_normals(open_mesh))
    condition = measure_condition(filled)
    assert condition.closed and condition.genus == 0
    # a quadric misses the ball's fourth-order term r^4 / (8 R^3) of its height, up to three times where slopes are met too
    assert (
        np.abs(np.linalg.norm(filled.vertices_mm, axis=1) - 10.0).max() < 3.0 * radius**4 / 8000.0 + 0.04
    )  # and the rim is jagged
    assert mesh_area_mm2(filled) == pytest.approx(mesh_area_mm2(mesh), rel=0.01)


def test_two_holes_are_two_loops():
    mesh = ball(4)
    middle = mesh.vertices_mm[mesh.triangles].mean(axis=1)
    gone = (np.linalg.norm(middle - (0, 0, 10.0), axis=1) < 2.0) | (np.linalg.norm(middle - (10.0, 0, 0), axis=1) < 4.0)
    part = part_of(mesh, np.flatnonzero(~gone))[0]
    loops = border_loops(part.triangles, make_adjacency(part.triangles))
    assert len(loops) == 2 and len(loops[0]) > len(loops[1])


def test_long_edges_are_split_and_the_surface_stays():
    mesh = box((4.0, 6.0, 30.0))
    fine, source = split_long_edges(mesh, 3.0)
    corner = fine.vertices_mm[fine.triangles]
    assert np.linalg.norm(corner - np.roll(corner, 1, axis=1), axis=2).max() <= 3.0
    assert measure_condition(fine).closed
    assert mesh_area_mm2(fine) == pytest.approx(mesh_area_mm2(mesh), rel=1e-12)
    normal = make_surface(mesh).normals[source]
    np.testing.assert_allclose(make_surface(fine).normals, normal, atol=1e-12)
