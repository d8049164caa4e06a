"""Thinning on pixels, and the web of runs that the thin picture traces."""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats, Ints
from morph.layout.frame import Extended
from morph.layout.walls import Walls
from morph.layout.web import Joint, Run, Web


def make_web(picture: Extended, walls: Walls) -> Web:
    """Returns joints and runs of the thinned `picture`, in sheet mm, half-widths from `walls`.

    Thinning: two-sub-iteration parallel thinning as scikit-image does it (Zhang and Suen 1984),
    which keeps pieces and holes. Runs past the frame are cut at each mouth's reach; the tip that
    goes furthest out of a mouth is marked with it.
    """
    from skimage.morphology import skeletonize

    thin = skeletonize(picture.mask)
    pixel = np.argwhere(thin)
    row, column = pixel.T
    mouth, reach = picture.mouth[row, column], np.append(picture.reach_px, 0.0)  # the last: no mouth, number -1
    pixel = pixel[picture.outside_px[row, column] <= reach[mouth]]
    pixel, links = _link_pixels(pixel, thin.shape[1] + 2)
    place = picture.grid.sheet_mm(pixel.astype(np.float64))
    half = walls.distance_mm(place)
    cluster, paths = _trace(len(pixel), links)
    web = _assemble(place, half, cluster, paths)
    _mark_mouths(web, picture)
    return web


def _link_pixels(pixel: Ints, stride: int) -> tuple[Ints, Ints]:
    """Returns skeleton pixels (n, 2) as (row, column), in reading order, and links (m, 2) between neighbours.

    A diagonal link is left out where two straight links make the same way. `stride`: columns plus two.
    """
    n = len(pixel)
    key = pixel[:, 0] * stride + pixel[:, 1]

    def neighbour(rows: int, columns: int) -> Ints:
        wanted = key + rows * stride + columns
        index = np.minimum(np.searchsorted(key, wanted), n - 1)
        return np.where(key[index] == wanted, index, -1)

    right, left, down = neighbour(0, 1), neighbour(0, -1), neighbour(1, 0)
    slant_right, slant_left = neighbour(1, 1), neighbour(1, -1)
    found = [
        (right, right >= 0),
        (down, down >= 0),
        (slant_right, (slant_right >= 0) & (right < 0) & (down < 0)),
        (slant_left, (slant_left >= 0) & (left < 0) & (down < 0)),
    ]
    return pixel, np.concatenate([np.column_stack([np.flatnonzero(ok), to[ok]]) for to, ok in found])


def _clusters(n: int, links: Ints, degree: Ints) -> Ints:
    """Returns (n,) joint number per pixel, -1 along runs: touching crossing pixels share one, ends have their own."""
    from scipy.sparse import coo_matrix
    from scipy.sparse.csgraph import connected_components

    crossing = degree >= 3
    inner = crossing[links].all(axis=1)
    pairs = links[inner]
    matrix = coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(n, n))
    _, label = connected_components(matrix, directed=False)
    return np.where(crossing | (degree <= 1), label, -1).astype(np.int64)


def _trace(n: int, links: Ints) -> tuple[list[int], list[list[int]]]:
    """Returns the joint number of each pixel (-1 along runs) and the runs as lists of pixels, ends on joints."""
    source = np.concatenate([links[:, 0], links[:, 1]])
    target = np.concatenate([links[:, 1], links[:, 0]])
    target = target[np.lexsort((target, source))]
    degree = np.bincount(source, minlength=n)
    first = np.concatenate([[0], np.cumsum(degree)]).tolist()
    cluster = _clusters(n, links, degree).tolist()
    to = target.tolist()
    seen = bytearray(n)
    paths = []

    def follow(start: int, pixel: int) -> list[int]:
        path, before = [start], start
        while cluster[pixel] < 0 and pixel != start:
            path.append(pixel)
            seen[pixel] = 1
            a, b = to[first[pixel]], to[first[pixel] + 1]
            before, pixel = pixel, (b if a == before else a)
        path.append(pixel)
        return path

    for start in range(n):
        if cluster[start] < 0:
            continue
        for slot in range(first[start], first[start + 1]):
            pixel = to[slot]
            if cluster[pixel] >= 0:
                if cluster[pixel] != cluster[start] and start < pixel:
                    paths.append([start, pixel])
            elif not seen[pixel]:
                paths.append(follow(start, pixel))
    for start in range(n):
        if cluster[start] < 0 and not seen[start]:
            seen[start] = 1
            paths.append(follow(start, to[first[start]]))
            cluster[start] = n + start
    return cluster, paths


def _assemble(place: Floats, half: Floats, cluster: list[int], paths: list[list[int]]) -> Web:
    members: dict[int, list[int]] = {}
    for pixel, joint in enumerate(cluster):
        if joint >= 0:
            members.setdefault(joint, []).append(pixel)
    web, key_of = Web(), {}
    for joint in sorted(members):
        pixels = members[joint]
        key_of[joint] = web.add_joint(Joint(place[pixels].mean(axis=0), float(half[pixels].max())))
    for path in paths:
        start, end = key_of[cluster[path[0]]], key_of[cluster[path[-1]]]
        web.add_run(Run(start, end, place[path], half[path]))
    return web


def _mark_mouths(web: Web, picture: Extended) -> None:
    """Marks, per mouth, the tip that lies furthest outside (of equals the first)."""
    best: dict[int, tuple[float, int]] = {}
    for key in sorted(web.joints):
        if web.degree(key) > 1:
            continue
        row, column = (round(float(i)) for i in picture.grid.row_column(web.joints[key].place_mm[None])[0])
        mouth, out = int(picture.mouth[row, column]), float(picture.outside_px[row, column])
        if mouth >= 0 and out > 0 and (mouth not in best or out > best[mouth][0]):
            best[mouth] = (out, key)
    for mouth, (_, key) in best.items():
        web.joints[key].mouth = mouth
