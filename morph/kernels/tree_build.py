"""Building a bounding-volume tree over triangles by the surface-area heuristic.

Children lie side by side, triangles in leaf order. Method: binned surface-area heuristic (Wald, "On
fast construction of SAH-based bounding volume hierarchies", 2007; from memory). Numbers of
triangles, not places, decide below DEEP levels, so that no tree is deeper than a query's stack.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from morph.core.arrays import Floats, Ints

N_BINS = 16
LEAF = 4
STACK = 160
"""Levels below DEEP are halved by count, so no tree is deeper than DEEP + log2(n) < STACK."""
DEEP = 96


@njit(cache=True)
def _half_area(box: Floats) -> float:
    """Half the surface area of `box (6,)`: low x y z, high x y z."""
    x, y, z = box[3] - box[0], box[4] - box[1], box[5] - box[2]
    return x * y + y * z + z * x


@njit(cache=True)
def _clear(box: Floats) -> None:
    """Makes `box` the empty box."""
    for a in range(3):
        box[a] = np.inf
        box[3 + a] = -np.inf


@njit(cache=True)
def _grow(box: Floats, other: Floats) -> None:
    """Grows `box` to hold `other`."""
    for a in range(3):
        box[a] = min(box[a], other[a])
        box[3 + a] = max(box[3 + a], other[3 + a])


@njit(cache=True)
def _bin_of(box: Floats, axis: int, low: float, scale: float) -> int:
    """Number of the bin that the centre of `box` falls in."""
    return min(max(int((box[axis] + box[3 + axis] - low) * scale), 0), N_BINS - 1)


@njit(cache=True)
def _best_bin(bins: Floats, n_in_bin: Ints, area_right: Floats, n_right: Ints) -> int:
    """Returns the bin after which splitting costs least, or -1; the last two arrays are scratch."""
    box = np.empty(6)
    _clear(box)
    n = 0
    for j in range(N_BINS - 1, 0, -1):
        n += n_in_bin[j]
        _grow(box, bins[j])
        n_right[j] = n
        area_right[j] = _half_area(box) if n > 0 else 0.0
    _clear(box)
    n = 0
    best, best_cost = -1, np.inf
    for j in range(N_BINS - 1):
        n += n_in_bin[j]
        _grow(box, bins[j])
        if n > 0 and n_right[j + 1] > 0:
            cost = _half_area(box) * n + area_right[j + 1] * n_right[j + 1]
            if cost < best_cost:
                best, best_cost = j, cost
    return best


@njit(cache=True)
def _split(
    boxes: Floats,
    order: Ints,
    start: int,
    end: int,
    centres: Floats,
    bins: Floats,
    n_in_bin: Ints,
    area_right: Floats,
    n_right: Ints,
) -> int:
    """Reorders `order[start:end]` into two groups and returns where the second begins."""
    axis = 0
    for a in range(1, 3):
        if centres[3 + a] - centres[a] > centres[3 + axis] - centres[axis]:
            axis = a
    width = centres[3 + axis] - centres[axis]
    middle = (start + end) // 2
    if width <= 0.0:
        return middle
    low, scale = centres[axis], N_BINS * 0.999999 / width
    for j in range(N_BINS):
        n_in_bin[j] = 0
        _clear(bins[j])
    for q in range(start, end):
        j = _bin_of(boxes[order[q]], axis, low, scale)
        n_in_bin[j] += 1
        _grow(bins[j], boxes[order[q]])
    best = _best_bin(bins, n_in_bin, area_right, n_right)
    if best < 0:
        return middle
    left, right = start, end - 1
    while left <= right:
        i = order[left]
        if _bin_of(boxes[i], axis, low, scale) <= best:
            left += 1
        else:
            order[left] = order[right]
            order[right] = i
            right -= 1
    return left if start < left < end else middle


@njit(cache=True)
def build(boxes: Floats, order: Ints, node_box: Floats, node_child: Ints, node_count: Ints) -> int:
    """Builds the tree and returns its number of nodes.

    Args:
        boxes: (n, 6) box of each triangle.
        order: (n,) 0..n-1, reordered to leaf order.
        node_box: (2n, 6) filled.
        node_child: (2n,) filled: first child (the second follows it), or first triangle of a leaf.
        node_count: (2n,) filled: triangles of a leaf (consecutive in leaf order), 0 for an inner node.
    """
    todo = np.empty((STACK, 4), np.int64)
    bins, n_in_bin = np.empty((N_BINS, 6)), np.empty(N_BINS, np.int64)
    area_right, n_right = np.empty(N_BINS), np.empty(N_BINS, np.int64)
    centres = np.empty(6)
    todo[0] = np.array([0, 0, len(boxes), 0])
    n_todo, n_nodes = 1, 1
    while n_todo > 0:
        n_todo -= 1
        node, start, end, depth = todo[n_todo]
        _clear(node_box[node])
        _clear(centres)
        for q in range(start, end):
            box = boxes[order[q]]
            _grow(node_box[node], box)
            for a in range(3):
                centres[a] = min(centres[a], box[a] + box[3 + a])
                centres[3 + a] = max(centres[3 + a], box[a] + box[3 + a])
        if end - start <= LEAF:
            node_child[node], node_count[node] = start, end - start
            continue
        middle = (start + end) // 2
        if depth < DEEP:
            middle = _split(boxes, order, start, end, centres, bins, n_in_bin, area_right, n_right)
        node_child[node], node_count[node] = n_nodes, 0
        for side in range(2):
            todo[n_todo, 0] = n_nodes + side
            todo[n_todo, 1] = start if side == 0 else middle
            todo[n_todo, 2] = middle if side == 0 else end
            todo[n_todo, 3] = depth + 1
            n_todo += 1
        n_nodes += 2
    return n_nodes
