"""Cells of a lattice inside a closed mesh, and who is whose neighbour.

Along every column of cell centres the crossings with the mesh are found exactly: a triangle covers a column when it
lies on the same side of its three edges in the plane of the columns, each edge judged from its lower vertex number,
so that two triangles which share an edge never both miss a column nor both cover it.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from morph.core.arrays import Floats, Ints
from morph.kernels.lattice import DIRECTIONS, Indices


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _left_of(vertices: Floats, a: int, b: int, x: float, y: float) -> bool:
    """Returns whether (x, y) lies left of the edge from vertex a to b; on it counts as right of lower to higher."""
    low, high = min(a, b), max(a, b)
    side = (vertices[high, 0] - vertices[low, 0]) * (y - vertices[low, 1]) - (vertices[high, 1] - vertices[low, 1]) * (
        x - vertices[low, 0]
    )
    return (side > 0.0) == (a < b)


@njit(cache=True, nogil=True, error_model="numpy")
def column_crossings(
    vertices: Floats, triangles: Ints, n_x: int, n_y: int, wanted: bool, count: Ints, height: Floats
) -> None:
    """Counts the crossings of each column x * n_y + y, and with `wanted` also writes their heights.

    Args:
        vertices: (v, 3) in cells: centres of cells at whole numbers.
        triangles: (m, 3).
        n_x: columns along x.
        n_y: columns along y.
        wanted: False counts into `count (n_x n_y,)`; True takes `count` as the next free place of each column in
            `height` and moves it on.
        count: see there.
        height: (crossings,) filled.
    """
    for t in range(triangles.shape[0]):
        a, b, c = triangles[t, 0], triangles[t, 1], triangles[t, 2]
        ax, ay, az = vertices[a, 0], vertices[a, 1], vertices[a, 2]
        bx, by, bz = vertices[b, 0], vertices[b, 1], vertices[b, 2]
        cx, cy, cz = vertices[c, 0], vertices[c, 1], vertices[c, 2]
        x_first = max(int(np.ceil(min(ax, bx, cx))), 0)
        x_last = min(int(np.floor(max(ax, bx, cx))), n_x - 1)
        y_first = max(int(np.ceil(min(ay, by, cy))), 0)
        y_last = min(int(np.floor(max(ay, by, cy))), n_y - 1)
        area = (bx - ax) * (cy - ay) - (by - ay) * (cx - ax)
        for x in range(x_first, x_last + 1):
            for y in range(y_first, y_last + 1):
                one = _left_of(vertices, a, b, x, y)
                if _left_of(vertices, b, c, x, y) != one or _left_of(vertices, c, a, x, y) != one:
                    continue
                column = x * n_y + y
                if wanted:
                    second = ((x - ax) * (cy - ay) - (y - ay) * (cx - ax)) / area if area != 0.0 else 0.0
                    third = ((bx - ax) * (y - ay) - (by - ay) * (x - ax)) / area if area != 0.0 else 0.0
                    height[count[column]] = az + second * (bz - az) + third * (cz - az)
                count[column] += 1


@njit(cache=True, nogil=True, error_model="numpy")
def fill_columns(n_y: int, n_z: int, start: Ints, height: Floats, number: Indices, cells: Indices, write: bool) -> int:
    """Returns how many cells lie inside, and with `write` numbers them.

    Args:
        n_y: columns along y.
        n_z: cells in a column.
        start: (columns + 1,) first crossing of each column.
        height: (crossings,) sorted within each column here.
        number: (columns, n_z) number of each cell, -1 outside; filled.
        cells: (n, 3) places of the cells; filled.
        write: False only counts.
    """
    n = 0
    for column in range(start.shape[0] - 1):
        crossings = np.sort(height[start[column] : start[column + 1]])
        for k in range(0, crossings.shape[0] - 1, 2):
            low = max(int(np.ceil(crossings[k])), 0)
            high = min(int(np.ceil(crossings[k + 1])) - 1, n_z - 1)
            for z in range(low, high + 1):
                if write:
                    number[column, z] = n
                    cells[n, 0] = column // n_y
                    cells[n, 1] = column % n_y
                    cells[n, 2] = z
                n += 1
    return n


@njit(cache=True, nogil=True, error_model="numpy")
def join_cells(first: int, last: int, number: Indices, n_y: int, cells: Indices, source: Indices) -> None:
    """Fills `source (n, 18)` of cells first..last - 1 with the place each population comes from, -1 for none.

    Populations stand 19 to a cell. The grid keeps one empty cell all around, so that neighbours always exist.
    """
    for i in range(first, last):
        for q in range(1, 19):
            x = cells[i, 0] - DIRECTIONS[q, 0]
            y = cells[i, 1] - DIRECTIONS[q, 1]
            j = number[x * n_y + y, cells[i, 2] - DIRECTIONS[q, 2]]
            source[i, q - 1] = 19 * j + q if j >= 0 else -1
