"""Walks and local fits against slow numpy twins on tiny inputs; passes with NUMBA_DISABLE_JIT=1."""

import numpy as np
import pytest

from morph.geometry.local_fit import fit_around
from morph.geometry.mesh import Mesh
from morph.geometry.surface import Places, make_signed, make_surface, walk

pytestmark = pytest.mark.quick


def flat(n=7, seed=2, fold=0.0):
    """A jittered square grid of 10 x 10 mm in z = 0, its right half turned up by `fold` radians about x = 5."""
    rng = np.random.default_rng(seed)
    x, y = np.meshgrid(np.linspace(0, 10, n), np.linspace(0, 10, n), indexing="ij")
    inner = np.zeros((n, n), bool)
    inner[1:-1, 1:-1] = True
    inner[n // 2] = False
    most = 2.5 / (n - 1)  # a quarter of the spacing: no triangle turns over
    x, y = x + inner * rng.uniform(-most, most, x.shape), y + inner * rng.uniform(-most, most, x.shape)
    i, j = (a.ravel() for a in np.meshgrid(np.arange(n - 1), np.arange(n - 1), indexing="ij"))
    a = i * n + j
    triangles = np.concatenate([np.column_stack([a, a + n, a + n + 1]), np.column_stack([a, a + n + 1, a + 1])])
    return Mesh(folded(np.column_stack([x.ravel(), y.ravel()]), fold), triangles)


def folded(places, fold):
    past = np.maximum(places[:, 0] - 5.0, 0.0)
    return np.column_stack([np.minimum(places[:, 0], 5.0) + past * np.cos(fold), places[:, 1], past * np.sin(fold)])


@pytest.mark.parametrize("fold", [0.0, 0.7, -2.0])
def test_a_walk_over_a_fold_is_straight_when_unfolded(fold):
    surface = make_surface(flat(fold=fold))
    rng = np.random.default_rng(4)
    start, way = rng.uniform((0.5, 0.5), (4.5, 9.5), (60, 2)), rng.normal(size=(60, 2))
    way *= (rng.uniform(0.1, 8.0, 60) / np.linalg.norm(way, axis=1))[:, None]
    stays = ((start + way > 0.05) & (start + way < 9.95)).all(axis=1)
    start, way = start[stays], way[stays]
    _, places = make_signed(surface).nearest(folded(start, fold))
    steps = np.column_stack([way, np.zeros(len(way))])
    ends, left, outcome = walk(surface, places, steps)
    assert not outcome.any() and not left.any()
    np.testing.assert_allclose(ends.xyz_mm, folded(start + way, fold), atol=1e-9)
    _, there = make_signed(surface).nearest(ends.xyz_mm)
    np.testing.assert_allclose(there.xyz_mm, ends.xyz_mm, atol=1e-9)


def test_a_walk_stops_at_the_border_with_what_is_left():
    surface = make_surface(flat())
    _, places = make_signed(surface).nearest(np.array([[4.0, 5.1, 0.0], [4.0, 5.1, 0.0]]))
    ends, left, outcome = walk(surface, places, np.array([[-7.0, 0.0, 0.0], [0.0, 0.0, 0.0]]))
    assert outcome.tolist() == [1, 0]
    np.testing.assert_allclose(ends.xyz_mm, [[0.0, 5.1, 0.0], [4.0, 5.1, 0.0]], atol=1e-9)
    np.testing.assert_allclose(left, [3.0, 0.0], atol=1e-9)


def test_walks_do_not_depend_on_each_other():
    surface = make_surface(flat())
    places = Places(np.array([3, 40]), surface.mesh.vertices_mm[surface.mesh.triangles[[3, 40]]].mean(axis=1))
    steps = np.array([[1.0, 2.0, 0.0], [0.5, -3.0, 0.0]])
    both = walk(surface, places, steps)[0].xyz_mm
    for k in range(2):
        one = walk(surface, Places(places.triangle[[k]], places.xyz_mm[[k]]), steps[[k]])[0].xyz_mm
        np.testing.assert_array_equal(one[0], both[k])


def twin_fit(points, place, normal, reach):
    """The same fit with numpy's least squares, re-laid along its own plane until the tilt is gone."""
    near = points[np.linalg.norm(points - place, axis=1) < reach]
    n = 6 if len(near) < 14 else 10 if len(near) < 45 else 15
    powers = [(i - j, j) for i in range(5) for j in range(i + 1)][:n]
    for _ in range(4):
        normal = normal / np.linalg.norm(normal)
        one = np.cross(normal, [0.0, 0.0, 1.0] if abs(normal[0]) > 0.5 else [1.0, 0.0, 0.0])
        one /= np.linalg.norm(one)
        two = np.cross(normal, one)
        x, y, w = ((near - place) @ np.stack([one, two, normal]).T / reach).T
        weight = np.sqrt((1.0 - (np.linalg.norm(near - place, axis=1) / reach) ** 2) ** 2)
        matrix = np.stack([x**a * y**b for a, b in powers], axis=1)
        c = np.linalg.lstsq(matrix * weight[:, None], w * weight, rcond=None)[0]
        last, normal = normal, normal - c[1] * one - c[2] * two
    hessian = np.array([[2 * c[3], c[4]], [c[4], 2 * c[5]]]) / reach
    return place + reach * c[0] * last, last, np.sort(-np.linalg.eigvalsh(hessian))[::-1], len(near)


@pytest.mark.parametrize("n", [9, 13, 25])
def test_a_fit_agrees_with_least_squares_of_numpy(n):
    mesh = flat(n=n, seed=n)
    x, y = mesh.vertices_mm[:, 0] - 5.0, mesh.vertices_mm[:, 1] - 5.0
    bent = np.column_stack([x, y, 0.03 * x**2 - 0.02 * x * y + 0.01 * y**2 + 0.002 * x**3 + 0.1 * x])
    surface = make_surface(Mesh(bent, mesh.triangles))
    at = np.array([[0.3, -0.2, 0.1]])
    fit = fit_around(surface, at, np.array([[0.1, 0.0, 1.0]]), 3.2)
    xyz, normal, curvature, used = twin_fit(bent, at[0], np.array([0.1, 0.0, 1.0]), 3.2)
    assert fit.points[0] == used
    np.testing.assert_allclose(fit.xyz_mm[0], xyz, atol=1e-9)
    np.testing.assert_allclose(fit.normals[0], normal, atol=1e-9)
    np.testing.assert_allclose(fit.curvature[0], curvature, atol=1e-8)


def test_without_points_the_place_stays_as_it_is():
    surface = make_surface(flat())
    fit = fit_around(surface, np.array([[100.0, 0.0, 0.0], [5.0, 5.0, 0.0]]), np.array([[0, 0, 1.0]] * 2), 0.1)
    assert fit.points.tolist() == [0, 0]
    np.testing.assert_array_equal(fit.xyz_mm, [[100.0, 0.0, 0.0], [5.0, 5.0, 0.0]])
    assert not fit.curvature.any()
