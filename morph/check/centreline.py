"""The plan's centrelines as one table of samples."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body import neighbour
from morph.body.neighbour import Network, Strand, Way, make_network, polyline_arc_mm
from morph.body.plan import ChannelPlan, PlanBranch
from morph.core.arrays import Floats, Ints, frozen_floats, frozen_ints

Place = tuple[float, float, float]


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


def make_centrelines(plan: ChannelPlan) -> Centrelines:
    """Returns the table of all samples of `plan`."""
    counts = [len(branch.xyz_mm) for branch in plan.branches]
    return Centrelines(
        plan,
        np.concatenate([branch.xyz_mm for branch in plan.branches]),
        np.concatenate([branch.bore_mm for branch in plan.branches]),
        np.concatenate([_tangents(branch.xyz_mm) for branch in plan.branches]),
        np.concatenate([polyline_arc_mm(branch.xyz_mm) for branch in plan.branches]),
        np.repeat(np.arange(len(counts)), counts),
        np.concatenate([[0], np.cumsum(counts)]),
    )


def network_of(lines: Centrelines) -> Network:
    """Returns the centrelines as body/neighbour.py sees them; samples keep their numbers."""
    number = {node.id: index for index, node in enumerate(lines.plan.nodes)}
    strands = [
        Strand(b.id, number[b.start], number[b.end], b.xyz_mm, polyline_arc_mm(b.xyz_mm), b.bore_mm)
        for b in lines.plan.branches
    ]
    return make_network(strands, len(lines.plan.nodes), lines.plan.section)


def measure_ways(lines: Centrelines, first: Ints, second: Ints) -> Way:
    """Returns the shortest way between samples `first (k,)` and `second (k,)`."""
    return neighbour.measure_ways(network_of(lines), first, second)
