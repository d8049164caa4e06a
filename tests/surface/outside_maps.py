"""Flattenings by libigl, a general-purpose geometry library, laid on the same surface for comparison.

LSCM (Levy and others 2002) keeps angles; ARAP (Liu and others 2008) keeps lengths as far as it can. ARAP is given its
best chance: started from LSCM, cut to the sheet and a margin, and run again there.
"""

import igl
import numpy as np
from scipy.spatial import KDTree

from morph.geometry.mesh import Mesh, triangle_normals


def _arap(mesh, start, rounds):
    data = igl.ARAPData()
    data.max_iter = rounds
    pinned = int(np.argmin((start**2).sum(axis=1)))
    igl.arap_precomputation(mesh.vertices_mm, mesh.triangles, 2, np.array([pinned], dtype=np.int32), data)
    return igl.arap_solve(np.ascontiguousarray(start[[pinned]]), data, np.ascontiguousarray(start))


def _aligned(mesh, flat, anchor, x, y):
    """`flat` moved and turned so that the anchor is 0 and the mean frame within 6 mm of it is that of x and y."""
    corner = mesh.vertices_mm[mesh.triangles]
    gap = np.linalg.norm(corner.mean(axis=1) - anchor, axis=1)
    total = np.zeros((2, 2))
    for k in np.flatnonzero(gap <= 6.0):
        edges = np.stack([(corner[k, 1:] - corner[k, 0]) @ x, (corner[k, 1:] - corner[k, 0]) @ y], axis=1)
        if abs(np.linalg.det(edges)) > 1e-9:
            total += abs(np.linalg.det(edges)) * np.linalg.solve(
                edges, np.diff(flat[mesh.triangles[k]], axis=0).cumsum(axis=0)
            )
    if np.linalg.det(total) < 0.0:
        flat, total = flat * (1.0, -1.0), total * (1.0, -1.0)
    u, _, vt = np.linalg.svd(total)
    flat = flat @ (u @ vt).T
    k = int(gap.argmin())
    return flat - flat[mesh.triangles[k]].mean(axis=0) - (0.0, 0.0)


def _part(mesh, keep):
    used, inverse = np.unique(mesh.triangles[keep], return_inverse=True)
    return Mesh(mesh.vertices_mm[used], inverse.reshape(-1, 3)), used


def _at(mesh, flat, places):
    """The points of the surface whose flattening is `places (k, 2)`."""
    corner = flat[mesh.triangles]
    _, near = KDTree(corner.mean(axis=1)).query(places, k=24)
    origin, one, two = corner[near, 0], corner[near, 1] - corner[near, 0], corner[near, 2] - corner[near, 0]
    to = places[:, None] - origin
    whole = one[..., 0] * two[..., 1] - one[..., 1] * two[..., 0]
    second = (to[..., 0] * two[..., 1] - to[..., 1] * two[..., 0]) / whole
    third = (one[..., 0] * to[..., 1] - one[..., 1] * to[..., 0]) / whole
    shares = np.stack([1.0 - second - third, second, third], axis=-1)
    best = shares.min(axis=-1).argmax(axis=1)
    rows = np.arange(len(places))
    chosen = shares[rows, best]
    assert chosen.min() > -0.05, "the flattening does not cover the sheet"
    return np.einsum("kc,kcx->kx", chosen, mesh.vertices_mm[mesh.triangles[near[rows, best]]])


def lscm_and_arap(mesh, anchor, x, y, places, size):
    """The points (k, 3) of both maps at sheet places (k, 2) measured from the sheet's centre."""
    loop = igl.boundary_loop(mesh.triangles)
    ends = np.array([loop[0], loop[len(loop) // 2]], dtype=np.int64)
    apart = np.linalg.norm(np.subtract(*mesh.vertices_mm[ends]))
    flat = igl.lscm(mesh.vertices_mm, mesh.triangles, ends, np.array([[0.0, 0.0], [apart, 0.0]]))[0]

    def scaled(mesh, flat, keep=slice(None)):
        corner = flat[mesh.triangles[keep]]
        one, two = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
        area = 0.5 * np.abs(one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0]).sum()
        return flat * np.sqrt(triangle_normals(mesh)[1][keep].sum() / area)

    def under(mesh, flat, margin):
        return (np.abs(flat[mesh.triangles]).max(axis=1) <= 0.5 * np.array(size) + margin).all(axis=1)

    flat = _aligned(mesh, scaled(mesh, flat), anchor, x, y)
    for _ in range(3):  # its best scale on the sheet itself
        flat = _aligned(mesh, scaled(mesh, flat, under(mesh, flat, 0.0)), anchor, x, y)
    conformal = _at(mesh, flat, places)
    rigid = _aligned(mesh, _arap(mesh, flat, 12), anchor, x, y)
    part, used = _part(mesh, under(mesh, rigid, 5.0))
    rigid = _aligned(part, _arap(part, rigid[used], 40), anchor, x, y)
    return conformal, _at(part, rigid, places)
