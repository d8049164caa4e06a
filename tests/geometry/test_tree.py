"""The tree against trimesh's own nearest points and rays, and balls and gaps against closed forms."""

import numpy as np
import pytest
import trimesh

from morph.geometry.gap import measure_gap
from morph.geometry.mesh import Mesh, triangle_normals
from morph.geometry.tree import Medium, cast_rays, closest_points, inscribed_balls, make_tree

pytestmark = pytest.mark.quick


def mesh_of(body: trimesh.Trimesh) -> Mesh:
    return Mesh(np.asarray(body.vertices), np.asarray(body.faces))


BODIES = {
    "sphere": lambda: trimesh.creation.icosphere(subdivisions=2, radius=7.0),
    "box": lambda: trimesh.creation.box((4.0, 6.0, 9.0)),
    "torus": lambda: trimesh.creation.torus(8.0, 2.5, major_sections=48, minor_sections=24),
    "tube": lambda: trimesh.creation.annulus(3.0, 5.0, 12.0, sections=40),
}


@pytest.mark.parametrize("name", BODIES)
def test_nearest_points_agree_with_trimesh(name):
    body = BODIES[name]()
    points = np.random.default_rng(5).uniform(-14, 14, (500, 3))
    distance, triangle, foot = closest_points(make_tree(mesh_of(body)), points)
    their_foot, their_distance, _ = trimesh.proximity.closest_point_naive(body, points)
    assert distance == pytest.approx(their_distance, abs=1e-9)
    assert np.linalg.norm(points - foot, axis=1) == pytest.approx(distance, abs=1e-9)
    assert np.abs(np.linalg.norm(points - their_foot, axis=1) - distance).max() < 1e-9
    assert triangle.min() >= 0


@pytest.mark.parametrize("name", BODIES)
def test_first_hits_agree_with_trimesh(name):
    """Every triangle in turn: the plane is met by trimesh's planes_lines, its inside by its barycentric weights."""
    body = BODIES[name]()
    rng = np.random.default_rng(6)
    origin = rng.uniform(-14, 14, (400, 3))
    direction = rng.uniform(-5, 5, (400, 3)) - origin
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    distance, _ = cast_rays(make_tree(mesh_of(body)), origin, direction)
    theirs = np.full(400, np.inf)
    for corner, normal in zip(body.triangles, body.face_normals, strict=True):
        place, valid = trimesh.intersections.planes_lines(
            np.tile(corner[0], (400, 1)), np.tile(normal, (400, 1)), origin, direction
        )
        inside = trimesh.triangles.points_to_barycentric(np.tile(corner, (len(place), 1, 1)), place).min(axis=1) >= 0
        way = ((place - origin[valid]) * direction[valid]).sum(axis=1)
        theirs[valid] = np.where(inside & (way > 1e-7), np.minimum(theirs[valid], way), theirs[valid])
    assert (np.isfinite(theirs) == np.isfinite(distance)).all()
    hit = np.isfinite(theirs)
    assert hit.sum() > 20 and distance[hit] == pytest.approx(theirs[hit], abs=1e-7)


def test_ball_in_a_plate_is_its_thickness():
    mesh = mesh_of(trimesh.creation.box((40.0, 40.0, 2.5)))
    points = np.array([[1.0, 2.0, 1.25], [-7.0, 3.0, -1.25]])
    diameter, triangle = inscribed_balls(make_tree(mesh), points, np.array([[0, 0, -1.0], [0, 0, 1.0]]))
    assert diameter == pytest.approx(2.5, abs=1e-9)
    normals, _ = triangle_normals(mesh)
    assert normals[triangle][:, 2].tolist() == [-1.0, 1.0]


def test_ball_in_a_wedge_follows_the_half_angle():
    """In a wedge of opening angle a a ball touching one face at distance s from the edge has radius s tan(a / 2)."""
    opening = np.radians(40.0)
    far = 30.0 * np.array([[1.0, 0, 0], [np.cos(opening), np.sin(opening), 0.0]])
    low, high = np.array([0.0, 0, -20.0]), np.array([0.0, 0, 20.0])
    corner = np.array([low, far[0] + low, far[1] + low, high, far[0] + high, far[1] + high])
    faces = np.array([[0, 4, 3], [0, 1, 4], [0, 3, 5], [0, 5, 2]])
    s = np.array([2.0, 5.0, 9.0])
    points, up = np.column_stack([s, 0 * s, 0 * s]), np.tile([0.0, 1.0, 0.0], (3, 1))
    diameter, _ = inscribed_balls(make_tree(Mesh(corner, faces[:, [0, 1, 2]])), points, up, Medium.METAL)
    assert diameter == pytest.approx(2.0 * s * np.tan(opening / 2), abs=1e-9)


def test_ball_in_a_bore_is_its_diameter():
    tube = mesh_of(trimesh.creation.annulus(3.0, 8.0, 40.0, sections=96))
    angle = 2.0 * np.pi * (np.arange(8) + 0.5) / 96
    reach = 3.0 * np.cos(np.pi / 96)
    out = np.column_stack([np.cos(angle), np.sin(angle), 0 * angle])
    diameter, _ = inscribed_balls(make_tree(tube), reach * out, -out, Medium.VOID)
    # A regular polygon of 96 sides holds a circle of 2 r cos(pi / 96).
    assert diameter == pytest.approx(2.0 * reach, abs=1e-6)


def test_gap_of_crossing_rods_lies_between_edges():
    """Two square rods laid corner to corner, at right angles: the gap lies between two edges, far from any vertex."""
    rod = trimesh.creation.box((40.0, 2.0, 2.0))
    rod.apply_transform(trimesh.transformations.rotation_matrix(np.pi / 4, [1, 0, 0]))
    other = trimesh.creation.box((2.0, 40.0, 2.0))
    other.apply_transform(trimesh.transformations.rotation_matrix(np.pi / 4, [0, 1, 0]))
    other.apply_translation([0.7, 0.3, 2.0 * np.sqrt(2.0) + 1.25])
    gap = measure_gap(mesh_of(rod), make_tree(mesh_of(other)))
    assert gap.distance_mm == pytest.approx(1.25, abs=1e-9)
    assert gap.middle_mm == pytest.approx((0.7, 0.0, np.sqrt(2.0) + 0.625), abs=1e-9)


def test_an_empty_mesh_has_no_tree():
    with pytest.raises(ValueError, match="expected at least one"):
        make_tree(Mesh(np.zeros((0, 3)), np.zeros((0, 3), dtype=int)))
