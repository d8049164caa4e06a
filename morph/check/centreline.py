"""The plan's centrelines as one table of samples, and the way through the channels between any two."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.plan import ChannelPlan, PlanBranch
from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints

Place = tuple[float, float, float]

TIE_RATIO = 1e-6
"""Ways that differ by less than this of their length are equal."""


@dataclass(frozen=True, slots=True, eq=False)
class Centrelines:
    """All samples of all branches, one below the other in plan order.

    Args:
        plan: where they come from.
        xyz_mm: (n, 3). bore_mm: (n,). tangent: (n, 3) unit, from start to end.
        along_mm: (n,) way from the start of the branch. branch: (n,) index into plan.branches.
        first: (m + 1,) first sample of each branch, then n.
    """

    plan: ChannelPlan
    xyz_mm: Floats
    bore_mm: Floats
    tangent: Floats
    along_mm: Floats
    branch: Ints
    first: Ints

    def __post_init__(self) -> None:
        n = len(self.branch)
        for name, shape in (("xyz_mm", (n, 3)), ("bore_mm", (n,)), ("tangent", (n, 3)), ("along_mm", (n,))):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), shape))
        object.__setattr__(self, "branch", frozen_ints("branch", self.branch, (n,), below=len(self.plan.branches)))
        object.__setattr__(self, "first", frozen_ints("first", self.first, (len(self.plan.branches) + 1,)))

    def branch_of(self, sample: int) -> PlanBranch:
        """Returns the branch that holds `sample`."""
        return self.plan.branches[int(self.branch[sample])]

    def sheet_of(self, sample: int) -> tuple[float, float] | None:
        """Returns the place of `sample` on the sheet, None on a lead."""
        sheet = self.branch_of(sample).sheet_mm
        if sheet is None:
            return None
        x, y = sheet[int(sample - self.first[self.branch[sample]])]
        return (float(x), float(y))


def _tangents(points: Floats) -> Floats:
    """Unit tangents by central differences, one-sided at the ends; (1, 0, 0) where samples coincide."""
    if len(points) < 2:
        return np.array([[1.0, 0.0, 0.0]] * len(points))
    step = np.empty_like(points)
    step[1:-1] = points[2:] - points[:-2]
    step[0], step[-1] = points[1] - points[0], points[-1] - points[-2]
    length = np.linalg.norm(step, axis=1)
    step[length == 0.0] = (1.0, 0.0, 0.0)
    return step / np.where(length > 0.0, length, 1.0)[:, None]


def chord_lengths_mm(points: Floats) -> Floats:
    """Returns the way along the polyline (k, 3) from its first point to each of its points, mm."""
    return np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))])


def make_centrelines(plan: ChannelPlan) -> Centrelines:
    """Returns the table of all samples of `plan`."""
    counts = [len(branch.xyz_mm) for branch in plan.branches]
    return Centrelines(
        plan,
        np.concatenate([branch.xyz_mm for branch in plan.branches]),
        np.concatenate([branch.bore_mm for branch in plan.branches]),
        np.concatenate([_tangents(branch.xyz_mm) for branch in plan.branches]),
        np.concatenate([chord_lengths_mm(branch.xyz_mm) for branch in plan.branches]),
        np.repeat(np.arange(len(counts)), counts),
        np.concatenate([[0], np.cumsum(counts)]),
    )


@dataclass(frozen=True, slots=True, eq=False)
class Way:
    """The shortest way through the channels between pairs of samples.

    Args:
        length_mm: (k,) its length, inf between circuits.
        leave_first, leave_second: (k, 3) unit directions in which it leaves the first and the second sample.
    """

    length_mm: Floats
    leave_first: Floats
    leave_second: Floats


def measure_ways(lines: Centrelines, first: Ints, second: Ints) -> Way:
    """Returns the shortest way between samples `first (k,)` and `second (k,)`."""
    start, end, between = _node_distances(lines)
    length_mm = lines.along_mm[lines.first[1:] - 1]
    a, b = lines.branch[first], lines.branch[second]
    back_a, back_b = lines.along_mm[first], lines.along_mm[second]
    ahead_a, ahead_b = length_mm[a] - back_a, length_mm[b] - back_b
    options = np.stack(
        [
            np.where(a == b, np.abs(back_a - back_b), np.inf),
            back_a + between[start[a], start[b]] + back_b,
            back_a + between[start[a], end[b]] + ahead_b,
            ahead_a + between[end[a], start[b]] + back_b,
            ahead_a + between[end[a], end[b]] + ahead_b,
        ]
    )
    own = np.stack([np.abs(back_a - back_b), back_a + back_b, back_a + ahead_b, ahead_a + back_b, ahead_a + ahead_b])
    # From a node a way along the branch itself ties with one that leaves it at once: the former is meant.
    best = np.argmin(options - TIE_RATIO * own, axis=0)
    onward = np.where(back_b > back_a, 1.0, -1.0)
    sign_a = np.choose(best, [onward, -1.0, -1.0, 1.0, 1.0])
    sign_b = np.choose(best, [-onward, -1.0, 1.0, -1.0, 1.0])
    return Way(
        np.take_along_axis(options, best[None], axis=0)[0],
        lines.tangent[first] * sign_a[:, None],
        lines.tangent[second] * sign_b[:, None],
    )


def _node_distances(lines: Centrelines) -> tuple[Ints, Ints, Floats]:
    """Returns start and end node of each branch and the (nodes, nodes) distances through the channels."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import dijkstra

    plan = lines.plan
    number = {node.id: index for index, node in enumerate(plan.nodes)}
    start = np.array([number[branch.start] for branch in plan.branches], dtype=np.int64)
    end = np.array([number[branch.end] for branch in plan.branches], dtype=np.int64)
    length = lines.along_mm[lines.first[1:] - 1]
    best: dict[tuple[int, int], float] = {}
    for a, b, mm in zip(start.tolist(), end.tolist(), length.tolist(), strict=True):
        key = (min(a, b), max(a, b))
        best[key] = min(best.get(key, np.inf), mm)
    keys = sorted(best)
    n = len(plan.nodes)
    graph = coo_array(
        (np.array([best[key] for key in keys]), (np.array([k[0] for k in keys]), np.array([k[1] for k in keys]))),
        shape=(n, n),
    ).tocsr()
    return start, end, np.asarray(dijkstra(graph, directed=False), dtype=np.float64)
