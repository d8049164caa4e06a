"""Small loops of channel and the metal island inside them, which must neither vanish nor be too thin to print.

The rule that leaves junctions out of the walls (neighbour.py) also leaves out loops hardly longer
than their own bores: two branches between the same junctions, or a small triangle. Their island is
measured by itself: its width is twice the largest clearance to the channels found inside the loop,
on a grid in the loop's mean plane. Loops come from the shortest way back around each branch.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass

import numpy as np

from morph.body.neighbour import Network
from morph.core.arrays import Bools, Floats, Ints

GRID = 25
"""Points across a loop: the width is found to about 1/25 of the loop's size, always from below."""


@dataclass(frozen=True, slots=True, eq=False)
class Island:
    """The metal inside a small loop: the strands around it, its centre (3,) and width; negative when filled."""

    strands: tuple[int, ...]
    centre_mm: Floats
    width_mm: float


def small_loops(network: Network, longest_mm: float) -> list[tuple[int, ...]]:
    """Returns the loops up to `longest_mm` long, each as the strands around it in order, without repeats."""
    touching: dict[int, list[tuple[int, int, float]]] = {}
    for k, strand in enumerate(network.strands):
        length = float(strand.arc_mm[-1])
        touching.setdefault(strand.start, []).append((strand.end, k, length))
        touching.setdefault(strand.end, []).append((strand.start, k, length))
    found: dict[tuple[int, ...], tuple[int, ...]] = {}
    for k, strand in enumerate(network.strands):
        length = float(strand.arc_mm[-1])
        way = _way_back(touching, strand.end, strand.start, k, longest_mm - length)
        if way is not None:
            found.setdefault(tuple(sorted((k, *way))), (k, *way))
    return [found[key] for key in sorted(found)]


def _way_back(
    touching: dict[int, list[tuple[int, int, float]]], start: int, goal: int, without: int, longest_mm: float
) -> tuple[int, ...] | None:
    """Returns the strands of the shortest way from `start` to `goal` that avoids one strand, or None if too long."""
    waiting: list[tuple[float, int, tuple[int, ...]]] = [(0.0, start, ())]
    done: set[int] = set()
    while waiting:
        length, node, way = heapq.heappop(waiting)
        if node == goal:
            return way
        if node in done:
            continue
        done.add(node)
        for other, strand, step in touching[node]:
            if strand != without and other not in done and length + step <= longest_mm:
                heapq.heappush(waiting, (length + step, other, (*way, strand)))
    return None


def loop_points_mm(network: Network, loop: tuple[int, ...]) -> Floats:
    """Returns the samples (k, 3) around a loop in order."""
    parts = []
    first = network.strands[loop[0]]
    node = first.end
    parts.append(first.xyz_mm)
    for k in loop[1:]:
        strand = network.strands[k]
        parts.append(strand.xyz_mm if strand.start == node else strand.xyz_mm[::-1])
        node = strand.end if strand.start == node else strand.start
    return np.concatenate(parts)


def measure_island(network: Network, loop: tuple[int, ...]) -> Island:
    """Returns the island inside `loop`, measured against the bores of the strands around it."""
    outline = loop_points_mm(network, loop)
    middle = outline.mean(axis=0)
    axes = np.linalg.svd(outline - middle, full_matrices=False)[2][:2]
    flat = (outline - middle) @ axes.T
    low, high = flat.min(axis=0), flat.max(axis=0)
    u, v = np.meshgrid(np.linspace(low[0], high[0], GRID), np.linspace(low[1], high[1], GRID))
    grid = np.column_stack([u.ravel(), v.ravel()])
    grid = np.concatenate([grid[_inside(flat, grid)], np.zeros((1, 2))])
    places = middle + grid @ axes
    around = np.concatenate([np.arange(network.first[k], network.first[k + 1]) for k in loop])
    gap = (
        np.linalg.norm(places[:, None, :] - network.xyz_mm[around][None, :, :], axis=2) - 0.5 * network.bore_mm[around]
    )
    clearance = gap.min(axis=1)
    best = int(clearance.argmax())
    return Island(loop, places[best], 2.0 * float(clearance[best]))


def _inside(outline: Floats, points: Floats) -> Bools:
    """Returns which points (n, 2) lie inside the closed polygon (k, 2), by the even-odd rule."""
    a, b = outline, np.roll(outline, -1, axis=0)
    y = points[:, 1][:, None]
    crosses = (a[:, 1] > y) != (b[:, 1] > y)
    rise = np.where(b[:, 1] == a[:, 1], 1.0, b[:, 1] - a[:, 1])
    x = a[:, 0] + (y - a[:, 1]) * (b[:, 0] - a[:, 0]) / rise
    return np.asarray((crosses & (points[:, 0][:, None] < x)).sum(axis=1) % 2 == 1, dtype=np.bool_)


def island_samples(network: Network, island: Island) -> Ints:
    """Returns the samples of the strands around an island."""
    return np.concatenate([np.arange(network.first[k], network.first[k + 1]) for k in island.strands])
