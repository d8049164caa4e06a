"""Signed distances to the skin of a mesh: closed forms, and an outside library's inside test on wild bodies."""

import numpy as np
import pytest
import trimesh

from morph.body.face import FaceRole
from morph.body.skin import ON_SKIN_MM, WHOLE
from morph.body.skin_face import SkinFace
from tests.body import mesh_bodies

RNG_SEEDS = (3, 4)
FAR_FROM_SKIN_MM = 0.02
"""Nearer than this the outside library and morph may disagree about which side of a facet a point lies."""


def box_distance(points, half):
    """Exact signed distance of a box about the origin, positive inside: the textbook closed form."""
    out = np.abs(points) - half
    return -(np.linalg.norm(np.maximum(out, 0.0), axis=1) + np.minimum(out.max(axis=1), 0.0))


def off_skin(points, half):
    """Points that do not count as on the skin."""
    return points[np.abs(box_distance(points, half)) > ON_SKIN_MM]


def face_of(skin, region=0):
    return SkinFace(skin.names[region], FaceRole.OUTER, 0.0, skin, region)


@pytest.mark.parametrize("seed", RNG_SEEDS)
def test_distance_and_normal_of_a_box_are_exact(seed):
    half = np.array([20.0, 15.0, 10.0])
    face = face_of(mesh_bodies.skin_of(mesh_bodies.block(-half, half)))
    points = off_skin(np.random.default_rng(seed).uniform(-30.0, 30.0, (4000, 3)), half)
    exact = box_distance(points, half)
    found = face.distance_mm(points)
    np.testing.assert_allclose(found, exact, atol=1e-9)
    # along the normal by the distance lies the nearest skin, from both sides
    reached = points + found[:, None] * face.outward(points)
    np.testing.assert_allclose(box_distance(reached, half), 0.0, atol=1e-9)


def test_distance_to_a_part_of_the_skin_is_negative_only_where_a_point_came_out_of_it():
    half = np.array([20.0, 15.0, 10.0])
    body = mesh_bodies.block(-half, half)
    top = (body.face_normals[:, 2] > 0.5).astype(int)
    skin = mesh_bodies.skin_of(body, top, ("rest", "top"))
    points = off_skin(np.random.default_rng(5).uniform(-30.0, 30.0, (4000, 3)), half)
    x, y = np.clip(points[:, 0], -20.0, 20.0), np.clip(points[:, 1], -15.0, 15.0)
    clipped = np.column_stack([x, y, np.full(len(points), 10.0)])
    whole = box_distance(points, half)
    exact = np.linalg.norm(points - clipped, axis=1)
    exact[(whole < 0.0) & (exact <= -whole + 1e-6)] *= -1.0
    assert (exact[whole < 0.0] > 0.0).any() and (exact[whole < 0.0] < 0.0).any()
    np.testing.assert_allclose(face_of(skin, 1).distance_mm(points), exact, atol=1e-9)
    # the least over the parts is the distance to the whole, inside and outside
    both = np.minimum(*(face_of(skin, k).distance_mm(points) for k in (0, 1)))
    np.testing.assert_allclose(both, whole, atol=1e-9)


def crumpled(seed):
    body = trimesh.creation.icosphere(subdivisions=3, radius=30.0)
    body.vertices *= 1.0 + 0.4 * np.random.default_rng(seed).uniform(-1.0, 1.0, (len(body.vertices), 1))
    return body


def drilled():
    body = mesh_bodies.united(mesh_bodies.block((-30, -20, -20), (30, 20, 20)), mesh_bodies.rod(10, 10, 50, (10, 0)))
    return mesh_bodies.without(body, mesh_bodies.rod(6, -50, 60, (-15.0, 5.0)))


@pytest.mark.parametrize("body", [trimesh.creation.torus(30.0, 8.0), crumpled(1), crumpled(2), drilled()])
def test_inside_agrees_with_an_outside_library(body):
    skin = mesh_bodies.skin_of(body)
    low, high = body.bounds
    points = np.random.default_rng(7).uniform(low - 5.0, high + 5.0, (3000, 3))
    distance, _, _ = skin.nearest(WHOLE, points)
    clear = distance > FAR_FROM_SKIN_MM
    np.testing.assert_array_equal(skin.in_metal(points)[clear], body.contains(points)[clear])


def test_torus_distance_within_its_facets():
    # closed form: r - hypot(hypot(x, y) - R, z); 96 x 48 facets leave it by R' (1 - cos) < 0.04 + 0.02 mm
    skin = mesh_bodies.skin_of(trimesh.creation.torus(30.0, 8.0, major_sections=96, minor_sections=48))
    points = np.random.default_rng(8).uniform(-40.0, 40.0, (4000, 3))
    exact = 8.0 - np.hypot(np.hypot(points[:, 0], points[:, 1]) - 30.0, points[:, 2])
    assert np.abs(face_of(skin).distance_mm(points) - exact).max() < 0.06


def test_points_on_the_skin_count_as_metal_and_have_its_normal():
    half = np.array([20.0, 15.0, 10.0])
    skin = mesh_bodies.skin_of(mesh_bodies.block(-half, half))
    points = np.array([[20.0 + 0.9 * ON_SKIN_MM, 1.0, 2.0], [20.0, 1.0, 2.0], [20.0 - 0.9 * ON_SKIN_MM, 1.0, 2.0]])
    assert skin.in_metal(points).all()
    np.testing.assert_allclose(face_of(skin).outward(points), [[1.0, 0.0, 0.0]] * 3, atol=1e-12)


def test_a_needle_does_not_turn_the_body_inside_out():
    # a triangle of height 1e-7 mm between two others, its normal pointing anywhere
    body = mesh_bodies.block((-20, -20, -20), (20, 20, 20))
    vertices = np.vstack([body.vertices, [[20.0 + 1e-7, 0.0, 0.0], [20.0 - 1e-7, 1e-7, 1e-7]]])
    triangles = [t for t, n in zip(body.faces.tolist(), body.face_normals, strict=True) if n[0] < 0.5]
    corners = [k for k in range(8) if body.vertices[k, 0] > 0]
    ring = sorted(corners, key=lambda k: np.arctan2(body.vertices[k, 2], body.vertices[k, 1]))
    for k in range(4):
        a, b = ring[k], ring[(k + 1) % 4]
        triangles.append([a, b, 8 if k < 2 else 9])
    triangles += [[ring[2], 9, 8], [ring[0], 8, 9]]
    fixed = trimesh.Trimesh(vertices, triangles, process=False)
    assert fixed.is_watertight and fixed.volume == pytest.approx(64000.0)
    points = np.random.default_rng(9).uniform(-25.0, 25.0, (3000, 3))
    near = np.abs(points[:, 1:]).max(axis=1) < 1.0
    points[near] *= [1.0, 1e-3, 1e-3]
    exact = box_distance(points, np.full(3, 20.0))
    clear = np.abs(exact) > FAR_FROM_SKIN_MM
    np.testing.assert_array_equal(mesh_bodies.skin_of(fixed).in_metal(points)[clear], exact[clear] > 0.0)


def test_lines_meet_the_skin_where_they_should():
    face = face_of(mesh_bodies.skin_of(drilled()))
    # along x at y = 5, z = 0: out at 30, the bore of radius 6 about x = -15 by its 92 or more facets, in at -30
    found = face.line_crossings_mm(np.array([100.0, 5.0, 0.3]), np.array([-1.0, 0.0, 0.0]))
    np.testing.assert_allclose(found, [70.0, 109.0, 121.0, 130.0], atol=0.005)
