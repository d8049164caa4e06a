"""Surfaces of our own as triangle meshes: jittered points of a parameter rectangle, Delaunay triangles between them.

Every body gives its exact shape as a function too, so that checks have a truth that knows no triangles.
"""

import numpy as np
from scipy.spatial import Delaunay

from morph.geometry.mesh import Mesh
from morph.geometry.repair import weld


def jittered(u_range, v_range, n_triangles, seed, jitter=0.3, aspect=1.0, joined=False):
    """Points of a jittered grid over a rectangle (its border kept straight) and their Delaunay triangles.

    `aspect` is the length of one unit of u over that of v on the surface; `joined`: both ends of u get equal points.
    """
    width, height = (u_range[1] - u_range[0]) * aspect, v_range[1] - v_range[0]
    step = np.sqrt(2.0 * width * height / n_triangles)
    nu, nv = max(round(width / step), 2), max(round(height / step), 2)
    u, v = np.meshgrid(np.linspace(*u_range, nu + 1), np.linspace(*v_range, nv + 1), indexing="ij")
    rng = np.random.default_rng(seed)
    shift = rng.uniform(-jitter, jitter, (2, nu + 1, nv + 1))
    shift[0, [0, -1]] = shift[1, :, 0] = shift[1, :, -1] = 0.0
    if joined:
        shift[1, -1] = shift[1, 0]
    u = u + shift[0] * (u_range[1] - u_range[0]) / nu
    v = v + shift[1] * (v_range[1] - v_range[0]) / nv
    flat = np.column_stack([u.ravel() * aspect, v.ravel()])
    triangles = Delaunay(flat).simplices.astype(np.int64)
    a, b, c = (flat[triangles[:, k]] for k in range(3))
    doubled = (b - a)[:, 0] * (c - a)[:, 1] - (b - a)[:, 1] * (c - a)[:, 0]
    triangles = triangles[np.abs(doubled) > 1e-9 * step * step]
    doubled = doubled[np.abs(doubled) > 1e-9 * step * step]
    triangles[doubled < 0] = triangles[doubled < 0][:, ::-1]
    return np.column_stack([u.ravel(), v.ravel()]), triangles


def parametric(shape, u_range, v_range, n_triangles, seed, aspect=1.0, noise=0.0, joined=False):
    """The mesh of `shape (k, 2) -> (k, 3)`; its normals point along d/du x d/dv."""
    uv, triangles = jittered(u_range, v_range, n_triangles, seed, aspect=aspect, joined=joined)
    points = shape(uv)
    if noise:
        points = points + np.random.default_rng(seed + 1000).normal(0.0, noise, points.shape)
    return Mesh(points, triangles)


def height_field(height):
    return lambda uv: np.column_stack([uv, height(uv[:, 0], uv[:, 1])])


def bumps(x, y):
    """A cap with bumps: convex ridges of radius down to about 20 mm."""
    return (
        -(x**2) / 220.0
        - y**2 / 300.0
        + 4.0 * np.exp(-((x - 25) ** 2 + (y - 10) ** 2) / 450.0)
        - 3.0 * np.exp(-((x + 30) ** 2 + (y + 14) ** 2) / 500.0)
        + 3.0 * np.exp(-((x + 12) ** 2 + (y - 22) ** 2) / 400.0)
    )


def ridges(x, y):
    """A cap with tighter bumps: convex radii down to about 14 mm."""
    return (
        -(x**2) / 220.0
        - y**2 / 300.0
        + 4.0 * np.exp(-((x - 25) ** 2 + (y - 10) ** 2) / 170.0)
        + 5.0 * np.exp(-((x + 30) ** 2 + (y + 14) ** 2) / 220.0)
        + 3.0 * np.exp(-((x + 12) ** 2 / 120.0 + (y - 22) ** 2 / 600.0))
        - 3.0 * np.exp(-((x - 5) ** 2 + (y + 20) ** 2) / 200.0)
    )


def cylinder(radius, n, seed, half_angle=2.6, half_height=60.0, noise=0.0, joined=False):
    def shape(uv):
        return np.column_stack([radius * np.cos(uv[:, 0]), radius * np.sin(uv[:, 0]), uv[:, 1]])

    return parametric(shape, (-half_angle, half_angle), (-half_height, half_height), n, seed, radius, noise, joined)


def closed_cylinder(radius, height, n, seed):
    """A whole turn of a cylinder about z, its seam welded, without ends."""
    mesh = cylinder(radius, n, seed, half_angle=np.pi, half_height=0.5 * height, joined=True)
    return weld(mesh, 1e-6)


def cone(radius, half_angle_deg, n, seed, half_turn=2.6, half_height=60.0):
    """A cone about z, `radius` at height 0, that widens upwards."""
    slope = np.tan(np.radians(half_angle_deg))

    def shape(uv):
        r = radius + slope * uv[:, 1]
        return np.column_stack([r * np.cos(uv[:, 0]), r * np.sin(uv[:, 0]), uv[:, 1]])

    return parametric(shape, (-half_turn, half_turn), (-half_height, half_height), n, seed, aspect=radius)


def sphere_cap(radius, n, seed, half=1.1, noise=0.0):
    """A cap about +z, seen from outside: every parameter point lies at its own distance from the pole."""

    def shape(uv):
        rho = np.maximum(np.hypot(uv[:, 0], uv[:, 1]), 1e-12)
        sine = np.sin(rho / radius) / rho
        return radius * np.column_stack([uv[:, 0] * sine, uv[:, 1] * sine, np.cos(rho / radius)])

    reach = half * radius
    return parametric(shape, (-reach, reach), (-reach, reach), n, seed, noise=noise)


def bumpy_cap(n, seed, noise=0.0):
    return parametric(height_field(bumps), (-85.0, 85.0), (-65.0, 65.0), n, seed, noise=noise)


def ridged_cap(n, seed, noise=0.0):
    return parametric(height_field(ridges), (-85.0, 85.0), (-65.0, 65.0), n, seed, noise=noise)


def saddle(n, seed):
    return parametric(height_field(lambda x, y: x**2 / 200.0 - y**2 / 160.0), (-85.0, 85.0), (-65.0, 65.0), n, seed)


def torus_piece(n, seed, ring=90.0, tube=40.0):
    """The outer side of a torus about z, around +x."""

    def shape(uv):
        a, b = uv[:, 0] / ring, uv[:, 1] / tube
        r = ring + tube * np.cos(b)
        return np.column_stack([r * np.cos(a), r * np.sin(a), tube * np.sin(b)])

    return parametric(shape, (-90.0, 90.0), (-75.0, 75.0), n, seed)


def whole_torus(ring, tube, n, m):
    """A closed torus about z in a regular grid of n x m, normals outwards."""
    i, j = (a.ravel() for a in np.meshgrid(np.arange(n), np.arange(m), indexing="ij"))
    a, b = 2 * np.pi * i / n, 2 * np.pi * j / m
    r = ring + tube * np.cos(b)
    corner = [i * m + j, (i + 1) % n * m + j, (i + 1) % n * m + (j + 1) % m, i * m + (j + 1) % m]
    triangles = np.concatenate(
        [np.column_stack([corner[0], corner[1], corner[2]]), np.column_stack([corner[0], corner[2], corner[3]])]
    )
    return Mesh(np.column_stack([r * np.cos(a), r * np.sin(a), tube * np.sin(b)]), triangles)


def bent_tube(n, seed, bend=140.0, radius=38.0):
    """The saddle-shaped inner side of a bent tube: the torus at its inner side, seen from outside the tube."""

    def shape(uv):
        a, b = uv[:, 1] / (bend - radius), np.pi - uv[:, 0] / radius
        r = bend + radius * np.cos(b)
        return np.column_stack([r * np.cos(a), r * np.sin(a), radius * np.sin(b)])

    return parametric(shape, (-70.0, 70.0), (-75.0, 75.0), n, seed)


def bottle_radius(z):
    return 34.0 + 7.0 * np.sin(z / 28.0) - 5.0 / (1.0 + np.exp(-(z - 25.0) / 8.0))


def bottle(n, seed):
    def shape(uv):
        r = bottle_radius(uv[:, 1])
        return np.column_stack([r * np.cos(uv[:, 0]), r * np.sin(uv[:, 0]), uv[:, 1]])

    return parametric(shape, (-2.8, 2.8), (-70.0, 70.0), n, seed, aspect=34.0)


def scan(n, seed, noise=0.02):
    """An irregular, noisy mesh of a soft grip: as if scanned."""

    def shape(uv):
        angle, z = uv[:, 0], uv[:, 1]
        r = 40.0 + 3.0 * np.cos(2 * angle) + 2.5 * np.sin(z / 18.0) + 1.5 * np.cos(3 * angle + z / 25.0)
        return np.column_stack([r * np.cos(angle), r * np.sin(angle), z])

    return parametric(shape, (-2.4, 2.4), (-70.0, 70.0), n, seed, aspect=40.0, noise=noise)
