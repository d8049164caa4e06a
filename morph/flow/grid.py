"""A network as a solver sees it: nodes, pipes between them, and the nodes whose pressure is given.

Eliminating the flows from a round of Newton's method leaves one symmetric positive definite system
for the pressures of the free nodes, with the pattern of the network. `Grid` holds the pipes;
`PressureSystem` holds that pattern, ordered so that few entries fill in (minimum degree), and is
reused from round to round and from solve to solve.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from morph.core.arrays import Bools, Floats, Ints, frozen_ints


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """Pipes between nodes.

    Args:
        n_nodes: number of nodes.
        start, end: (m,) nodes of each pipe; flow is positive from start to end.
        fixed: (k,) nodes of given pressure, each once.
    """

    n_nodes: int
    start: Ints
    end: Ints
    fixed: Ints

    def __post_init__(self) -> None:
        start = frozen_ints("start", self.start, (None,), below=self.n_nodes)
        object.__setattr__(self, "start", start)
        object.__setattr__(self, "end", frozen_ints("end", self.end, (len(start),), below=self.n_nodes))
        object.__setattr__(self, "fixed", frozen_ints("fixed", self.fixed, (None,), below=self.n_nodes))
        if len(np.unique(self.fixed)) != len(self.fixed):
            raise ValueError("fixed: expected each node once")

    @property
    def n_pipes(self) -> int:
        """Number of pipes."""
        return len(self.start)

    def leaving(self, flow: Floats) -> Floats:
        """Returns for each node (n,) what leaves it minus what enters it through the pipes, for flows (m,)."""
        out = np.bincount(self.start, flow, self.n_nodes) - np.bincount(self.end, flow, self.n_nodes)
        return np.asarray(out, dtype=np.float64)


def make_grid(n_nodes: int, ends: Sequence[tuple[int, int]], fixed: Sequence[int]) -> Grid:
    """Returns the grid of pipes between pairs of nodes."""
    pairs = np.asarray(ends, dtype=np.int64).reshape(-1, 2)
    return Grid(n_nodes, pairs[:, 0], pairs[:, 1], np.asarray(fixed, dtype=np.int64))


@dataclass(slots=True, eq=False)
class PressureSystem:
    """The pattern of the pressures of a grid, and its factor.

    Args:
        grid: the network.
        live: (m,) pipes that some fixed node can reach; in others nothing can flow.
        free: (u,) nodes of unknown pressure. place: (u,) where each stands in the ordered system.
    """

    grid: Grid
    live: Bools = field(init=False)
    reached: Bools = field(init=False)
    free: Ints = field(init=False)
    place: Ints = field(init=False)
    _column_start: Ints = field(init=False)
    _row: Ints = field(init=False)
    _slot: Ints = field(init=False)
    _parent: Ints = field(init=False)
    _start: Ints = field(init=False)
    _below: Ints = field(init=False)
    _lower: Floats = field(init=False)
    _pivot: Floats = field(init=False)

    def __post_init__(self) -> None:
        from morph.kernels.sparse_factor import analyse

        grid = self.grid
        self.reached = _reached(grid)
        self.live = self.reached[grid.start]
        is_free = self.reached.copy()
        is_free[grid.fixed] = False
        self.free = np.flatnonzero(is_free).astype(np.int64)
        index = np.full(grid.n_nodes, -1, dtype=np.int64)
        index[self.free] = np.arange(len(self.free))
        self.place = _ordered(index[grid.start], index[grid.end], len(self.free))
        index[self.free] = self.place
        self._column_start, self._row, self._slot = _upper_pattern(index[grid.start], index[grid.end], len(self.free))
        self._parent, self._start = analyse(self._column_start, self._row)
        self._below = np.zeros(self._start[-1], dtype=np.int64)
        self._lower = np.zeros(self._start[-1])
        self._pivot = np.ones(len(self.free))

    def factor(self, conductance: Floats) -> int:
        """Factors the system of pipes with `conductance (m,)` > 0; returns -1, or the node whose pivot failed."""
        from morph.kernels.sparse_factor import assemble, factor

        value = np.empty(len(self._row))
        assemble(self._slot, conductance, value)
        bad = factor(
            self._column_start, self._row, value, self._parent, self._start, self._below, self._lower, self._pivot
        )
        return -1 if bad < 0 else int(self.free[np.flatnonzero(self.place == bad)[0]])

    def solve(self, right: Floats) -> Floats:
        """Returns the pressures (u,) of the free nodes for right-hand sides (u,) of the factored system."""
        from morph.kernels.sparse_factor import solve_factored

        x = np.empty(len(self.free))
        x[self.place] = right
        solve_factored(self._start, self._below, self._lower, self._pivot, x)
        return x[self.place]


def _reached(grid: Grid) -> Bools:
    """Returns which nodes (n,) hang together with a node of given pressure."""
    from scipy.sparse import coo_matrix
    from scipy.sparse.csgraph import connected_components

    joined = coo_matrix((np.ones(grid.n_pipes), (grid.start, grid.end)), shape=(grid.n_nodes, grid.n_nodes))
    n_pieces, piece = connected_components(joined, directed=False)
    has = np.zeros(n_pieces, dtype=np.bool_)
    has[piece[grid.fixed]] = True
    return np.asarray(has[piece], dtype=np.bool_)


def _ordered(first: Ints, second: Ints, n: int) -> Ints:
    """Returns a place (n,) for each unknown that keeps fill low: minimum degree, on a well-conditioned stand-in."""
    from scipy.sparse import csc_matrix, diags_array
    from scipy.sparse.linalg import splu

    if n == 0:
        return np.empty(0, dtype=np.int64)
    between = (first >= 0) & (second >= 0) & (first != second)
    a, b = first[between], second[between]
    link = csc_matrix((-np.ones(2 * len(a)), (np.r_[a, b], np.r_[b, a])), shape=(n, n))
    link.data[:] = -1.0
    degree = np.asarray(abs(link).sum(axis=0)).ravel()
    stand_in = csc_matrix(link + diags_array(degree + 2.0))
    options = {"SymmetricMode": True}
    found = splu(stand_in, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options=options)
    return np.asarray(found.perm_c, dtype=np.int64)


def _upper_pattern(first: Ints, second: Ints, n: int) -> tuple[Ints, Ints, Ints]:
    """Returns column starts (n + 1,), rows (nnz,) of the upper triangle and the slots (m, 3) of each pipe in it."""
    both = (first >= 0) & (second >= 0) & (first != second)
    low, high = np.minimum(first, second), np.maximum(first, second)
    key = np.concatenate([np.arange(n) * (n + 1), (high * n + low)[both]])
    unique, inverse = np.unique(key, return_inverse=True)
    column, row = unique // max(n, 1), unique % max(n, 1)
    column_start = np.searchsorted(column, np.arange(n + 1)).astype(np.int64)
    slot = np.full((len(first), 3), -1, dtype=np.int64)
    for k, end in enumerate((first, second)):
        known = (end >= 0) & (first != second)
        slot[known, k] = inverse[end[known]]
    slot[both, 2] = inverse[n:]
    return column_start, row.astype(np.int64), slot
