"""The plain script to compare with: level, thin, trace with skan, drop short ends once. General-purpose libraries only."""

from __future__ import annotations

import numpy as np

from tests.layout.compare import Found


def plain_graph(value, drop_px=10.0):
    """Returns the Found graph in pixels of scikit-image's skeletonize and skan's branches; half-widths by the distance
    transform. End branches shorter than `drop_px` are dropped once; degree-2 nodes are joined; ends near the frame are ports."""
    from scipy import ndimage
    from skan import Skeleton, summarize
    from skimage.morphology import skeletonize

    mask = value > 0.5
    skeleton = Skeleton(skeletonize(mask))
    table = summarize(skeleton, separator="_")
    distance = ndimage.distance_transform_edt(mask)
    places, branches = {}, []
    rows = zip(table["node_id_src"], table["node_id_dst"], table["branch_type"], table["branch_distance"], strict=True)
    for index, (a, b, kind, length) in enumerate(rows):
        if kind == 1 and length < drop_px:
            continue
        path = skeleton.path_coordinates(index)
        cell = path.astype(int)
        line = path[:, ::-1] + 0.5
        places[int(a)], places[int(b)] = line[0], line[-1]
        branches.append((int(a), int(b), line, distance[cell[:, 0], cell[:, 1]]))
    branches = _joined(branches)
    used = sorted({n for a, b, _, _ in branches for n in (a, b)})
    number = {n: i for i, n in enumerate(used)}
    kinds = []
    height, width = value.shape
    for n in used:
        degree = sum((a == n) + (b == n) for a, b, _, _ in branches)
        x, y = places[n]
        near = min(x, y, width - x, height - y) < 10
        kinds.append("junction" if degree > 1 else "port" if near else "dead-end")
    return Found(
        np.array([places[n] for n in used]).reshape(-1, 2), kinds,
        [(number[a], number[b], line, half) for a, b, line, half in branches],
    )  # fmt: skip


def _joined(branches):
    while True:
        ends = {}
        for i, (a, b, _, _) in enumerate(branches):
            ends.setdefault(a, []).append(i)
            ends.setdefault(b, []).append(i)
        through = [n for n, hit in sorted(ends.items()) if len(hit) == 2 and hit[0] != hit[1]]
        if not through:
            return branches
        n = through[0]
        i, j = ends[n]
        a, b, line, half = branches[i]
        c, d, more, more_half = branches[j]
        if a == n:
            a, b, line, half = b, a, line[::-1], half[::-1]
        if d == n:
            c, d, more, more_half = d, c, more[::-1], more_half[::-1]
        rest = [x for k, x in enumerate(branches) if k not in (i, j)]
        branches = [*rest, (a, d, np.vstack([line, more[1:]]), np.concatenate([half, more_half[1:]]))]
