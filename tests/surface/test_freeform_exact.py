"""The free-form path on meshes of shapes with a closed form: cylinder, cone, sphere, torus."""

import math
from pathlib import Path

import numpy as np
import pytest

from morph.geometry.mesh import Mesh, mesh_area_mm2
from morph.geometry.surface import make_signed, same_places
from morph.settings.job import (
    CarrierSettings,
    ConeSettings,
    FreeformSettings,
    Least,
    Metal,
    SeenFrom,
    TrueAt,
)
from morph.surface.cone import make_cone
from morph.surface.cylinder import make_cylinder
from morph.surface.distortion import advice, measure_maps
from morph.surface.grid_spline import spline_through
from morph.surface.grow import exponential_map
from morph.surface.guide import make_guide
from morph.surface.lay import make_freeform
from morph.surface.offset import offset_surface
from morph.surface.relax import Heading
from morph.surface.sheet_grid import make_grid
from tests.surface import bodies

SIZE, DEPTH_MM, RADIUS_MM, HALF_DEG = (90.0, 60.0), 8.0, 40.0, 12.0
POSITION_MM = 0.006
"""Asked for at 80 000 triangles, whose facets lie up to 0.005 mm off the surface."""
DENSE = 80_000


def settings(true_at=TrueAt.DEPTH, least=Least.RMS):
    return FreeformSettings(
        Path("core.stl"),
        (RADIUS_MM, 0.0, 0.0),
        (0.0, 0.0, 1.0),
        (30.0, 0.0, 0.0),
        depth_mm=DEPTH_MM,
        true_at=true_at,
        least=least,
    )


@pytest.fixture(scope="module")
def cylinder_mesh():
    return bodies.cylinder(RADIUS_MM, DENSE, 11)


def places(count=3000, seed=3):
    return np.random.default_rng(seed).uniform((0.0, 0.0), SIZE, (count, 2))


def apart(one, two):
    return float(np.linalg.norm(one - two, axis=1).max())


@pytest.mark.parametrize("true_at", list(TrueAt))
@pytest.mark.parametrize("seen", list(SeenFrom))
def test_a_cylinder_mesh_gives_the_closed_form(cylinder_mesh, true_at, seen):
    sheet = make_freeform(settings(true_at), cylinder_mesh, SIZE, seen, DEPTH_MM)
    exact = make_cylinder(
        CarrierSettings(RADIUS_MM, Metal.TOWARD_AXIS, DEPTH_MM, true_at=true_at), SIZE, seen, DEPTH_MM
    )
    for depth in (0.0, 4.0, DEPTH_MM):
        assert apart(sheet.carrier.point_mm(places(), depth), exact.point_mm(places(), depth)) < POSITION_MM
    assert np.abs(sheet.carrier.jacobian(places(), DEPTH_MM) - exact.jacobian(places(), DEPTH_MM)).max() < 1e-3
    assert np.abs(sheet.carrier.shape_operator(places()) - exact.shape_operator(places())).max() < 2e-4
    assert np.abs(sheet.report.depth_error_mm).max() < POSITION_MM
    assert not sheet.report.notices
    assert sheet.report.focal_depth_mm == pytest.approx(RADIUS_MM, rel=1e-3)


def test_a_cone_mesh_gives_the_closed_form():
    mesh = bodies.cone(RADIUS_MM, HALF_DEG, DENSE, 12)
    carrier = make_freeform(settings(), mesh, SIZE, SeenFrom.PART, DEPTH_MM).carrier
    exact = make_cone(ConeSettings(RADIUS_MM, HALF_DEG, Metal.TOWARD_AXIS, DEPTH_MM), SIZE, SeenFrom.PART, DEPTH_MM)
    for depth in (0.0, DEPTH_MM):
        assert apart(carrier.point_mm(places(), depth), exact.point_mm(places(), depth)) < POSITION_MM


def test_a_jacket_is_laid_on_the_other_side(cylinder_mesh):
    how = FreeformSettings(Path("cavity.stl"), (RADIUS_MM, 0.0, 0.0), (0.0, 0.0, 1.0), (48.0, 0.0, 0.0), depth_mm=8.0)
    carrier = make_freeform(how, cylinder_mesh, SIZE, SeenFrom.PART, DEPTH_MM).carrier
    exact = make_cylinder(CarrierSettings(RADIUS_MM, Metal.AWAY_FROM_AXIS, DEPTH_MM), SIZE, SeenFrom.PART, DEPTH_MM)
    assert apart(carrier.point_mm(places(), DEPTH_MM), exact.point_mm(places(), DEPTH_MM)) < POSITION_MM


@pytest.fixture(scope="module")
def bumpy():
    how = FreeformSettings(
        Path("cap.stl"), (0.0, 0.0, bodies.bumps(0.0, 0.0)), (0, 1, 0), (0, 0, -9), depth_mm=DEPTH_MM
    )
    return make_freeform(how, bodies.bumpy_cap(20_000, 7), SIZE, SeenFrom.PART, DEPTH_MM)


def test_jacobian_agrees_with_differences_and_the_shape_operator(bumpy):
    it, inner, h = bumpy.carrier, 1.0 + places(300) * 0.97, 1e-3
    for depth in (0.0, 3.0, DEPTH_MM):
        steps = [np.array([h, 0.0]), np.array([0.0, h])]
        differences = np.stack(
            [(it.point_mm(inner + e, depth) - it.point_mm(inner - e, depth)) / (2 * h) for e in steps], 2
        )
        # central differences of a cubic spline: h^2 / 6 times a third derivative below 0.01 / mm^2, and rounding
        np.testing.assert_allclose(it.jacobian(inner, depth), differences, atol=1e-7)
        through = it.jacobian(inner, 0.0) @ (np.eye(2) - depth * it.shape_operator(inner))
        np.testing.assert_allclose(it.jacobian(inner, depth), through, atol=1e-12)


def test_points_lie_along_the_normal_and_develop_back(bumpy):
    it = bumpy.carrier
    face, deep = it.point_mm(places(), 0.0), it.point_mm(places(), 5.0)
    np.testing.assert_allclose(deep, face + 5.0 * it.into_metal(places()), atol=1e-12)
    np.testing.assert_allclose(it.develop(deep), np.column_stack([places(), np.full(3000, 5.0)]), atol=1e-9)
    depth = np.linspace(0.0, 10.0, 3000)
    assert np.abs(it.distance_mm(it.point_mm(places(), depth)) - depth).max() < 0.05


def test_off_the_sheet_the_map_goes_on_straight(bumpy):
    it, edge = bumpy.carrier, np.array([[90.0, 20.0]])
    beyond = it.point_mm(edge + np.array([2.0, 0.0]), DEPTH_MM) - it.point_mm(edge, DEPTH_MM)
    np.testing.assert_allclose(beyond[0], 2.0 * it.jacobian(edge, DEPTH_MM)[0, :, 0], atol=1e-12)


def test_the_sheet_centre_lies_on_the_anchor_with_its_mean_heading_along_up(bumpy):
    it = bumpy.carrier
    centre = np.array([[45.0, 30.0]])
    np.testing.assert_allclose(it.point_mm(centre, 0.0)[0], [0.0, 0.0, bodies.bumps(0.0, 0.0)], atol=0.02)
    disc = centre + np.stack(np.meshgrid(np.linspace(-4, 4, 9), np.linspace(-4, 4, 9)), -1).reshape(-1, 2)
    mean = it.jacobian(disc, DEPTH_MM).mean(axis=0)
    out = -it.into_metal(centre)[0]
    up = np.array([0.0, 1.0, 0.0]) - out[1] * out
    up /= np.linalg.norm(up)
    right = np.cross(up, out)
    turned = math.atan2(mean[:, 1] @ right - mean[:, 0] @ up, mean[:, 0] @ right + mean[:, 1] @ up)
    assert abs(math.degrees(turned)) < 0.2


def test_the_same_mesh_gives_the_same_bytes(bumpy):
    how = FreeformSettings(
        Path("cap.stl"), (0.0, 0.0, bodies.bumps(0.0, 0.0)), (0, 1, 0), (0, 0, -9), depth_mm=DEPTH_MM
    )
    again = make_freeform(how, bodies.bumpy_cap(20_000, 7), SIZE, SeenFrom.PART, DEPTH_MM)
    assert again.carrier.spline.control_mm.tobytes() == bumpy.carrier.spline.control_mm.tobytes()


def sphere_guide(depth=0.0):
    how = FreeformSettings(Path("cap.stl"), (0.0, 0.0, 80.0), (0, 1, 0), (0, 0, 70), depth_mm=8.0)
    return make_guide(bodies.sphere_cap(80.0, 40_000, 9), how, SIZE, DEPTH_MM)


def test_straight_walks_on_a_sphere_keep_radii_and_shrink_circles_by_sine_over_angle():
    """Polar map of a sphere of radius R: length along a radius r is kept, around it becomes sin(r/R) / (r/R)."""
    guide, grid = sphere_guide(), make_grid(SIZE)
    face = offset_surface(guide, 0.0).surface
    ends = exponential_map(face, grid, same_places(guide.face, face, guide.anchor), Heading(guide.x, guide.y))
    spline = spline_through(grid.x_mm(), grid.y_mm(), ends.xyz_mm.reshape(grid.nx, grid.ny, 3))
    flat = np.random.default_rng(2).uniform((-40, -26), (40, 26), (2000, 2))
    flat = flat[np.hypot(*flat.T) > 6.0]
    slope = np.stack([spline.at(flat, 1, 0), spline.at(flat, 0, 1)], axis=2)
    radius = np.hypot(*flat.T)
    out = flat / radius[:, None]
    around = np.column_stack([-out[:, 1], out[:, 0]])
    along = np.linalg.norm(np.einsum("kxa,ka->kx", slope, out), axis=1)
    across = np.linalg.norm(np.einsum("kxa,ka->kx", slope, around), axis=1)
    angle = radius / 80.0
    assert np.sqrt(((along - 1.0) ** 2).mean()) < 2e-3
    assert np.sqrt(((across - np.sin(angle) / angle) ** 2).mean()) < 5e-3


def test_a_sphere_cap_is_at_depth_and_relaxing_beats_the_polar_map():
    how = FreeformSettings(Path("cap.stl"), (0.0, 0.0, 80.0), (0, 1, 0), (0, 0, 70), depth_mm=8.0)
    sheet = make_freeform(how, bodies.sphere_cap(80.0, DENSE, 9), SIZE, SeenFrom.PART, DEPTH_MM)
    assert np.abs(sheet.report.depth_error_mm).max() < POSITION_MM
    radius = np.linalg.norm(sheet.carrier.point_mm(places(), DEPTH_MM), axis=1)
    assert np.abs(radius - 72.0).max() < 1e-3
    maps = measure_maps(sheet.carrier, SIZE, DEPTH_MM)
    flat = np.stack(np.meshgrid(maps.x_mm - 45.0, maps.y_mm - 30.0, indexing="ij"), -1)
    polar = 1.0 - np.sinc(np.hypot(flat[..., 0], flat[..., 1]) / 72.0 / np.pi)
    assert maps.length_error_rms < 0.5 * np.sqrt(0.5 * (polar**2).mean())
    # Gauss's theorem forbids an isometry: the area of a cell cannot be kept everywhere.
    assert maps.length_error_max > 0.005
    assert maps.wall_mm(10.0, 4.0) == pytest.approx(10.0 * maps.least.min() - 4.0)
    worst = make_freeform(
        FreeformSettings(Path("cap.stl"), (0, 0, 80), (0, 1, 0), (0, 0, 70), depth_mm=8.0, least=Least.WORST),
        bodies.sphere_cap(80.0, 20_000, 9),
        SIZE,
        SeenFrom.PART,
        DEPTH_MM,
    )
    calm = measure_maps(worst.carrier, SIZE, DEPTH_MM)
    assert calm.length_error_max < 0.7 * maps.length_error_max
    text = advice(maps, SIZE, least_worst=False)
    assert 'least = "worst"' in text and "%" in text
    assert 'least = "worst"' not in advice(calm, SIZE, least_worst=True)


def test_offset_area_follows_steiner_on_a_sphere_cap():
    """A(d) = A - 2 d int H + d^2 int K: on a sphere A (1 - d / R)^2 (Steiner 1840)."""
    guide = sphere_guide()
    ratio = mesh_area_mm2(offset_surface(guide, 8.0).surface.mesh) / mesh_area_mm2(
        offset_surface(guide, 0.0).surface.mesh
    )
    assert ratio == pytest.approx((1.0 - 8.0 / 80.0) ** 2, rel=1e-5)


def test_offset_area_follows_steiner_on_a_whole_torus():
    """int K = 0 and int H = 2 pi^2 R over a torus of ring R (H the mean of both curvatures): A - 4 pi^2 R d."""
    ring, tube, d = 70.0, 25.0, 6.0
    mesh = bodies.whole_torus(ring, tube, 160, 70)
    how = FreeformSettings(Path("ring.stl"), (95.0, 0.0, 0.0), (0, 0, 1), (70.0, 0.0, 0.0), depth_mm=d)
    guide = make_guide(mesh, how, (40.0, 30.0), d, reach_share=20.0)
    assert guide.complete and len(guide.face.mesh.triangles) == len(mesh.triangles)
    area, inner = (mesh_area_mm2(offset_surface(guide, depth).surface.mesh) for depth in (0.0, d))
    # triangles inscribed in both surfaces miss the same share of their area to the second order of the edge
    assert (area - inner) / (4.0 * math.pi**2 * ring * d) == pytest.approx(1.0, rel=4e-3)
    assert make_signed(guide.face).inside_mm(np.array([[70.0, 0.0, 0.0]]))[0] == pytest.approx(tube, rel=2e-3)


def test_long_thin_triangles_of_a_cad_cylinder_are_cut_up():
    """What CAD programs write for a cylinder: strips from end to end, 0.01 mm chord tolerance."""
    n = 144  # half a turn: sagitta R (1 - cos(pi / 288)) = 0.002 mm
    angle = np.linspace(-math.pi / 2, math.pi / 2, n + 1)
    ring = np.column_stack([RADIUS_MM * np.cos(angle), RADIUS_MM * np.sin(angle)])
    points = np.concatenate([np.column_stack([ring, np.full(n + 1, z)]) for z in (-50.0, 50.0)])
    k = np.arange(n)
    strips = np.concatenate([np.column_stack([k, k + 1, k + n + 1]), np.column_stack([k + 1, k + n + 2, k + n + 1])])
    carrier = make_freeform(settings(), Mesh(points, strips), (70.0, 60.0), SeenFrom.PART, DEPTH_MM).carrier
    exact = make_cylinder(CarrierSettings(RADIUS_MM, Metal.TOWARD_AXIS, 8.0), (70.0, 60.0), SeenFrom.PART, DEPTH_MM)
    sheet = np.random.default_rng(5).uniform((0, 0), (70, 60), (1000, 2))
    assert apart(carrier.point_mm(sheet, DEPTH_MM), exact.point_mm(sheet, DEPTH_MM)) < 0.02
