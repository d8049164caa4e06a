"""Which triangles of a mesh cross each other: an implicit box tree over triangles in space-filling order.

Two triangles cross when an edge of one passes strictly through the inside of the other. Pairs that
share an edge are skipped (they can only fold onto each other); touching in a point or along an edge,
and overlaps within one plane, are not strict crossings. Signs are those of tetrahedron volumes;
a volume within rounding of zero counts as touching.

The tree is a heap: node k has children 2 k and 2 k + 1, leaf i is node n_leaves + i and holds the
triangles LEAF i .. LEAF i + LEAF - 1 of the order. Boxes are rows (low x y z, high x y z).
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from morph.core.arrays import Floats, Ints

LEAF = 8
"""Triangles per leaf."""

ROUNDING = 1e-14
"""Relative to the cube of the largest extent: volumes below this are rounding (six products of float64 differences)."""


@njit(cache=True, nogil=True)
def signed_volume(v: Floats, a: int, b: int, c: int, d: int) -> float:
    """Returns six times the volume of the tetrahedron of vertices a, b, c, d; 0 when it is within rounding."""
    x1, y1, z1 = v[b, 0] - v[a, 0], v[b, 1] - v[a, 1], v[b, 2] - v[a, 2]
    x2, y2, z2 = v[c, 0] - v[a, 0], v[c, 1] - v[a, 1], v[c, 2] - v[a, 2]
    x3, y3, z3 = v[d, 0] - v[a, 0], v[d, 1] - v[a, 1], v[d, 2] - v[a, 2]
    volume = (y1 * z2 - z1 * y2) * x3 + (z1 * x2 - x1 * z2) * y3 + (x1 * y2 - y1 * x2) * z3
    size = max(abs(x1), abs(y1), abs(z1), abs(x2), abs(y2), abs(z2), abs(x3), abs(y3), abs(z3))
    return volume if abs(volume) > ROUNDING * size * size * size else 0.0


@njit(cache=True, nogil=True)
def edge_crosses(v: Floats, p: int, q: int, a: int, b: int, c: int) -> bool:
    """Returns whether the edge p q, its ends strictly on both sides of triangle a b c, passes through its inside."""
    one = signed_volume(v, p, q, a, b)
    two = signed_volume(v, p, q, b, c)
    if one * two <= 0.0:
        return False
    return one * signed_volume(v, p, q, c, a) > 0.0


@njit(cache=True, nogil=True)
def cuts_through(v: Floats, a: int, b: int, c: int, p: int, q: int, r: int) -> int:
    """Returns 1 if an edge of triangle a b c passes through the inside of p q r, -1 if a b c lies on one side of it.

    0 when it reaches through the plane elsewhere.
    """
    s0 = signed_volume(v, p, q, r, a)
    s1 = signed_volume(v, p, q, r, b)
    s2 = signed_volume(v, p, q, r, c)
    if min(s0, s1, s2) >= 0.0 or max(s0, s1, s2) <= 0.0:
        return -1
    if s0 * s1 < 0.0 and edge_crosses(v, a, b, p, q, r):
        return 1
    if s1 * s2 < 0.0 and edge_crosses(v, b, c, p, q, r):
        return 1
    if s2 * s0 < 0.0 and edge_crosses(v, c, a, p, q, r):
        return 1
    return 0


@njit(cache=True, nogil=True)
def triangles_cross(v: Floats, a: int, b: int, c: int, p: int, q: int, r: int) -> bool:
    """Returns whether the triangles of vertices a b c and p q r cross strictly."""
    shared = (a == p or a == q or a == r) + (b == p or b == q or b == r) + (c == p or c == q or c == r)
    if shared >= 2:
        return False
    found = cuts_through(v, a, b, c, p, q, r)
    if found != 0:
        return found > 0
    return cuts_through(v, p, q, r, a, b, c) > 0


@njit(cache=True, nogil=True)
def boxes_meet(one: Floats, a: int, two: Floats, b: int) -> bool:
    """Returns whether box `one[a]` and box `two[b]` overlap or touch."""
    for axis in range(3):
        if one[a, axis] > two[b, 3 + axis] or two[b, axis] > one[a, 3 + axis]:
            return False
    return True


@njit(cache=True, nogil=True)
def place_codes(vertices: Floats, triangles: Ints, bits: int, codes: NDArray[np.uint64]) -> None:
    """Writes where the centres of the triangles (m, 3) stand on a Z-order curve to `codes (m,)`.

    The curve fills the box of all `vertices`, `bits` to an axis, those of x, y and z interleaved, x lowest.
    """
    low = np.empty(3)
    extent = 1e-300
    for axis in range(3):
        low[axis] = vertices[:, axis].min()
        extent = max(extent, vertices[:, axis].max() - low[axis])
    scale = (2.0**bits - 1.0) / (3.0 * extent)
    for i in range(len(triangles)):
        code = np.uint64(0)
        for axis in range(3):
            total = vertices[triangles[i, 0], axis] + vertices[triangles[i, 1], axis] + vertices[triangles[i, 2], axis]
            at = np.uint64(max(total - 3.0 * low[axis], 0.0) * scale)
            for bit in range(bits):
                code |= ((at >> np.uint64(bit)) & np.uint64(1)) << np.uint64(3 * bit + axis)
        codes[i] = code


@njit(cache=True, nogil=True)
def fill_boxes(vertices: Floats, triangles: Ints, triangle_boxes: Floats, boxes: Floats, n_leaves: int) -> None:
    """Writes the boxes (m, 6) of the triangles and the heap `boxes (2 n_leaves, 6)` over them, empty ones inside out."""
    for node in range(2 * n_leaves):
        for axis in range(3):
            boxes[node, axis] = np.inf
            boxes[node, 3 + axis] = -np.inf
    for i in range(len(triangles)):
        node = n_leaves + i // LEAF
        for axis in range(3):
            a = vertices[triangles[i, 0], axis]
            b = vertices[triangles[i, 1], axis]
            c = vertices[triangles[i, 2], axis]
            low, high = min(a, b, c), max(a, b, c)
            triangle_boxes[i, axis] = low
            triangle_boxes[i, 3 + axis] = high
            boxes[node, axis] = min(boxes[node, axis], low)
            boxes[node, 3 + axis] = max(boxes[node, 3 + axis], high)
    for node in range(n_leaves - 1, 0, -1):
        for axis in range(3):
            boxes[node, axis] = min(boxes[2 * node, axis], boxes[2 * node + 1, axis])
            boxes[node, 3 + axis] = max(boxes[2 * node, 3 + axis], boxes[2 * node + 1, 3 + axis])


@njit(cache=True, nogil=True)
def find_crossings(
    first: int,
    last: int,
    vertices: Floats,
    triangles: Ints,
    triangle_boxes: Floats,
    boxes: Floats,
    n_leaves: int,
    pairs: Ints,
    crossed: NDArray[np.uint8],
) -> None:
    """Counts the crossing pairs whose lower triangle lies in the leaves first..last - 1.

    `triangles (m, 3)` stand in the order of the tree with their own `triangle_boxes`; `boxes (2 n_leaves, 6)` is the
    heap (empty leaves have low above high), `n_leaves` a power of two. `pairs (n_leaves,)` receives the number of
    crossing pairs of each leaf; `crossed (m,)` is set to 1 for every triangle in one.
    """
    stack = np.empty(128, np.int64)
    n_triangles = len(triangles)
    for leaf in range(first, last):
        pairs[leaf] = 0
        own = n_leaves + leaf
        stack[0] = own
        depth = 1
        above = own
        while above > 1:  # what stands right of the way up to the root: the leaves after this one
            if above % 2 == 0:
                stack[depth] = above + 1
                depth += 1
            above //= 2
        while depth > 0:
            depth -= 1
            node = stack[depth]
            if not boxes_meet(boxes, own, boxes, node):
                continue
            if node < n_leaves:
                stack[depth] = 2 * node + 1
                stack[depth + 1] = 2 * node
                depth += 2
                continue
            other = node - n_leaves
            for i in range(LEAF * leaf, min(LEAF * leaf + LEAF, n_triangles)):
                if not boxes_meet(triangle_boxes, i, boxes, node):
                    continue
                for j in range(max(LEAF * other, i + 1), min(LEAF * other + LEAF, n_triangles)):
                    if not boxes_meet(triangle_boxes, i, triangle_boxes, j):
                        continue
                    if triangles_cross(
                        vertices,
                        triangles[i, 0],
                        triangles[i, 1],
                        triangles[i, 2],
                        triangles[j, 0],
                        triangles[j, 1],
                        triangles[j, 2],
                    ):
                        pairs[leaf] += 1
                        crossed[i] = 1
                        crossed[j] = 1


@njit(cache=True, nogil=True)
def mark_near(
    first: int, last: int, vertices: Floats, triangles: Ints, boxes: Floats, n_leaves: int, near: NDArray[np.uint8]
) -> None:
    """Sets `near (m,)` to 1 for the triangles first..last - 1 whose box meets that of a leaf of a tree.

    `boxes (2 n_leaves, 6)` is the heap of another list of triangles, as in `find_crossings`.
    """
    stack = np.empty(128, np.int64)
    box = np.empty((1, 6))
    for i in range(first, last):
        for axis in range(3):
            a = vertices[triangles[i, 0], axis]
            b = vertices[triangles[i, 1], axis]
            c = vertices[triangles[i, 2], axis]
            box[0, axis] = min(a, b, c)
            box[0, 3 + axis] = max(a, b, c)
        depth = 1
        stack[0] = 1
        while depth > 0:
            depth -= 1
            node = stack[depth]
            if not boxes_meet(box, 0, boxes, node):
                continue
            if node >= n_leaves:
                near[i] = 1
                break
            stack[depth] = 2 * node + 1
            stack[depth + 1] = 2 * node
            depth += 2
