"""Every fault of a free-form surface, planted in a body of our own, ends in its own message with its place."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from morph.core.errors import MorphError
from morph.geometry.mesh import Mesh
from morph.geometry.repair import part_of
from morph.settings.job import FreeformSettings, SeenFrom
from morph.surface import freeform_check, lay
from morph.surface.freeform_check import Laid, require_no_channel_over_hole
from morph.surface.grid_spline import spline_through
from morph.surface.grow import LeavesSurface
from morph.surface.guide import make_guide
from morph.surface.lay import make_freeform
from morph.surface.offset import offset_surface
from morph.surface.sheet_grid import make_grid
from tests.surface import bodies
from tests.surface.graphs import letter_f

SIZE, DEPTH_MM, RADIUS_MM = (60.0, 40.0), 8.0, 40.0
N = 12_000


def settings(anchor=(RADIUS_MM, 0.0, 0.0), up=(0.0, 0.0, 1.0), metal=(30.0, 0.0, 0.0)):
    return FreeformSettings(Path("face.stl"), anchor, up, metal, depth_mm=DEPTH_MM)


def plain(seed=4, n=N):
    return bodies.cylinder(RADIUS_MM, n, seed)


def flat(height=lambda x, y: 0.0 * x, n=N, seed=5):
    return bodies.parametric(bodies.height_field(height), (-60.0, 60.0), (-45.0, 45.0), n, seed)


FLAT = settings(anchor=(0.0, 0.0, 0.0), up=(0.0, 1.0, 0.0), metal=(0.0, 0.0, -8.0))


def refused(code, mesh, how=None, size=SIZE, depth=DEPTH_MM):
    with pytest.raises(MorphError) as caught:
        make_freeform(settings() if how is None else how, mesh, size, SeenFrom.PART, depth)
    assert caught.value.code == code, caught.value
    assert "mm" in caught.value.where
    return caught.value


def place_in(error):
    return np.array([float(part) for part in error.where.split("(")[1].split(")")[0].split(",")])


def middles(mesh):
    return mesh.vertices_mm[mesh.triangles].mean(axis=1)


def without(mesh, gone):
    return part_of(mesh, np.flatnonzero(~gone))[0]


def test_the_plain_body_passes():
    sheet = make_freeform(settings(), plain(), SIZE, SeenFrom.PART, DEPTH_MM)
    assert sheet.report.focal_depth_mm == pytest.approx(RADIUS_MM, rel=0.01)


def test_an_anchor_off_the_face_is_refused_with_the_nearest_point():
    error = refused("anchor-off-surface", plain(), settings(anchor=(45.0, 0.0, 0.0)))
    assert "5.0" in error.found and "[40.0" in error.do.replace("39.99", "40.0")
    make_freeform(settings(anchor=(43.0, 0.0, 0.0)), plain(), SIZE, SeenFrom.PART, DEPTH_MM)


@pytest.mark.parametrize("up", [(1.0, 0.0, 0.0), (-1.0, 0.0, 0.15), (0.0, 0.0, 0.0)])
def test_up_along_the_normal_is_refused(up):
    refused("up-along-normal", plain(), settings(up=up))


@pytest.mark.parametrize("metal", [(RADIUS_MM, 0.0, 0.0), (40.1, 0.0, 75.0)])
def test_a_point_that_tells_no_side_is_refused(metal):
    refused("metal-side-unclear", plain(), settings(metal=metal))


def test_an_edge_of_three_faces_is_refused_at_its_place():
    mesh = plain()
    at = np.array([RADIUS_MM * np.cos(0.4), RADIUS_MM * np.sin(0.4), 8.0])
    k = int(np.linalg.norm(middles(mesh) - at, axis=1).argmin())
    a, b = mesh.triangles[k, :2]
    fin = Mesh(
        np.concatenate([mesh.vertices_mm, [1.1 * at]]),
        np.concatenate([mesh.triangles, [[b, a, len(mesh.vertices_mm)]]]),
    )
    assert np.linalg.norm(place_in(refused("surface-three-faces", fin)) - at) < 3.0


def test_mixed_orientation_is_refused_at_its_place():
    mesh = plain()
    at = np.array([RADIUS_MM * np.cos(-0.3), RADIUS_MM * np.sin(-0.3), -6.0])
    triangles = mesh.triangles.copy()
    wrong = np.linalg.norm(middles(mesh) - at, axis=1) < 3.0
    triangles[wrong] = triangles[wrong][:, ::-1]
    error = refused("surface-orientation-mixed", Mesh(mesh.vertices_mm, triangles))
    assert np.linalg.norm(place_in(error) - at) < 5.0


def test_loose_triangles_are_refused():
    mesh = plain()
    corner = mesh.vertices_mm[mesh.triangles]
    middle = corner.mean(axis=1, keepdims=True)
    loose = middle + 0.999 * (corner - middle)
    refused("surface-not-joined", Mesh(loose.reshape(-1, 3), np.arange(3 * len(corner)).reshape(-1, 3)))


def test_loose_triangles_that_touch_exactly_are_welded():
    mesh = plain()
    soup = Mesh(mesh.vertices_mm[mesh.triangles].reshape(-1, 3), np.arange(3 * len(mesh.triangles)).reshape(-1, 3))
    one, two = (make_freeform(settings(), m, SIZE, SeenFrom.PART, DEPTH_MM).carrier for m in (mesh, soup))
    places = np.array([[5.0, 5.0], [50.0, 30.0]])
    np.testing.assert_allclose(one.point_mm(places, DEPTH_MM), two.point_mm(places, DEPTH_MM), atol=2e-3)


def test_a_large_hole_under_the_sheet_is_refused():
    mesh = plain()
    at = np.array([RADIUS_MM * np.cos(0.5), RADIUS_MM * np.sin(0.5), 0.0])
    gone = np.linalg.norm(middles(mesh) - at, axis=1) < 14.0
    error = refused("surface-hole-under-sheet", without(mesh, gone))
    assert np.linalg.norm(place_in(error) - at) < 22.0
    assert "rim of" in error.found


def test_a_sheet_larger_than_the_face_is_refused():
    error = refused("sheet-larger-than-surface", plain(), size=(60.0, 140.0))
    assert abs(abs(place_in(error)[2]) - 60.0) < 1.0


def test_a_sheet_that_goes_round_the_body_is_refused():
    mesh = bodies.closed_cylinder(12.0, 120.0, 16_000, 6)
    how = settings(anchor=(12.0, 0.0, 0.0), metal=(9.0, 0.0, 0.0))
    # One turn at depth 2 is 2 pi 10 = 62.8 mm.
    refused("sheet-meets-itself", mesh, how, size=(80.0, 40.0), depth=2.0)
    make_freeform(how, mesh, (56.0, 40.0), SeenFrom.PART, 2.0)


def test_a_depth_beyond_the_radius_is_refused_with_the_radius():
    mesh = flat(lambda x, y: 5.0 * np.exp(-((x - 12.0) ** 2 + (y - 5.0) ** 2) / 50.0), n=50_000)
    # Radius at the top of a Gaussian of height a and width 2 s^2 = 50: s^2 / a = 25 / 5 = 5 mm.
    error = refused("depth-past-focus", mesh, FLAT)
    assert np.linalg.norm(place_in(error)[:2] - (12.0, 5.0)) < 6.0
    calm = make_freeform(FLAT, mesh, SIZE, SeenFrom.PART, 2.0)
    assert calm.report.focal_depth_mm == pytest.approx(5.0, rel=0.05)


def test_a_convex_edge_under_the_sheet_is_refused():
    error = refused("surface-edge-under-sheet", flat(lambda x, y: -np.maximum(x - 10.0, 0.0)), FLAT)
    assert abs(place_in(error)[0] - 10.0) < 4.0


def test_a_concave_edge_under_the_sheet_is_refused():
    error = refused("surface-edge-under-sheet", flat(lambda x, y: np.maximum(x - 10.0, 0.0)), FLAT)
    assert abs(place_in(error)[0] - 10.0) < 4.0


def test_a_blunt_crease_that_no_spline_follows_is_refused():
    error = refused("sheet-off-surface", flat(lambda x, y: 0.4 * np.maximum(x - 10.0, 0.0)), FLAT)
    assert abs(place_in(error)[0] - 10.0) < 4.0


def test_a_body_thinner_than_the_depth_is_refused():
    top = flat()
    below = Mesh(top.vertices_mm - (0.0, 0.0, 11.0), top.triangles[:, ::-1])
    both = Mesh(
        np.concatenate([top.vertices_mm, below.vertices_mm]),
        np.concatenate([top.triangles, below.triangles + len(top.vertices_mm)]),
    )
    error = refused("depth-meets-other-face", both, replace(FLAT, metal_at_mm=(0.0, 0.0, -4.0)))
    assert "3.000 mm from the centreline" in error.found
    make_freeform(replace(FLAT, metal_at_mm=(0.0, 0.0, -4.0)), both, SIZE, SeenFrom.PART, 5.0)


def test_a_hopelessly_noisy_scan_is_refused():
    error = refused("surface-too-noisy", bodies.cylinder(RADIUS_MM, N, 4, noise=0.5))
    assert float(error.found.split(" mm")[0]) == pytest.approx(0.5, rel=0.2)


def test_coarse_triangles_are_refused():
    refused("surface-too-coarse", bodies.cylinder(RADIUS_MM, 300, 4))


def test_too_few_triangles_are_refused():
    refused("surface-too-small", Mesh([[40, -50, -50], [40, 50, -50], [40, 0, 80]], [[0, 1, 2]]))
    refused("surface-too-small", part_of(plain(), np.arange(30))[0], settings(anchor=tuple(middles(plain())[3])))
    with pytest.raises(MorphError) as caught:
        make_freeform(settings(), Mesh(np.zeros((0, 3)), np.zeros((0, 3), int)), SIZE, SeenFrom.PART, DEPTH_MM)
    assert caught.value.code == "surface-too-small"


def test_a_walk_that_never_ends_is_refused(monkeypatch):
    def lost(*_):
        raise LeavesSurface(np.zeros((1, 2)), np.array([[RADIUS_MM, 0.0, 0.0]]), np.ones(1), lost=True)

    monkeypatch.setattr(lay, "lay_sheet", lost)
    refused("sheet-not-laid", plain(n=4000))


def test_a_fold_is_refused_at_its_place():
    """A sheet whose nodes were pushed back over each other by hand, all still on the surface at depth."""
    guide = make_guide(plain(), settings(), SIZE, DEPTH_MM)
    deep = offset_surface(guide, DEPTH_MM)
    grid = make_grid(SIZE)
    x, y = grid.x_mm() + 30.0, grid.y_mm() + 20.0
    fold = x + 14.0 * np.exp(-((x - 40.0) ** 2) / 30.0)  # slope below -1 right of 40 mm: there x runs backwards
    angle = np.repeat((fold - 30.0) / 32.0, len(y))
    points = np.column_stack([32.0 * np.cos(angle), 32.0 * np.sin(angle), np.tile(y - 20.0, len(x))])
    sheet = make_freeform(settings(), plain(), SIZE, SeenFrom.PART, DEPTH_MM)
    spline = spline_through(x, y, points.reshape(len(x), len(y), 3))
    _, foot = guide.whole.nearest(points * (1.25, 1.25, 1.0))
    fit = freeform_check.LocalFit(
        foot.xyz_mm,
        np.column_stack([np.cos(angle), np.sin(angle), np.zeros_like(angle)]),
        np.tile([1 / RADIUS_MM, 0.0], (len(points), 1)),
        np.zeros(len(points)),
        np.full(len(points), 50),
    )
    with pytest.raises(MorphError) as caught:
        freeform_check.require_sound(guide, deep, Laid(replace(sheet.carrier, spline=spline), grid, foot, fit))
    assert caught.value.code == "sheet-folds"
    assert "sheet place (4" in caught.value.found


def holed():
    mesh = plain()
    at = np.array([RADIUS_MM * np.cos(-0.3125), RADIUS_MM * np.sin(-0.3125), 0.0])
    return without(mesh, np.linalg.norm(middles(mesh) - at, axis=1) < 3.5), at


def test_a_small_hole_may_lie_under_the_sheet_but_under_no_channel():
    mesh, at = holed()
    carrier = make_freeform(settings(), mesh, SIZE, SeenFrom.PART, DEPTH_MM).carrier
    whole = make_freeform(settings(), plain(), SIZE, SeenFrom.PART, DEPTH_MM).carrier
    over = carrier.develop(at[None] * (0.8, 0.8, 1.0))[0]
    # 12.5 mm along the face left of the centre is 10 mm at depth.
    np.testing.assert_allclose(over, [20.0, 20.0, DEPTH_MM], atol=0.05)
    assert carrier.over_filling(over[None, :2]).all()
    assert not carrier.over_filling(np.array([[30.0, 20.0], [5.0, 5.0]])).any()
    places = np.random.default_rng(1).uniform((0, 0), SIZE, (200, 2))
    gap = carrier.point_mm(places, DEPTH_MM) - whole.point_mm(places, DEPTH_MM)
    assert np.linalg.norm(gap, axis=1).max() < 0.05
    graph = letter_f(SIZE)  # its stem stands at x = 20
    with pytest.raises(MorphError) as caught:
        require_no_channel_over_hole(graph, carrier)
    assert caught.value.code == "channel-over-hole"
    assert "sheet place (20.00," in caught.value.found
    require_no_channel_over_hole(graph, whole)
