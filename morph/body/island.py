"""Small loops of channel and the metal island inside them, judged at its widest place like a wall.

The rule that leaves junctions out of the walls (neighbour.py) also leaves out loops hardly longer
than their own bores: two branches between the same junctions, or a small triangle. Every corner of
an island tapers to nothing, so it is judged at its widest place: twice the largest clearance to the
channels around it, of all points inside the loop. They are looked for in the loop's mean plane, lifted
to the channels' own curved sheet, on a grid refined as long as a cell may still hold a wider place.
Loops come from the shortest way back around each branch.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass

import numpy as np

from morph.body.neighbour import WEB_WAY, Network, widest_reach_mm
from morph.body.section import reach_mm
from morph.core.arrays import Bools, Floats, Ints, unit_rows

GRID = 25
"""Points across a loop to begin with."""

FOUND_MM = 0.01
"""The width is found to twice this, always from below."""

MOST_CELLS = 400
"""Of the cells that may hold a wider place the most promising are refined."""


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


def list_islands(network: Network, wall_mm: float) -> list[Island]:
    """Returns the islands of all loops so small that the wall rule may take them for webs.

    Args:
        network: strands with their bores.
        wall_mm: the wall to keep, bands included.
    """
    longest = 2.0 * WEB_WAY * (2.0 * widest_reach_mm(network) + wall_mm)
    return [measure_island(network, loop) for loop in small_loops(network, longest)]


def measure_island(network: Network, loop: tuple[int, ...]) -> Island:
    """Returns the island inside `loop`, measured against the bores of the strands around it."""
    outline = loop_points_mm(network, loop)
    middle = outline.mean(axis=0)
    axes = np.linalg.svd(outline - middle, full_matrices=False)[2]
    flat = (outline - middle) @ axes.T
    low, high = flat[:, :2].min(axis=0), flat[:, :2].max(axis=0)
    u, v = np.meshgrid(np.linspace(low[0], high[0], GRID), np.linspace(low[1], high[1], GRID))
    grid = np.column_stack([u.ravel(), v.ravel()])
    grid = np.concatenate([grid[_inside(flat, grid)], np.zeros((1, 2))])
    half = 0.5 * (high - low) / (GRID - 1)
    around = np.concatenate([np.arange(network.first[k], network.first[k + 1]) for k in loop])
    best, place = -np.inf, middle
    while True:
        places = middle + np.column_stack([grid, _lift(flat, grid)]) @ axes
        clearance = _clearance_mm(network, around, places)
        top = int(clearance.argmax())
        if clearance[top] > best:
            best, place = float(clearance[top]), places[top]
        reach = float(np.linalg.norm(half))
        wider = np.flatnonzero(clearance + reach > best)
        if reach <= FOUND_MM or not len(wider):
            return Island(loop, place, 2.0 * best)
        wider = wider[np.argsort(-clearance[wider], kind="stable")[:MOST_CELLS]]
        half = 0.5 * half
        corners = np.array([(-1.0, -1.0), (-1.0, 1.0), (1.0, -1.0), (1.0, 1.0)]) * half
        grid = (grid[wider][:, None, :] + corners).reshape(-1, 2)
        grid = grid[_inside(flat, grid)]
        if not len(grid):
            return Island(loop, place, 2.0 * best)


def _lift(flat: Floats, points: Floats) -> Floats:
    """Returns the height (n,) of the loop's sheet over points (n, 2): that of the loop (k, 3), nearest samples first.

    Shepard's inverse distance weighting (1968, Proceedings of the 23rd ACM National Conference) with exponent 3.
    """
    squared = ((points[:, None, :] - flat[None, :, :2]) ** 2).sum(axis=2)
    weight = np.maximum(squared, 1e-12) ** -1.5
    return np.asarray(weight @ flat[:, 2] / weight.sum(axis=1), dtype=np.float64)


def _clearance_mm(network: Network, around: Ints, places: Floats) -> Floats:
    """Returns the distance (n,) from places (n, 3) to the nearest channel wall of the samples `around (k,)`."""
    offset = places[:, None, :] - network.xyz_mm[around][None, :, :]
    distance = np.linalg.norm(offset, axis=2)
    bore = np.broadcast_to(network.bore_mm[around], distance.shape)
    reach = reach_mm(bore.ravel(), unit_rows(offset.reshape(-1, 3)), network.section).reshape(distance.shape)
    return np.asarray((distance - reach).min(axis=1), dtype=np.float64)


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
