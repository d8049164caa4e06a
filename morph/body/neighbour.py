"""How far channels are from each other, and the one rule for which pairs of places are a wall.

Where two branches meet, the metal between them tapers to nothing; that is a web tip, not a wall. A
pair of places counts as a wall when the way between them along the channels is long against the
distance they must keep (3 times: straight branches that meet at more than 39 degrees never count).
Branches that share a node and open slowly stay a web until they have once been far enough apart,
at most 6 times (19 degrees). Distances are from each sample to the other branch's polyline.
Beside a junction a run too short for a wall may still lie side by side (parting at less than 3 degrees):
a rib, which must print. What thins the bores and what checks them afterwards ask this file with the same wall (limit,
band and BUILD_MM), so the same pairs count in both. The metal inside small loops: island.py.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from morph.body.section import SectionRule, bore_of_reach_mm, reach_mm
from morph.core.arrays import Bools, Floats, Ints, unit_rows

WALL_WAY = 3.0
"""A pair counts when the way along the channels is more than this many times the distance to keep."""

WEB_WAY = 6.0
"""Branches that share a node and have not yet parted stay one web up to this many times that distance."""

RIB_CLOSES = 2.0 * np.sin(np.radians(1.5))
"""Two runs that part at less than 3 degrees enclose a rib; wider, the crotch of a junction (own choice)."""

TIE_RATIO = 1e-6
"""Ways that differ by less than this of their length are equal."""


@dataclass(frozen=True, slots=True, eq=False)
class Strand:
    """One branch as the neighbours see it: node indices of its ends, samples (k, 3), arc length (k,), bore (k,)."""

    id: str
    start: int
    end: int
    xyz_mm: Floats
    arc_mm: Floats
    bore_mm: Floats


def polyline_arc_mm(xyz_mm: Floats) -> Floats:
    """Returns the length (k,) along the polyline (k, d) up to each sample."""
    return np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(xyz_mm, axis=0), axis=1))])


@dataclass(frozen=True, slots=True, eq=False)
class Network:
    """All strands, flattened sample by sample, and the ways between their nodes.

    Args:
        strands: the branches. owner: (n,) strand of each sample. first: (m + 1,) offset of each strand.
        xyz_mm: (n, 3). arc_mm, bore_mm: (n,).
        way_mm: (nodes, nodes) shortest way along the strands, inf when there is none. section: how channels are shaped.
    """

    strands: tuple[Strand, ...]
    owner: Ints
    first: Ints
    xyz_mm: Floats
    arc_mm: Floats
    bore_mm: Floats
    way_mm: Floats
    section: SectionRule = field(default_factory=SectionRule)

    def with_bores(self, bore_mm: Floats) -> Network:
        """Returns the same network with the bores (n,)."""
        return replace(self, bore_mm=bore_mm)


def make_network(strands: Sequence[Strand], n_nodes: int, section: SectionRule | None = None) -> Network:
    """Returns the network of `strands` over `n_nodes` nodes; `section` None is round."""
    from scipy.sparse.csgraph import shortest_path

    way = np.full((n_nodes, n_nodes), np.inf)
    for strand in strands:
        length = max(float(strand.arc_mm[-1]), 1e-12)
        if strand.start != strand.end:
            way[strand.start, strand.end] = way[strand.end, strand.start] = min(way[strand.start, strand.end], length)
    counts = [len(strand.xyz_mm) for strand in strands]
    return Network(
        strands=tuple(strands),
        owner=np.repeat(np.arange(len(strands)), counts),
        first=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        xyz_mm=np.concatenate([s.xyz_mm for s in strands]) if strands else np.empty((0, 3)),
        arc_mm=np.concatenate([s.arc_mm for s in strands]) if strands else np.empty(0),
        bore_mm=np.concatenate([s.bore_mm for s in strands]) if strands else np.empty(0),
        way_mm=np.asarray(shortest_path(way, directed=False), dtype=np.float64),
        section=section or SectionRule(),
    )


@dataclass(frozen=True, slots=True, eq=False)
class Pairs:
    """Pairs of samples within reach of each other.

    Args:
        i, j: (p,) samples, i < j. distance_mm: (p,) between the strands there. way_mm: (p,) along the channels.
    """

    i: Ints
    j: Ints
    distance_mm: Floats
    way_mm: Floats

    def only(self, keep: Bools) -> Pairs:
        """Returns the pairs where `keep (p,)`."""
        return Pairs(self.i[keep], self.j[keep], self.distance_mm[keep], self.way_mm[keep])


def near_pairs(network: Network, reach_mm: float) -> Pairs:
    """Returns all pairs of samples at most `reach_mm` apart that are not neighbours along one strand."""
    from scipy.spatial import cKDTree

    found = cKDTree(network.xyz_mm).query_pairs(reach_mm, output_type="ndarray").astype(np.int64)
    i, j = found.min(axis=1), found.max(axis=1)
    apart = (network.owner[i] != network.owner[j]) | (
        np.abs(network.arc_mm[i] - network.arc_mm[j])
        > 1.5 * np.linalg.norm(network.xyz_mm[i] - network.xyz_mm[j], axis=1)
    )
    i, j = i[apart], j[apart]
    order = np.lexsort((j, i))
    i, j = i[order], j[order]
    distance = np.minimum(
        distance_to_strand_mm(network, network.xyz_mm[i], j), distance_to_strand_mm(network, network.xyz_mm[j], i)
    )
    return Pairs(i, j, distance, way_between_mm(network, i, j))


def distance_to_strand_mm(network: Network, points_mm: Floats, at: Ints) -> Floats:
    """Returns the distance (p,) from points (p, 3) to the two polyline pieces that meet at sample `at (p,)`."""
    before = np.maximum(at - 1, network.first[network.owner[at]])
    after = np.minimum(at + 1, network.first[network.owner[at] + 1] - 1)
    here = network.xyz_mm[at]
    squared = np.full(len(at), np.inf)
    for other in (before, after):
        piece = network.xyz_mm[other] - here
        size = np.einsum("ij,ij->i", piece, piece)
        share = np.einsum("ij,ij->i", points_mm - here, piece) / np.where(size > 0.0, size, 1.0)
        nearest = here + np.clip(share, 0.0, 1.0)[:, None] * piece
        squared = np.minimum(squared, ((points_mm - nearest) ** 2).sum(axis=1))
    return np.asarray(np.sqrt(squared), dtype=np.float64)


def way_from_node_mm(network: Network, node: int, at: Ints) -> Floats:
    """Returns the shortest way (p,) along the channels from node index `node` to samples `at (p,)`."""
    start, end, length = _ends(network)
    owner = network.owner[at]
    forth = network.way_mm[node, start[owner]] + network.arc_mm[at]
    back = network.way_mm[node, end[owner]] + length[owner] - network.arc_mm[at]
    return np.asarray(np.minimum(forth, back), dtype=np.float64)


def _ends(network: Network) -> tuple[Ints, Ints, Floats]:
    start = np.array([s.start for s in network.strands], dtype=np.int64)
    end = np.array([s.end for s in network.strands], dtype=np.int64)
    return start, end, np.array([s.arc_mm[-1] for s in network.strands], dtype=np.float64)


def way_between_mm(network: Network, i: Ints, j: Ints) -> Floats:
    """Returns the shortest way (p,) along the channels between samples `i (p,)` and `j (p,)`."""
    start, end, length = _ends(network)
    a, b = network.owner[i], network.owner[j]
    best = np.where(a == b, np.abs(network.arc_mm[i] - network.arc_mm[j]), np.inf)
    for near, rest in ((start[a], network.arc_mm[i]), (end[a], length[a] - network.arc_mm[i])):
        for far, tail in ((start[b], network.arc_mm[j]), (end[b], length[b] - network.arc_mm[j])):
            best = np.minimum(best, rest + network.way_mm[near, far] + tail)
    return best


def side_by_side(network: Network, pairs: Pairs) -> Bools:
    """Returns which pairs (p,) run side by side: their gap hardly closes along the shortest way between them."""
    way = measure_ways(network, pairs.i, pairs.j)
    toward = unit_rows(network.xyz_mm[pairs.j] - network.xyz_mm[pairs.i])
    closes = np.einsum("ij,ij->i", way.leave_first, toward) - np.einsum("ij,ij->i", way.leave_second, toward)
    return np.asarray(closes <= RIB_CLOSES, dtype=np.bool_)


@dataclass(frozen=True, slots=True, eq=False)
class Way:
    """The shortest way through the channels between pairs of samples.

    Args:
        length_mm: (p,) its length, inf between circuits.
        leave_first, leave_second: (p, 3) unit directions in which it leaves the first and the second sample.
    """

    length_mm: Floats
    leave_first: Floats
    leave_second: Floats


def measure_ways(network: Network, first: Ints, second: Ints) -> Way:
    """Returns the shortest way between samples `first (p,)` and `second (p,)` with its directions."""
    start, end, length = _ends(network)
    between, tangent = network.way_mm, tangents(network)
    a, b = network.owner[first], network.owner[second]
    back_a, back_b = network.arc_mm[first], network.arc_mm[second]
    ahead_a, ahead_b = length[a] - back_a, length[b] - back_b
    along = np.where(a == b, np.abs(back_a - back_b), np.inf)
    own = np.stack([along, back_a + back_b, back_a + ahead_b, ahead_a + back_b, ahead_a + ahead_b])
    nodes = [(start[a], start[b]), (start[a], end[b]), (end[a], start[b]), (end[a], end[b])]
    options = own.copy()
    options[1:] += np.stack([between[one, two] for one, two in nodes])
    # From a node a way along the branch itself ties with one that leaves it at once: the former is meant.
    best = np.argmin(options - TIE_RATIO * np.where(np.isfinite(own), own, 0.0), axis=0)
    onward = np.where(back_b > back_a, 1.0, -1.0)
    sign_a = np.choose(best, [onward, -1.0, -1.0, 1.0, 1.0])
    sign_b = np.choose(best, [-onward, -1.0, 1.0, -1.0, 1.0])
    length_mm = np.take_along_axis(options, best[None], axis=0)[0]
    return Way(length_mm, tangent[first] * sign_a[:, None], tangent[second] * sign_b[:, None])


def tangents(network: Network) -> Floats:
    """Returns the unit tangents (n, 3) by central differences within each strand, one-sided at its ends."""
    at = np.arange(len(network.owner))
    before = np.maximum(at - 1, network.first[network.owner])
    after = np.minimum(at + 1, network.first[network.owner + 1] - 1)
    return unit_rows(network.xyz_mm[after] - network.xyz_mm[before])


def keep_apart_mm(network: Network, pairs: Pairs, wall_mm: Floats | float) -> Floats:
    """Returns the distance (p,) the pairs must keep: what both reach towards each other plus `wall_mm` (with bands)."""
    toward = unit_rows(network.xyz_mm[pairs.j] - network.xyz_mm[pairs.i])
    one = reach_mm(network.bore_mm[pairs.i], toward, network.section)
    return one + reach_mm(network.bore_mm[pairs.j], -toward, network.section) + wall_mm


def count_as_wall(network: Network, pairs: Pairs, wall_mm: float) -> Bools:
    """Returns which pairs (p,) are walls: not the web of a junction (see the head of this file)."""
    needed = keep_apart_mm(network, pairs, wall_mm)
    counted = pairs.way_mm > WALL_WAY * needed
    close = pairs.distance_mm < needed
    doubtful = np.flatnonzero(counted & close & (pairs.way_mm <= WEB_WAY * needed))
    a, b = network.owner[pairs.i], network.owner[pairs.j]
    groups = sorted({(int(a[p]), int(b[p])) for p in doubtful if a[p] != b[p]})
    for one, two in groups:
        ends_one = (network.strands[one].start, network.strands[one].end)
        ends_two = (network.strands[two].start, network.strands[two].end)
        if ends_one[0] == ends_one[1] or ends_two[0] == ends_two[1]:
            continue
        here = close & (((a == one) & (b == two)) | ((a == two) & (b == one)))
        mine = np.where(a == one, pairs.i, pairs.j)
        shared = sorted(set(ends_one) & set(ends_two))
        webs = [_web_samples(network, one, node, mine[here]) for node in shared]
        if len(shared) == 2 and len(webs[0]) == network.first[one + 1] - network.first[one]:
            continue  # two branches between the same nodes that never part are no web but one slot
        for web in webs:
            counted[doubtful] &= ~(here[doubtful] & np.isin(mine[doubtful], web))
    return counted


def wall_pairs(network: Network, wall_mm: float, within_mm: float = 1.0) -> Pairs:
    """Returns the pairs that are walls, found up to `within_mm` beyond the wall to keep.

    Args:
        network: strands with their bores.
        wall_mm: the wall to keep, its band and BUILD_MM included.
        within_mm: walls up to this much thicker are listed too.
    """
    near = close_pairs(network, wall_mm + within_mm)
    return near.only(count_as_wall(network, near, wall_mm))


def ribs(network: Network, pairs: Pairs, counted: Bools) -> Bools:
    """Returns which pairs (p,) lie across a rib: no wall, not run together, side by side.

    Args:
        network: strands with their bores.
        pairs: pairs of samples.
        counted: (p,) which of them are walls.
    """
    apart = pairs.distance_mm > keep_apart_mm(network, pairs, 0.0)
    found = ~counted & apart
    found[found] = side_by_side(network, pairs.only(found))
    return found


def close_pairs(network: Network, gap_mm: float) -> Pairs:
    """Returns all pairs of samples with at most `gap_mm` of metal between them, walls or not (and some beyond)."""
    return near_pairs(network, 2.0 * widest_reach_mm(network) + gap_mm)


def widest_reach_mm(network: Network) -> float:
    """Returns how far the widest channel reaches at most in any direction."""
    widest = np.full(1, network.bore_mm.max(initial=0.0))
    return float(reach_mm(widest, network.section.up[None, :], network.section)[0])


def _web_samples(network: Network, strand: int, node: int, close: Ints) -> Ints:
    """Returns the samples of `strand`, from its end at `node` on, that are all in `close`."""
    samples = np.arange(network.first[strand], network.first[strand + 1])
    if network.strands[strand].start != node:
        samples = samples[::-1]
    parted = np.flatnonzero(~np.isin(samples, close))
    return samples[: parted[0]] if len(parted) else samples


def room_beside(network: Network, pairs: Pairs, wall_mm: float) -> tuple[Floats, Ints]:
    """Returns the largest bore (n,) the neighbours leave, inf where there is none, and which strand (n,) limits it."""
    room = np.full(len(network.owner), np.inf)
    by = np.zeros(len(network.owner), dtype=np.int64)
    here = np.concatenate([pairs.i, pairs.j])
    there = np.concatenate([pairs.j, pairs.i])
    toward = unit_rows(network.xyz_mm[there] - network.xyz_mm[here])
    kept = np.tile(pairs.distance_mm, 2) - wall_mm - reach_mm(network.bore_mm[there], -toward, network.section)
    left = bore_of_reach_mm(kept, toward, network.section)
    order = np.lexsort((there, left, here))
    here, there, left = here[order], there[order], left[order]
    first = np.concatenate([[True], here[1:] != here[:-1]]) if len(here) else np.zeros(0, dtype=bool)
    room[here[first]] = left[first]
    by[here[first]] = network.owner[there[first]]
    return room, by
