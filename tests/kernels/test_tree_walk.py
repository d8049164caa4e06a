"""The tree kernels against slow numpy twins that look at every triangle; passes with NUMBA_DISABLE_JIT=1."""

import itertools

import numpy as np
import pytest

from morph.geometry.gap import measure_gap
from morph.geometry.mesh import Mesh, triangle_normals
from morph.geometry.tree import Medium, cast_rays, closest_points, inscribed_balls, make_tree

pytestmark = pytest.mark.quick

SEEDS = (3, 14, 159)
ROUNDING_MM = 1e-9
"""Both routes work in float64 on coordinates of some 10 mm."""


def soup(seed: int, n: int = 60) -> Mesh:
    """Random triangles of 1 to 4 mm in a 20 mm box."""
    rng = np.random.default_rng(seed)
    centre = rng.uniform(-10, 10, (n, 1, 3))
    return Mesh((centre + rng.uniform(-2, 2, (n, 3, 3))).reshape(-1, 3), np.arange(3 * n).reshape(-1, 3))


def nearest_on_segment(p, a, b):
    t = np.clip((p - a) @ (b - a) / ((b - a) @ (b - a)), 0.0, 1.0)
    return a + t * (b - a)


def nearest_on_triangle(p, corner):
    """The foot of the perpendicular when it lies inside, else the nearest point of the three edges."""
    a, b, c = corner
    basis = np.stack([b - a, c - a], axis=1)
    s, t = np.linalg.lstsq(basis, p - a, rcond=None)[0]
    if s >= 0 and t >= 0 and s + t <= 1:
        return a + basis @ np.array([s, t])
    return min((nearest_on_segment(p, *edge) for edge in ((a, b), (b, c), (c, a))), key=lambda q: np.linalg.norm(p - q))


def segment_gap(a, b, c, d):
    """Least distance of two segments: both ends to the other, and the common perpendicular when it falls inside both."""
    found = [
        np.linalg.norm(p - nearest_on_segment(p, *other))
        for p, other in ((a, (c, d)), (b, (c, d)), (c, (a, b)), (d, (a, b)))
    ]
    st, *_ = np.linalg.lstsq(np.stack([b - a, c - d], axis=1), c - a, rcond=None)
    if ((st >= 0) & (st <= 1)).all():
        found.append(np.linalg.norm(a + st[0] * (b - a) - c - st[1] * (d - c)))
    return min(found)


@pytest.mark.parametrize("seed", SEEDS)
def test_closest_points_agree_with_every_triangle(seed):
    mesh = soup(seed)
    corners = mesh.vertices_mm[mesh.triangles]
    points = np.random.default_rng(seed + 1).uniform(-14, 14, (40, 3))
    distance, triangle, foot = closest_points(make_tree(mesh), points)
    for p, d, k, q in zip(points, distance, triangle, foot, strict=True):
        twin = min(np.linalg.norm(p - nearest_on_triangle(p, c)) for c in corners)
        assert d == pytest.approx(twin, abs=ROUNDING_MM)
        assert np.linalg.norm(q - p) == pytest.approx(d, abs=ROUNDING_MM)
        assert np.linalg.norm(nearest_on_triangle(q, corners[k]) - q) < ROUNDING_MM


def test_closest_points_beyond_the_limit_are_nothing():
    mesh = Mesh(np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0]]), np.array([[0, 1, 2]]))
    distance, triangle, foot = closest_points(make_tree(mesh), np.array([[0.2, 0.2, 3.0], [0.2, 0.2, 1.0]]), 2.0)
    assert distance.tolist() == [np.inf, 1.0] and triangle.tolist() == [-1, 0]
    assert foot[0].tolist() == [0.2, 0.2, 3.0] and foot[1] == pytest.approx([0.2, 0.2, 0.0])


@pytest.mark.parametrize("seed", SEEDS)
def test_rays_agree_with_every_triangle(seed):
    mesh = soup(seed)
    corners = mesh.vertices_mm[mesh.triangles]
    rng = np.random.default_rng(seed + 2)
    origin = rng.uniform(-14, 14, (60, 3))
    aim = corners[rng.integers(0, len(corners), 60)].mean(axis=1) + rng.uniform(-1.5, 1.5, (60, 3))
    direction = aim - origin
    direction[:6] = np.concatenate([np.eye(3), -np.eye(3)])
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    distance, triangle = cast_rays(make_tree(mesh), origin, direction)
    n_hits = 0
    for o, d, t, k in zip(origin, direction, distance, triangle, strict=True):
        hits = {}
        for index, (a, b, c) in enumerate(corners):
            matrix = np.stack([b - a, c - a, -d], axis=1)
            s, u, way = np.linalg.solve(matrix, o - a)
            if s >= 0 and u >= 0 and s + u <= 1 and way > 1e-7:
                hits[index] = way
        if not hits:
            assert t == np.inf and k == -1
            continue
        n_hits += 1
        first = min(hits, key=hits.get)
        assert k == first and t == pytest.approx(hits[first], abs=1e-8)
    assert 10 < n_hits < 60


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("medium", list(Medium))
def test_inscribed_balls_agree_with_bisection(seed, medium):
    """The twin halves an interval of radii and looks whether any counted triangle reaches into the ball."""
    mesh, largest = soup(seed, 30), 12.0
    corners, (normals, _) = mesh.vertices_mm[mesh.triangles], triangle_normals(mesh)
    points, inward = corners.mean(axis=1), -normals * medium.value
    diameter, triangle = inscribed_balls(make_tree(mesh), points, inward, medium, largest)
    n_stopped = 0
    for p, n, d, k in zip(points, inward, diameter, triangle, strict=True):
        counted = corners[(-normals @ n) * medium.value <= np.cos(np.radians(120.0))]

        def clear(radius, p=p, n=n, counted=counted):
            centre = p + radius * n
            return all(np.linalg.norm(centre - nearest_on_triangle(centre, c)) >= radius - 1e-12 for c in counted)

        low, high = 0.0, 0.5 * largest
        if clear(high):
            assert d == pytest.approx(largest) and k == -1
            continue
        for _ in range(50):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if clear(middle) else (low, middle)
        n_stopped += 1
        assert d == pytest.approx(2.0 * low, abs=1e-6) and k >= 0
    assert n_stopped > 3


@pytest.mark.parametrize("seed", SEEDS)
def test_smallest_gap_agrees_with_every_pair(seed):
    one, two = soup(seed, 25), soup(seed + 7, 25)
    two = Mesh(two.vertices_mm + np.array([23.0, 1.0, 2.0]), two.triangles)
    gap = measure_gap(one, make_tree(two))
    twin = np.inf
    for a, b in itertools.product(one.vertices_mm[one.triangles], two.vertices_mm[two.triangles]):
        if np.linalg.norm(a.mean(axis=0) - b.mean(axis=0)) > twin + 8.0:
            continue
        found = [np.linalg.norm(p - nearest_on_triangle(p, b)) for p in a]
        found += [np.linalg.norm(p - nearest_on_triangle(p, a)) for p in b]
        found += [segment_gap(a[i], a[i - 1], b[j], b[j - 1]) for i in range(3) for j in range(3)]
        twin = min(twin, *found)
    assert gap is not None and gap.distance_mm == pytest.approx(twin, abs=1e-8)
    assert np.linalg.norm(np.subtract(gap.from_mm, gap.to_mm)) == pytest.approx(gap.distance_mm, abs=1e-9)
    assert measure_gap(one, make_tree(two), 0.5 * twin) is None


def test_a_tree_of_one_place_is_not_deep():
    """All triangles on one spot cannot be split by place; they are halved by count, and every one is found."""
    n = 300
    mesh = Mesh(np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0]]), np.tile([0, 1, 2], (n, 1)))
    tree = make_tree(mesh)
    assert sorted(tree.order.tolist()) == list(range(n))
    assert closest_points(tree, np.array([[0.1, 0.1, 2.0]]))[0][0] == pytest.approx(2.0)


def test_a_lopsided_tree_fits_the_stack():
    """Triangles ever nearer to a corner (each split sheds a few) reach the depth at which splitting goes by count."""
    size = 0.8 ** np.arange(400.0)
    corner = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0]])
    mesh = Mesh((size[:, None, None] * (corner + 1.0)).reshape(-1, 3), np.arange(1200).reshape(-1, 3))
    distance, triangle, _ = closest_points(make_tree(mesh), mesh.vertices_mm[mesh.triangles].mean(axis=1))
    assert distance.max() < 1e-12 and triangle.tolist()[:50] == list(range(50))
