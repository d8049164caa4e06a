"""Through-flow by blocks against enumeration of all simple paths and against a general-purpose graph library."""

import networkx as nx
import numpy as np
import pytest

from morph.body.flow_path import connected_pieces, edge_blocks, through_flow, through_openings

pytestmark = pytest.mark.quick


def random_graph(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(3, 8))
    ends = [tuple(int(v) for v in rng.integers(0, n, 2)) for _ in range(int(rng.integers(2, 11)))]
    nodes = [int(v) for v in rng.permutation(n)]
    return n, ends, nodes[: int(rng.integers(1, 3))], nodes[2 : 2 + int(rng.integers(1, 2))]


def on_simple_paths(n, ends, starts, goals):
    """All edges on a path without a repeated node from a start to another goal, by plain enumeration."""
    found = set()

    def walk(node, seen, used):
        if node in goals and used:
            found.update(used)
        for edge, (a, b) in enumerate(ends):
            if node in (a, b) and a != b:
                other = b if node == a else a
                if other not in seen:
                    walk(other, seen | {other}, [*used, edge])

    for start in starts:
        walk(start, {start}, [])
    return [edge in found for edge in range(len(ends))]


@pytest.mark.parametrize("seed", range(120))
def test_through_flow_is_a_simple_path_from_in_to_out(seed):
    n, ends, ins, outs = random_graph(seed)
    # A path from one in to an out may pass the other in only through the outside, so join them there.
    extra = [(n, node) for node in ins] + [(n + 1, node) for node in outs]
    expected = on_simple_paths(n + 2, [*ends, *extra], [n], [n + 1])[: len(ends)]
    assert through_flow(n, ends, ins, outs).tolist() == expected


@pytest.mark.parametrize("seed", range(60))
def test_blocks_agree_with_networkx(seed):
    n, ends, _, _ = random_graph(seed)
    graph = nx.Graph((a, b) for a, b in ends if a != b)
    component = {}
    for k, edges in enumerate(nx.biconnected_component_edges(graph)):
        component.update({frozenset(edge): k for edge in edges})
    block = edge_blocks(n, ends)
    for e, one in enumerate(ends):
        for f, two in enumerate(ends):
            if e != f and one[0] != one[1] and two[0] != two[1]:
                same = component[frozenset(one)] == component[frozenset(two)]
                assert (block[e] == block[f]) == same
            elif e != f:
                assert block[e] != block[f]


@pytest.mark.parametrize("seed", range(60))
def test_powder_leaves_on_simple_paths_between_openings(seed):
    n, ends, one, two = random_graph(seed)
    openings = sorted({*one, *two})
    expected = on_simple_paths(n, ends, openings, set(openings))
    # Between openings joined outside, a way may also pass through a third one.
    got = through_openings(n, ends, openings).tolist()
    assert all(g or not e for g, e in zip(got, expected, strict=True))
    joined = [*ends, *((n, node) for node in openings)]
    cycles = [set(c) for c in nx.biconnected_component_edges(nx.MultiGraph(joined))] if joined else []
    for edge, (a, b) in enumerate(ends):
        if a != b:
            own = next(c for c in cycles if any(frozenset(x[:2]) == frozenset((a, b)) for x in c))
            assert got[edge] == any(n in x[:2] for x in own)


def test_a_blind_branch_and_its_neck():
    #  in 0 - 1 - 2 out, a lollipop at 1: neck 1 - 3, loop 3 - 4 - 5 - 3.
    ends = [(0, 1), (1, 2), (1, 3), (3, 4), (4, 5), (5, 3)]
    assert through_flow(6, ends, [0], [2]).tolist() == [True, True, False, False, False, False]
    assert through_openings(6, ends, [0, 2]).tolist() == [True, True, False, False, False, False]
    # A second opening on the loop frees the neck and both arms of the loop.
    assert through_openings(6, ends, [0, 2, 4]).all()


def test_no_flow_without_an_in_or_an_out():
    assert not through_flow(2, [(0, 1)], [0], []).any()
    assert not through_flow(2, [(0, 1)], [], [1]).any()


def test_a_loop_at_one_node_carries_nothing():
    assert through_flow(3, [(0, 1), (1, 1), (1, 2)], [0], [2]).tolist() == [True, False, True]


def test_parallel_branches_both_carry_flow():
    assert through_flow(4, [(0, 1), (1, 2), (1, 2), (2, 3)], [0], [3]).all()


def test_pieces_are_listed_by_their_lowest_branch():
    assert connected_pieces(6, [(4, 5), (0, 1), (1, 2), (3, 4)]) == [[0, 3], [1, 2]]


def test_a_long_chain_does_not_exhaust_the_stack():
    n = 20000
    assert through_flow(n, [(k, k + 1) for k in range(n - 1)], [0], [n - 1]).all()
