"""How far the channels as built depart from the drawing, in plan area: the integral of bore along the centreline.

Four things change what the layout drew: the allowed bore range lowers wide bores and raises narrow
ones, walls and room cap bores, and pieces without a port are left out. Each is given in mm2 and as
a share of the drawn coolant area, that is the area of the image on the coolant side of its level.
An insert that is none of the drawing any more must not look like a pass only because its walls hold.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.plan import BranchKind, ChannelPlan, PlanBranch
from morph.check.rows import name_list
from morph.core.arrays import Floats
from morph.core.verdict import COMMON_PRACTICE, Outcome, Verdict
from morph.core.words import counted
from morph.layout.graph import Branch, ChannelGraph, Dropped, DropReason

MOST_DEPARTED = 0.05
"""Up to this share of the drawn area the channels count as drawn (common practice, no source)."""

HARDLY_THE_DRAWING = 0.5
"""Above this share the reading of the image itself is in doubt: its coolant end, level or size."""

COOLANT = (DropReason.NO_PORT, DropReason.SPUR, DropReason.ISLAND)
"""Dropped pieces of coolant; a pinhole is metal."""

MOST_BRANCHES = 3


@dataclass(frozen=True, slots=True)
class BranchDeparture:
    """Plan area in mm2 that one branch lost or gained.

    Args:
        id: the branch.
        lowered_mm2: to the upper end of the allowed range. raised_mm2: to its lower end.
        capped_mm2: from the bore wanted to the bore that fits.
        sheet_mm: where built and drawn bore differ most.
    """

    id: str
    lowered_mm2: float
    raised_mm2: float
    capped_mm2: float
    sheet_mm: tuple[float, float]

    @property
    def total_mm2(self) -> float:
        """All of it, gains and losses alike."""
        return self.lowered_mm2 + self.raised_mm2 + self.capped_mm2


@dataclass(frozen=True, slots=True)
class Departure:
    """How far all channels depart from the drawing.

    Args:
        drawn_mm2: coolant area of the drawing. branches: worst first.
        left_out_mm2: pieces without a port, and dropped coolant larger than one bore squared.
        large_pieces: those larger than one bore squared, largest first.
        small_mm2: the rest of the dropped coolant, noise of the image.
        balanced: the bores were changed to share the flow, which counts as lowered and raised too.
    """

    drawn_mm2: float
    branches: tuple[BranchDeparture, ...]
    left_out_mm2: float
    large_pieces: tuple[Dropped, ...]
    small_mm2: float
    balanced: bool = False

    @property
    def lowered_mm2(self) -> float:
        """Lost to the upper end of the allowed bore range."""
        return sum(branch.lowered_mm2 for branch in self.branches)

    @property
    def raised_mm2(self) -> float:
        """Gained at the lower end of the allowed bore range."""
        return sum(branch.raised_mm2 for branch in self.branches)

    @property
    def capped_mm2(self) -> float:
        """Lost where walls leave less room."""
        return sum(branch.capped_mm2 for branch in self.branches)

    @property
    def share(self) -> float:
        """The whole departure over the drawn area."""
        total = self.lowered_mm2 + self.raised_mm2 + self.capped_mm2 + self.left_out_mm2
        return total / self.drawn_mm2 if self.drawn_mm2 > 0.0 else 0.0


def drawn_bore_mm(built: PlanBranch, drawn: Branch) -> Floats:
    """Returns the bore of the layout (k,) at the samples of the plan, which keeps every sample of the layout.

    Between two samples of the layout the plan's lie at even steps of the curve's parameter.
    """
    sheet = built.sheet_mm if built.sheet_mm is not None else built.xyz_mm[:, :2]
    kept: list[int] = []
    for point in drawn.sheet_mm:
        begin = kept[-1] + 1 if kept else 0
        same = np.flatnonzero((sheet[begin:] == point).all(axis=1))
        if not len(same):
            return _by_length(sheet, drawn)
        kept.append(begin + int(same[0]))
    return np.asarray(np.interp(np.arange(len(sheet)), kept, drawn.bore_mm), dtype=np.float64)


def _by_length(sheet_mm: Floats, drawn: Branch) -> Floats:
    """Returns the layout's bore at equal shares of the length, for a plan sampled on its own."""

    def share(points: Floats) -> Floats:
        along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))])
        return np.asarray(along / max(float(along[-1]), 1e-12), dtype=np.float64)

    return np.asarray(np.interp(share(sheet_mm), share(drawn.sheet_mm), drawn.bore_mm), dtype=np.float64)


def _branch_departure(built: PlanBranch, drawn: Branch, bore_scale: float) -> BranchDeparture:
    sheet = built.sheet_mm if built.sheet_mm is not None else built.xyz_mm[:, :2]
    step = np.linalg.norm(np.diff(sheet, axis=0), axis=1)

    def area(difference: Floats) -> float:
        part = np.maximum(difference, 0.0)
        return float((0.5 * (part[1:] + part[:-1]) * step).sum())

    scaled = bore_scale * drawn_bore_mm(built, drawn)
    worst = int(np.argmax(np.abs(scaled - built.bore_mm)))
    return BranchDeparture(
        built.id,
        area(scaled - built.wanted_mm),
        area(built.wanted_mm - scaled),
        area(built.wanted_mm - built.bore_mm),
        (float(sheet[worst, 0]), float(sheet[worst, 1])),
    )


def measure_departure(
    plan: ChannelPlan, graph: ChannelGraph, bore_scale: float = 1.0, balanced: bool = False
) -> Departure:
    """Returns how far the bores of `plan` and the pieces of `graph` depart from the drawing.

    Args:
        plan: channels as built.
        graph: the layout as drawn.
        bore_scale: by which the job itself scales the drawing; what it changes is asked for and not counted.
        balanced: the bores were changed to share the flow.
    """
    drawn = {branch.id: branch for branch in graph.branches}
    channels = [branch for branch in plan.branches if branch.kind is BranchKind.CHANNEL and branch.id in drawn]
    found = [_branch_departure(branch, drawn[branch.id], bore_scale) for branch in channels]
    length = sum(branch.length_mm for branch in graph.branches)
    mean_mm = sum(b.length_mm * float(b.bore_mm.mean()) for b in graph.branches) / max(length, 1e-12)
    dropped = [item for item in graph.dropped if item.reason in COOLANT]
    large = sorted((item for item in dropped if item.area_mm2 > mean_mm**2), key=lambda i: (-i.area_mm2, i.sheet_mm))
    left_out = [i.area_mm2 for i in dropped if i.reason is DropReason.NO_PORT or i.area_mm2 > mean_mm**2]
    return Departure(
        graph.area_ratio * graph.size_mm[0] * graph.size_mm[1],
        tuple(sorted(found, key=lambda item: (-round(item.total_mm2, 6), item.id))),
        sum(left_out),
        tuple(large),
        sum(item.area_mm2 for item in dropped) - sum(left_out),
        balanced,
    )


def _words(found: Departure) -> str:
    def part(area_mm2: float) -> str:
        return f"{area_mm2:.1f} mm2 ({100.0 * area_mm2 / max(found.drawn_mm2, 1e-12):.1f} %)"

    why = "to balance the flow and to the allowed bore range" if found.balanced else "to the allowed bore range"
    text = (
        f"The channels depart from the drawing by {100.0 * found.share:.1f} % of its {found.drawn_mm2:.1f} mm2 of "
        f"coolant: {part(found.lowered_mm2)} lowered and {part(found.raised_mm2)} raised {why}, "
        f"{part(found.capped_mm2)} capped to the room there is, {part(found.left_out_mm2)} in pieces left out."
    )
    if found.large_pieces:
        x, y = found.large_pieces[0].sheet_mm
        text += f" Left out: {counted(len(found.large_pieces), 'piece')} larger than one bore squared"
        text += f", the largest {found.large_pieces[0].area_mm2:.1f} mm2 around [{x:.1f}, {y:.1f}] mm."
    worst = [item for item in found.branches if item.total_mm2 > 0.005 * found.drawn_mm2][:MOST_BRANCHES]
    if worst:
        text += f" Most in {name_list([f'{item.id} ({item.total_mm2:.1f} mm2)' for item in worst])}."
    if found.small_mm2 > 0.0:
        text += f" Not counted: {part(found.small_mm2)} of specks and spurs, each below one bore squared."
    if found.share > HARDLY_THE_DRAWING:
        text += " That is hardly the drawing any more: are [layout] channel, level and size_mm right?"
    return text


def _hint(found: Departure) -> str:
    asks = []
    if found.share > HARDLY_THE_DRAWING:
        asks.append("Check [layout] channel (high or low), level and size_mm first.")
    by_size = {
        "Allow larger bores ([section] bore_range_mm), or choose a higher [layout] level.": found.lowered_mm2,
        "Allow smaller bores ([section] bore_range_mm, [service] smallest_bore_mm), or enlarge size_mm.": (
            found.raised_mm2
        ),
        "Lay the channels deeper ([carrier] depth_mm), or enlarge size_mm.": found.capped_mm2,
        "Give the pieces left out a [[port]], or choose a lower [layout] level that joins them.": found.left_out_mm2,
    }
    least = min(0.01 * found.drawn_mm2, 0.5 * max(by_size.values()))
    asks += [words for words, area in sorted(by_size.items(), key=lambda item: -item[1]) if area > least]
    return " ".join(asks)


def check_as_drawn(found: Departure) -> list[Verdict]:
    """Returns the `as-drawn` row: a pass up to MOST_DEPARTED without a large piece left out, else a watch."""
    passed = found.share <= MOST_DEPARTED and not found.large_pieces
    worst = [item for item in found.branches if item.total_mm2 > 0.0][:MOST_BRANCHES]
    return [
        Verdict(
            "as-drawn",
            Outcome.PASS if passed else Outcome.WATCH,
            _words(found),
            value=found.share,
            unit="ratio",
            limit=MOST_DEPARTED,
            limit_is="most",
            source=f"plan area, bore along the centreline; {COMMON_PRACTICE}",
            branch_ids=tuple(item.id for item in worst),
            sheet_mm=worst[0].sheet_mm if worst else None,
            hint="" if passed else _hint(found),
        )
    ]
