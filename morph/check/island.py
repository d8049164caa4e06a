"""Islands: the metal inside small loops of channel, judged at its widest place like a wall between channels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.island import list_islands
from morph.body.neighbour import Network
from morph.check.centreline import Centrelines, Place
from morph.check.rows import Limit, judge_length, name_list, place
from morph.core.tolerance import BUILD_MM
from morph.core.verdict import Outcome, Verdict


@dataclass(frozen=True, slots=True)
class IslandFinding:
    """The branches around an island, in order, how wide it is at its widest place (negative: filled), and where."""

    branch_ids: tuple[str, ...]
    width_mm: float
    xyz_mm: Place
    sheet_mm: tuple[float, float] | None


def find_islands(network: Network, lines: Centrelines, limit_mm: float, band_mm: float) -> list[IslandFinding]:
    """Returns the islands of all small loops, thinnest first.

    Args:
        network: the centrelines as body/neighbour.py sees them.
        lines: the centrelines.
        limit_mm: the wall between channels to hold.
        band_mm: its band.
    """
    found = []
    for island in list_islands(network, limit_mm + band_mm + BUILD_MM):
        ids = tuple(network.strands[k].id for k in island.strands)
        nearest = int(np.argmin(((lines.xyz_mm - island.centre_mm) ** 2).sum(axis=1)))
        found.append(IslandFinding(ids, island.width_mm, place(island.centre_mm), lines.sheet_of(nearest)))
    return sorted(found, key=lambda item: (item.width_mm, item.branch_ids))


def island_row(item: IslandFinding, n_thin: int, limit: Limit, band_mm: float) -> Verdict:
    """Returns the `island` row of one island; `n_thin` islands are too thin in all."""
    outcome = judge_length(item.width_mm, limit.value, band_mm)
    how = f"is at most {item.width_mm:.2f} mm wide"
    if item.width_mm <= 0.0:
        how = f"is filled: the channels around it overlap by {-item.width_mm:.2f} mm"
    others = f" {n_thin} islands are too thin." if n_thin > 1 else ""
    return Verdict(
        "island",
        outcome,
        f"The island inside the loop of {name_list(item.branch_ids)} {how}; it must hold {limit.words} after a band of "
        f"{band_mm:.2f} mm.{others}",
        value=item.width_mm,
        unit="mm",
        limit=limit.value,
        band=band_mm,
        source=limit.source,
        branch_ids=item.branch_ids,
        sheet_mm=item.sheet_mm,
        xyz_mm=item.xyz_mm,
        hint="" if outcome is Outcome.PASS else "Draw the loop larger or close it, or lower the bores there.",
    )
