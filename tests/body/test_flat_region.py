"""Flat ends of a mesh: found where there are, with plane, area and width by hand, and not where there are none."""

import numpy as np
import pytest
import trimesh

from morph.body.flat_region import find_flat_region, make_flat_search, region_width_mm
from tests.body import mesh_bodies

UP = np.array([0.0, 0.0, 1.0])


def found(body, direction, free=None):
    mesh = mesh_bodies.mesh_of(body)
    every = np.ones(len(mesh.triangles), dtype=bool) if free is None else free
    return find_flat_region(make_flat_search(mesh, every), np.asarray(direction, float))


def test_the_sides_of_a_box():
    body = mesh_bodies.block((0, 0, 0), (20, 30, 40))
    for direction, area, width, place in (
        ((0, 0, -1), 600.0, 20.0, 0.0),
        ((1, 0, 0), 1200.0, 30.0, 20.0),
        ((0, 1, 0), 800.0, 20.0, 30.0),
    ):
        one = found(body, direction)
        assert one.area_mm2 == pytest.approx(area) and one.width_mm == pytest.approx(width, abs=0.01)
        np.testing.assert_allclose(one.normal, direction, atol=1e-12)
        assert one.origin_mm @ one.normal == pytest.approx(place)


def test_only_the_extreme_counts():
    one = found(mesh_bodies.round_front(), UP)
    # the top of the boss, a 236-gon or finer inside a circle of radius 11
    assert one.origin_mm[2] == pytest.approx(45.0) and one.area_mm2 == pytest.approx(np.pi * 121.0, rel=1e-3)
    assert 0.95 * 22.0 < one.width_mm < 22.0


def test_a_face_half_a_degree_off_belongs_and_two_degrees_off_does_not():
    body = mesh_bodies.block((-20, -20, 0), (20, 20, 10))
    for degrees, is_there in ((0.5, True), (2.0, False)):
        turned = body.copy()
        turned.apply_transform(trimesh.transformations.rotation_matrix(np.radians(degrees), [1.0, 0.3, 0.0]))
        one = found(turned, UP)
        assert (one is not None) == is_there
        if one is not None:
            assert one.area_mm2 == pytest.approx(1600.0)
            assert (turned.vertices @ one.normal).max() == pytest.approx(one.origin_mm @ one.normal)


def test_a_facet_of_a_round_face_is_narrow():
    one = found(mesh_bodies.rod(30.0, 0.0, 50.0), (1.0, 0.0, 0.0))
    assert one is None or one.width_mm < 1.5


def test_a_ring_is_as_wide_as_its_metal():
    ring = trimesh.creation.annulus(20.0, 28.0, 10.0, sections=120)
    mesh = mesh_bodies.mesh_of(ring)
    rows = np.flatnonzero(ring.face_normals[:, 2] > 0.99)
    assert region_width_mm(mesh, rows) == pytest.approx(8.0, abs=0.2)


def test_triangles_taken_by_another_face_do_not_belong():
    body = mesh_bodies.block((0, 0, 0), (20, 30, 40))
    assert found(body, UP, body.face_normals[:, 2] < 0.5) is None
