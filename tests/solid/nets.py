"""Random channel nets in a flat box with a known number of loops, for tests of topology."""

from __future__ import annotations

import numpy as np

from tests.solid import plans

PITCH_MM, COLUMNS, ROWS = 15.0, 4, 3


def random_net(seed: int):
    """Returns (plan, blank, loops, openings): a connected part of a jittered grid, bowed branches, 2 to 4 exits.

    Bores 2.8 to 4.6 mm with taper; branches stay more than 3 mm apart, so that no loop closes by itself.
    """
    rng = np.random.default_rng(1000 + seed)
    place = {
        (i, j): np.array([PITCH_MM * (i + 1), PITCH_MM * (j + 1), 12.0]) + rng.uniform(-1.5, 1.5, 3)
        for i in range(COLUMNS)
        for j in range(ROWS)
    }
    edges = [((i, j), (i + 1, j)) for i in range(COLUMNS - 1) for j in range(ROWS)]
    edges += [((i, j), (i, j + 1)) for i in range(COLUMNS) for j in range(ROWS - 1)]
    group = {node: node for node in place}

    def root(node):
        while group[node] != node:
            node = group[node]
        return node

    kept = []
    for number in rng.permutation(len(edges)):
        a, b = edges[number]
        if root(a) != root(b):
            group[root(a)] = root(b)
            kept.append((a, b))
        elif rng.random() < 0.5:
            kept.append((a, b))
    loops = len(kept) - (len(place) - 1)
    bore = {node: rng.uniform(2.8, 4.6) for node in place}
    items = []
    for number, (a, b) in enumerate(kept):
        t = np.linspace(0.0, 1.0, 33)[:, None]
        bow = np.cross(place[b] - place[a], (0.0, 0.0, 1.0)) * rng.uniform(-0.12, 0.12)
        path = place[a] + t * (place[b] - place[a]) + 4.0 * t * (1 - t) * bow
        width = bore[a] + t[:, 0] ** 2 * (3 - 2 * t[:, 0]) * (bore[b] - bore[a])
        items.append(plans.branch(f"B{number + 1}", f"N{a}", f"N{b}", path, width))
    size = np.array([PITCH_MM * (COLUMNS + 1), PITCH_MM * (ROWS + 1), 24.0])
    exits = []
    for number in range(int(rng.integers(2, 5))):
        side = number % 2
        node = (side * (COLUMNS - 1), number // 2)
        end = place[node].copy()
        end[0] = side * size[0]
        name, face = f"p{number}", ("-x", "+x")[side]
        items.append(
            plans.branch(
                f"L-{name}", f"N{node}", f"X{number}", plans.sampled([place[node], end], 3.0), bore[node], lead=True
            )
        )
        exits.append((name, ("in", "out")[side], f"L-{name}", face, (2.0 * side - 1.0, 0, 0), 0.0))
    return plans.plan_of(items, exits), plans.box_blank(high=tuple(size)), loops, len(exits)


def tangled_net(seed: int):
    """Returns (plan, blank, h_mm): bowed channels of 1.3 to 6 mm bore between random points of a box, most of them running
    into each other, one exit. Nothing is known of its topology; it must still give sound meshes.
    """
    rng = np.random.default_rng(seed)
    n = rng.integers(3, 8)
    points, items = rng.uniform([8, 8, 8], [52, 32, 22], (n, 3)), []
    for number in range(n + 2):
        a, b = rng.choice(n, 2, replace=False)
        if np.linalg.norm(points[a] - points[b]) < 1.0:
            continue
        t, bow = np.linspace(0.0, 1.0, 41)[:, None], rng.normal(0.0, 3.0, 3)
        path = np.clip(points[a] + t * (points[b] - points[a]) + 4.0 * t * (1.0 - t) * bow, [6, 6, 6], [54, 34, 24])
        path[0], path[-1] = points[a], points[b]
        width = np.linspace(*rng.uniform(1.3, 6.0, 2), 41)
        items.append(plans.branch(f"B{number}", f"N{a}", f"N{b}", path, width))
    start = items[0].xyz_mm[0]
    end = np.array([0.0, start[1] + rng.uniform(-3.0, 3.0), start[2]])
    leave = (end - start) / np.linalg.norm(end - start)
    items.append(plans.branch("L-a", items[0].start, "X", plans.sampled([start, end], 4.0), 4.0, lead=True))
    exits = [("a", "in", "L-a", "-x", leave, 0.0)]
    plan = plans.plan_of(items, exits, blend_mm=float(rng.choice([0.0, 0.3, 0.6, 1.5])))
    blank = plans.box_blank(stock={"-x": float(rng.choice([0.0, 0.5]))})
    return plan, blank, float(rng.uniform(0.2, 0.32))
