"""How far the bores of each branch may be changed: what prints, what fits, and what the user allows.

A branch has one number, the factor on all its bores; where the range ends at a sample its bore stays
there, so that one narrow place does not hold the whole branch.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from morph.body.plan import BranchKind, ChannelPlan
from morph.core.arrays import Bools, Floats, Ints, frozen_bools, frozen_floats, frozen_ints

ALLOWED_RANGE = "bore_range"
"""Name of the limit that the allowed range of bores is; others are faces, holes and branches."""


class Sized(NamedTuple):
    """Changed bores.

    Args:
        bore_mm: (n,) of the samples.
        ratio: (s,) of the segments, to their present bores.
        share: (s,) how much of a change of its branch's factor a segment takes part in.
    """

    bore_mm: Floats
    ratio: Floats
    share: Floats


@dataclass(frozen=True, slots=True, eq=False)
class BoreRange:
    """The range of every sample of every branch.

    Args:
        first: (m + 1,) samples first[e] to first[e + 1] belong to branch e; segments lie between samples.
        bore_mm, least_mm, most_mm: (n,) present bore and the ends of its range.
        free: (m,) whether the branch may change.
        by: (n,) names of what limits the upper end.
    """

    first: Ints
    bore_mm: Floats
    least_mm: Floats
    most_mm: Floats
    free: Bools
    by: tuple[str, ...]

    def __post_init__(self) -> None:
        first = frozen_ints("first", self.first, (None,))
        object.__setattr__(self, "first", first)
        for name in ("bore_mm", "least_mm", "most_mm"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (int(first[-1]),)))
        object.__setattr__(self, "free", frozen_bools("free", self.free, (len(first) - 1,)))
        if (self.least_mm > self.most_mm).any():
            raise ValueError("least_mm: expected no more than most_mm")

    @property
    def branch(self) -> Ints:
        """The branch (n,) of each sample."""
        return np.repeat(np.arange(len(self.free), dtype=np.int64), np.diff(self.first))

    def ends(self) -> tuple[Floats, Floats]:
        """Returns least and greatest ln of the factor (m,) that still change something; 0 where nothing may change."""
        low = np.log(np.minimum.reduceat(self.least_mm / self.bore_mm, self.first[:-1]))
        high = np.log(np.maximum.reduceat(self.most_mm / self.bore_mm, self.first[:-1]))
        return np.where(self.free, np.minimum(low, 0.0), 0.0), np.where(self.free, np.maximum(high, 0.0), 0.0)

    def at(self, log_factor: Floats) -> Sized:
        """Returns the bores at factors exp(log_factor (m,))."""
        wanted = self.bore_mm * np.exp(log_factor)[self.branch]
        free = self.free[self.branch]
        bore = np.where(free, np.clip(wanted, self.least_mm, self.most_mm), self.bore_mm)
        moves = np.where(free & (wanted >= self.least_mm) & (wanted <= self.most_mm), bore, 0.0)
        ahead = np.ones(len(bore), dtype=np.bool_)
        ahead[self.first[1:] - 1] = False
        at = np.flatnonzero(ahead)
        total = bore[at] + bore[at + 1]
        return Sized(bore, total / (self.bore_mm[at] + self.bore_mm[at + 1]), (moves[at] + moves[at + 1]) / total)

    def limit(self, branch: int, upper: bool) -> str:
        """Returns the name of what holds a branch at the upper or lower end of its range."""
        if not upper:
            return ALLOWED_RANGE
        span = slice(int(self.first[branch]), int(self.first[branch + 1]))
        names = self.by[span]
        tight = self.most_mm[span] / self.bore_mm[span]
        return names[int(tight.argmax())]


def make_bore_range(plan: ChannelPlan, allowed_mm: tuple[float, float]) -> BoreRange:
    """Returns the range of a plan's bores: channels with through-flow may change, leads and blind branches stay.

    Upwards a bore may grow to the room the plan found: to faces and holes all of it, beside another channel half
    of what is left, as that one may grow too. Bores that the plan holds above or below the allowed range stay within
    theirs.

    Args:
        plan: bores, and the room each has.
        allowed_mm: least and greatest bore the job allows.
    """
    bore = np.concatenate([branch.bore_mm for branch in plan.branches])
    room = np.concatenate([branch.room_mm for branch in plan.branches])
    by = tuple(name for branch in plan.branches for name in branch.room_by)
    shared = np.array([name.startswith("branch:") for name in by], dtype=np.bool_)
    room = np.where(shared, 0.5 * (bore + room), room)
    least, greatest = allowed_mm
    most = np.maximum(np.minimum(room, greatest), bore)
    names = tuple(ALLOWED_RANGE if r >= greatest else name for r, name in zip(room.tolist(), by, strict=True))
    counts = [len(branch.bore_mm) for branch in plan.branches]
    free = [branch.kind is BranchKind.CHANNEL and branch.through_flow for branch in plan.branches]
    return BoreRange(
        first=np.concatenate([[0], np.cumsum(counts)]),
        bore_mm=bore,
        least_mm=np.minimum(bore, least),
        most_mm=most,
        free=np.array(free, dtype=np.bool_),
        by=names,
    )


def carry_range(bores: BoreRange, plan: ChannelPlan, allowed_mm: tuple[float, float]) -> BoreRange:
    """Returns the range of `bores` for the bores that a plan of the same channels has now; leads are the plan's own.

    Args:
        bores: range of the first plan.
        plan: with the same channel samples, and maybe other leads.
        allowed_mm: least and greatest bore.
    """
    own = make_bore_range(plan, allowed_mm)
    n = sum(len(branch.bore_mm) for branch in plan.branches if branch.kind is BranchKind.CHANNEL)
    least, most = (
        np.concatenate([mine[:n], other[n:]])
        for mine, other in ((bores.least_mm, own.least_mm), (bores.most_mm, own.most_mm))
    )
    return BoreRange(
        first=own.first,
        bore_mm=own.bore_mm,
        least_mm=np.minimum(least, own.bore_mm),
        most_mm=np.maximum(most, own.bore_mm),
        free=own.free,
        by=(*bores.by[:n], *own.by[n:]),
    )
