"""The last stretch of channel before an exit: where nearness to the exit's face is wanted, not a thin wall."""

from __future__ import annotations

import numpy as np

from morph.body.face import Face
from morph.body.room import STEEPNESS
from morph.check.centreline import Centrelines
from morph.core.arrays import Bools, Floats


def own_exit_samples(lines: Centrelines, face: Face) -> Bools:
    """Returns (n,) which samples are on their way out through an exit on `face`.

    From each exit back along its lead, and on into the branches it joins, as long as the centreline
    keeps leaving the face by STEEPNESS; the exit's own last sample always counts.
    """
    mask = np.zeros(len(lines.branch), dtype=bool)
    number = {branch.id: index for index, branch in enumerate(lines.plan.branches)}
    height = face.distance_mm(lines.xyz_mm)
    for exit_ in lines.plan.exits:
        if exit_.face == face.name:
            _mark(lines, height, mask, number[exit_.lead], exit_.node)
    return mask


def _mark(lines: Centrelines, height: Floats, mask: Bools, lead: int, exit_node: str) -> None:
    """Marks the samples from `exit_node` back along branch `lead` and onward."""
    plan, todo, seen = lines.plan, [(lead, exit_node)], {lead}
    while todo:
        index, from_node = todo.pop()
        branch = plan.branches[index]
        ids = np.arange(lines.first[index], lines.first[index + 1])
        far_node = branch.end
        if branch.end == from_node:
            ids, far_node = ids[::-1], branch.start
        way = np.abs(np.diff(lines.along_mm[ids]))
        rises = np.diff(height[ids]) >= STEEPNESS * way
        steps = len(rises) if rises.all() else int(np.argmin(rises))
        mask[ids[: steps + 1]] = True
        if steps < len(rises):
            continue
        for other, joined in enumerate(plan.branches):
            if other not in seen and far_node in (joined.start, joined.end):
                seen.add(other)
                todo.append((other, far_node))
