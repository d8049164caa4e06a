"""Bores, walls and gaps measured on facetted channels against closed forms of the round ones."""

import numpy as np
import pytest
import trimesh

from morph.body.face import CylinderFace, FaceRole, PlaneFace
from morph.check.between import confirm, find_walls
from morph.check.bore import measure_bores
from morph.check.centreline import make_centrelines
from morph.check.channel_wall import make_channel_wall
from morph.check.obstacle import FaceObstacle
from morph.check.wall import measure_wall
from morph.geometry.mesh import Mesh
from morph.solid.result import Insert
from tests.solid.plans import branch, plan_of, sampled

pytestmark = pytest.mark.quick

SIDES = 96
FACET = 1.0 - np.cos(np.pi / SIDES)
"""A polygon of SIDES sides drawn in a circle falls short of it by this part of the radius (sagitta)."""


def tube(start, end, radius_from, radius_to=None, sides=SIDES) -> trimesh.Trimesh:
    """The side of a (conical) tube between two points, facing inwards, in slices of about 0.5 mm."""
    radius_to = radius_from if radius_to is None else radius_to
    start, end = np.asarray(start, float), np.asarray(end, float)
    axis = (end - start) / np.linalg.norm(end - start)
    u = np.cross(axis, [0, 0, 1] if abs(axis[2]) < 0.9 else [1, 0, 0])
    u /= np.linalg.norm(u)
    v = np.cross(axis, u)
    n = int(np.linalg.norm(end - start) / 0.5) + 2
    t = np.linspace(0, 1, n)[:, None, None]
    angle = 2 * np.pi * np.arange(sides) / sides
    ring = np.cos(angle)[:, None] * u + np.sin(angle)[:, None] * v
    vertices = (start + t * (end - start) + (radius_from + t * (radius_to - radius_from)) * ring).reshape(-1, 3)
    k = np.arange(sides)
    faces = []
    for i in range(n - 1):
        a, b = i * sides + k, i * sides + (k + 1) % sides
        faces += [np.column_stack([a, a + sides, b]), np.column_stack([b, a + sides, b + sides])]
    return trimesh.Trimesh(vertices, np.concatenate(faces), process=False)


def written(*bodies) -> Insert:
    """An insert that consists of channel walls only."""
    body = trimesh.util.concatenate(bodies)
    mesh = Mesh(np.asarray(body.vertices), np.asarray(body.faces))
    return Insert(mesh, np.ones(len(mesh.triangles), int), 1.0, 0, ())


def lines_of(*runs):
    """Centrelines of straight branches (start, end, bore from, bore to)."""
    items = []
    for i, (start, end, first, last) in enumerate(runs):
        path = sampled([start, end], 2.0)
        items.append(branch(f"B{i + 1}", f"S{i}", f"E{i}", path, np.linspace(first, last, len(path))))
    return make_centrelines(plan_of(items))


def test_bore_of_a_straight_tube():
    lines = lines_of(((0, 0, 0), (30, 4, 9), 5.0, 5.0))
    bore = measure_bores(lines, make_channel_wall(written(tube((0, 0, 0), (30, 4, 9), 2.5)), lines))
    assert bore == pytest.approx(5.0 * (1 - FACET), abs=1e-6)


def test_bore_of_a_cone():
    """The ball that touches a cone of half angle a around its axis, centred where the radius is r, has radius r cos(a)."""
    lines = lines_of(((0, 0, 0), (40, 0, 0), 8.0, 3.0))
    bore = measure_bores(lines, make_channel_wall(written(tube((0, 0, 0), (40, 0, 0), 4.0, 1.5)), lines))
    half = np.arctan(2.5 / 40.0)
    inner = (lines.along_mm > 4.0) & (lines.along_mm < 36.0)
    assert bore[inner] == pytest.approx(lines.bore_mm[inner] * np.cos(half), rel=2 * FACET)


@pytest.mark.parametrize("off_mm", [0.2, 0.6])
def test_a_centreline_beside_the_middle_still_finds_the_bore(off_mm):
    lines = lines_of(((0, 0, 0), (30, 0, 0), 5.0, 5.0))
    wall = make_channel_wall(written(tube((0, off_mm, 0), (30, off_mm, 0), 2.5)), lines)
    assert measure_bores(lines, wall) == pytest.approx(5.0, rel=0.01)


def test_a_dent_is_a_smaller_bore():
    """A ball of radius 1 pushed 0.7 mm into a bore of 5 mm leaves 5 - 0.7 for a ball that may move aside."""
    dent = trimesh.creation.icosphere(subdivisions=3, radius=1.0)
    dent.apply_translation([15.0, 0.0, 2.5 + 1.0 - 0.7])
    lines = lines_of(((0, 0, 0), (30, 0, 0), 5.0, 5.0))
    bore = measure_bores(lines, make_channel_wall(written(tube((0, 0, 0), (30, 0, 0), 2.5), dent), lines))
    assert bore.min() == pytest.approx(4.3, abs=0.06)
    assert lines.xyz_mm[int(np.argmin(bore)), 0] == pytest.approx(15.0, abs=0.6)


def test_wall_to_a_plane_and_to_cylinders():
    """A tube of radius 2 along y at x = 20: to the plane x = 25 there are 3 mm; inside a core of radius 30 its ends lie
    nearest, at hypot(20, 12) + 2 from the axis; outside a bore of radius 15 its middle, at 20 - 2."""
    lines = lines_of(((20, -12, 0), (20, 12, 0), 4.0, 4.0))
    wall = make_channel_wall(written(tube((20, -12, 0), (20, 12, 0), 2.0)), lines)
    everything = np.ones(len(lines.branch), bool)
    plane = PlaneFace("f", FaceRole.PART, 0.0, np.array([25.0, 0, 0]), np.array([1.0, 0, 0]))
    core = CylinderFace("f", FaceRole.PART, 0.0, 30.0, True)
    bore = CylinderFace("f", FaceRole.PART, 0.0, 15.0, False)
    for face, expected in ((plane, 3.0), (core, 30.0 - np.hypot(20, 12) - 2.0), (bore, 3.0)):
        found = measure_wall(FaceObstacle(face), lines, wall, everything, lambda b: np.full(len(b), 3.0))
        assert found.centreline_mm == pytest.approx(expected, abs=1e-9)
        # The open end of a tube ends square: its rim lies hypot(20 + 2, 12) from the axis, short of the ball end.
        short = 30.0 - np.hypot(22, 12) if face is core else expected
        assert found.mesh_mm == pytest.approx(short, abs=2 * FACET * 2.0 + 1e-6)
    middle = measure_wall(FaceObstacle(bore), lines, wall, everything, lambda b: np.full(len(b), 3.0))
    assert middle.xyz_mm == pytest.approx((16.5, 0.0, 0.0), abs=1e-6)


@pytest.mark.parametrize("angle_deg", [90.0, 50.0, 0.0])
def test_gap_between_skew_tubes(angle_deg):
    """Axes 8 mm apart, radii 2 and 3: 3 mm of metal, half way at z = 2 + 1.5."""
    t = np.radians(angle_deg)
    one = ((-20, 0, 0), (20, 0, 0))
    two = tuple((s * 20 * np.cos(t) + 1.3, s * 20 * np.sin(t), 8.0) for s in (-1, 1))
    lines = lines_of((*one, 4.0, 4.0), (*two, 6.0, 6.0))
    wall = make_channel_wall(written(tube(*one, 2.0), tube(*two, 3.0)), lines)
    found = find_walls(lines, 3.0, 0.2)
    assert len(found) == 1 and found[0].branch_ids == ("B1", "B2")
    assert found[0].wall_mm == pytest.approx(3.0, abs=1e-6)
    checked = confirm(found[0], lines, wall)
    assert checked.mesh_mm == pytest.approx(3.0, abs=2 * FACET * 5.0)
    assert checked.xyz_mm[1:] == pytest.approx((0.0, 3.5), abs=0.01)
    if angle_deg:
        assert checked.xyz_mm[0] == pytest.approx(1.3, abs=0.01)


def test_a_roof_that_reaches_out_is_found_on_the_mesh():
    """The second tube is written 0.8 mm wider than planned: the mesh sees 0.4 mm less wall, and its own place."""
    lines = lines_of(((-20, 0, 0), (20, 0, 0), 4.0, 4.0), ((0, -20, 8), (0, 20, 8), 6.0, 6.0))
    wall = make_channel_wall(written(tube((-20, 0, 0), (20, 0, 0), 2.0), tube((0, -20, 8), (0, 20, 8), 3.4)), lines)
    checked = confirm(find_walls(lines, 3.0, 0.2)[0], lines, wall)
    assert checked.centreline_mm == pytest.approx(3.0) and checked.wall_mm == pytest.approx(2.6, abs=0.01)
    assert checked.xyz_mm == pytest.approx((0.0, 0.0, 3.3), abs=0.15)
