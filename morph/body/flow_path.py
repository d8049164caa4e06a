"""Which branches lie on a way from one opening to another: blocks of a multigraph.

A branch carries through-flow when a simple path from an in port to an out port runs over it. Join
all in ports to one outside node, all out ports to a second, and the two by one edge: the branch
does so exactly when it lies in the same block (2-connected component) as that edge. Powder leaves a
branch when it lies in a block with two openings joined outside. Blocks by depth-first search with
low points (Hopcroft & Tarjan 1973, "Algorithm 447", Communications of the ACM 16), linear in the
number of edges; parallel edges share a block, a loop at one node is a block of its own.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from morph.core.arrays import Bools, Ints
from morph.core.pieces import Pieces


def edge_blocks(n_nodes: int, ends: Sequence[tuple[int, int]]) -> Ints:
    """Returns the block number (m,) of each edge; edges of one block share a number.

    Args:
        n_nodes: number of nodes.
        ends: the two node indices of each edge; parallel edges and loops allowed.

    >>> edge_blocks(3, [(0, 1), (1, 2), (1, 2)]).tolist()
    [1, 0, 0]
    """
    touching: list[list[tuple[int, int]]] = [[] for _ in range(n_nodes)]
    for edge, (a, b) in enumerate(ends):
        if a != b:
            touching[a].append((b, edge))
            touching[b].append((a, edge))
    block = np.full(len(ends), -1, dtype=np.int64)
    order = [-1] * n_nodes
    low = [0] * n_nodes
    n_blocks = count = 0
    pending: list[int] = []
    for root in range(n_nodes):
        if order[root] >= 0:
            continue
        order[root] = low[root] = count
        count += 1
        stack = [(root, -1, 0)]
        while stack:
            node, entry, place = stack.pop()
            if place < len(touching[node]):
                stack.append((node, entry, place + 1))
                other, edge = touching[node][place]
                if edge == entry:
                    continue
                if order[other] < 0:
                    pending.append(edge)
                    order[other] = low[other] = count
                    count += 1
                    stack.append((other, edge, 0))
                elif order[other] < order[node]:
                    pending.append(edge)
                    low[node] = min(low[node], order[other])
            elif stack:
                above = stack[-1][0]
                low[above] = min(low[above], low[node])
                if low[node] >= order[above]:
                    n_blocks = _close_block(block, pending, entry, n_blocks)
    for edge, (a, b) in enumerate(ends):
        if a == b:
            block[edge] = n_blocks
            n_blocks += 1
    return block


def _close_block(block: Ints, pending: list[int], entry: int, number: int) -> int:
    while pending:
        edge = pending.pop()
        block[edge] = number
        if edge == entry:
            break
    return number + 1


def through_flow(n_nodes: int, ends: Sequence[tuple[int, int]], sources: Sequence[int], sinks: Sequence[int]) -> Bools:
    """Returns for each edge (m,) whether a simple path from a source to a sink runs over it.

    Args:
        n_nodes: number of nodes.
        ends: the two node indices of each edge.
        sources: nodes of the in ports.
        sinks: nodes of the out ports.

    >>> through_flow(4, [(0, 1), (1, 2), (1, 3)], [0], [2]).tolist()
    [True, True, False]
    """
    if not sources or not sinks:
        return np.zeros(len(ends), dtype=np.bool_)
    outside = [(n_nodes, node) for node in sources] + [(n_nodes + 1, node) for node in sinks]
    block = edge_blocks(n_nodes + 2, [*ends, *outside, (n_nodes, n_nodes + 1)])
    return np.asarray(block[: len(ends)] == block[-1], dtype=np.bool_)


def through_openings(n_nodes: int, ends: Sequence[tuple[int, int]], openings: Sequence[int]) -> Bools:
    """Returns for each edge (m,) whether it lies on a simple path between two different openings.

    Args:
        n_nodes: number of nodes.
        ends: the two node indices of each edge.
        openings: nodes that are open to the outside.

    >>> through_openings(3, [(0, 1), (1, 2)], [0]).tolist()
    [False, False]
    """
    block = edge_blocks(n_nodes + 1, [*ends, *((n_nodes, node) for node in openings)])
    return np.isin(block[: len(ends)], block[len(ends) :])


def connected_pieces(n_nodes: int, ends: Sequence[tuple[int, int]]) -> list[list[int]]:
    """Returns the edge numbers of each connected piece that has an edge, pieces by lowest edge.

    >>> connected_pieces(4, [(0, 1), (2, 3), (1, 0)])
    [[0, 2], [1]]
    """
    joined = Pieces(n_nodes)
    for a, b in ends:
        joined.join(a, b)
    pieces: dict[int, list[int]] = {}
    for edge, (a, _) in enumerate(ends):
        pieces.setdefault(joined.root(a), []).append(edge)
    return sorted(pieces.values())
