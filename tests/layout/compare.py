"""Comparison of an extracted graph with the known one: same nodes, same branches, and how far off the lines are."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass
class Found:
    """An extracted graph in pixels: node places and kinds, branches as (a, b, line (k, 2), half-width (k,))."""

    places: np.ndarray
    kinds: list[str]
    branches: list[tuple[int, int, np.ndarray, np.ndarray]]


def found_from_graph(graph, pitch_mm, loose=False):
    nodes = graph.nodes + (graph.loose_nodes if loose else ())
    branches = graph.branches + (graph.loose_branches if loose else ())
    index = {node.id: i for i, node in enumerate(nodes)}
    pitch = np.asarray(pitch_mm)
    return Found(
        np.array([node.sheet_mm / pitch for node in nodes]).reshape(-1, 2),
        [node.kind.value for node in nodes],
        [(index[b.start], index[b.end], b.sheet_mm / pitch, b.bore_mm / 2 / pitch.mean()) for b in branches],
    )


def same_graph(found, truth, reach):
    """Whether nodes pair up by place (within `reach` px, ports with ports) so that the branches are the same multiset."""
    from scipy.optimize import linear_sum_assignment

    if len(found.places) != len(truth.nodes) or len(found.branches) != len(truth.edges):
        return False
    away = np.hypot(*(found.places[:, None] - np.array(truth.nodes)[None]).transpose(2, 0, 1))
    differ = np.array([[a != b for b in truth.kinds] for a in found.kinds])
    rows, columns = linear_sum_assignment(away + 1e6 * differ)
    if (away + 1e6 * differ)[rows, columns].max() > reach:
        return False
    to = dict(zip(rows.tolist(), columns.tolist(), strict=True))
    ours = sorted(tuple(sorted((to[a], to[b]))) for a, b, _, _ in found.branches)
    return ours == sorted(tuple(sorted((e.a, e.b))) for e in truth.edges)


def loops(n_nodes, pairs):
    root = list(range(n_nodes))

    def find(i):
        while root[i] != i:
            i = root[i]
        return i

    extra = 0
    for a, b in pairs:
        if find(a) == find(b):
            extra += 1
        root[find(a)] = find(b)
    return extra


@dataclass
class Errors:
    centre_px: float  # rms distance of true centreline samples from the found lines, away from junctions
    half_px: float  # rms error of the half-width there
    missing_px: float  # true length further than half a width from any found line
    surplus_px: float  # found length further than half a width from any true line


def measure(found, truth, width):
    from scipy.spatial import cKDTree

    junctions = np.array([p for p, k in zip(truth.nodes, truth.kinds, strict=True) if k != "port"]).reshape(-1, 2)
    lines = [_fine(line, half) for _, _, line, half in found.branches]
    if not lines:
        return Errors(np.nan, np.nan, sum(e.arc[-1] for e in truth.edges), 0.0)
    place, half = np.vstack([p for p, _ in lines]), np.concatenate([h for _, h in lines])
    tree = cKDTree(place)
    centre, halves, missing = [], [], 0.0
    for edge in truth.edges:
        away, index = tree.query(edge.line)
        step = edge.arc[-1] / (len(edge.line) - 1)
        clear = np.ones(len(edge.line), dtype=bool)
        if len(junctions):
            clear = np.hypot(*(edge.line[:, None] - junctions[None]).transpose(2, 0, 1)).min(axis=1) > 2.0 * width
        for u, v, _ in edge.necks:
            clear &= (edge.arc < u - width) | (edge.arc > v + width)
        missing += step * np.count_nonzero(away > 0.5 * width)
        good = clear & (away <= 0.5 * width)
        centre.append(away[good])
        halves.append(half[index][good] - edge.half[good])
    true_tree = cKDTree(np.vstack([e.line for e in truth.edges]))
    surplus = sum(
        float(np.hypot(*np.diff(p, axis=0).T).mean()) * np.count_nonzero(true_tree.query(p)[0] > 0.5 * width)
        for p, _ in lines
    )
    rms = lambda parts: float(np.sqrt(np.mean(np.concatenate(parts) ** 2))) if len(np.concatenate(parts)) else 0.0  # noqa: E731
    return Errors(rms(centre), rms(halves), missing, surplus)


def _fine(line, half):
    arc = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))])
    at = np.linspace(0.0, arc[-1], max(2, int(arc[-1] / 0.02)))
    return np.column_stack([np.interp(at, arc, line[:, k]) for k in (0, 1)]), np.interp(at, arc, half)
