"""The channel graph: nodes and branches on the sheet, the record the layout stage hands on.

Coordinates are sheet mm as the drawing reads (x right, y up, origin lower left); the carrier knows
from which side that is. Every branch
is a cubic B-spline with its bore along it; its ends coincide with its nodes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.core.pieces import Pieces
from morph.core.tolerance import COINCIDE_MM
from morph.core.verdict import Notice
from morph.geometry.curve import Curve


class NodeKind(StrEnum):
    """What a node of the graph is; ``exit`` nodes appear only once leads exist."""

    JUNCTION = "junction"
    PORT = "port"
    EXIT = "exit"
    DEAD_END = "dead-end"


@dataclass(frozen=True, slots=True, eq=False)
class Node:
    """A node on the sheet: id ("N1" ...), kind, name of its port or None, place (2,) in mm."""

    id: str
    kind: NodeKind
    port: str | None
    sheet_mm: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "sheet_mm", frozen_floats("sheet_mm", self.sheet_mm, (2,)))


@dataclass(frozen=True, slots=True, eq=False)
class Branch:
    """A channel between two nodes.

    Args:
        id: "B1" ..., numbered by (y, x) of the branch's midpoint.
        start: id of the node at the first sample. end: id of the node at the last sample.
        curve: the fitted centreline, d = 2.
        parameter: (k,) increasing curve parameters of the samples, ends included; neighbouring
            samples are at most min(bore / 4, 1 mm) apart.
        sheet_mm: (k, 2) the curve at `parameter`.
        bore_mm: (k,) local channel width of the layout, before any scale, clamp or cap.
        length_mm: arc length by quadrature.
        deviation_mm: largest distance of the fitted curve from the measured centreline,
            taken away from the junction discs.
    """

    id: str
    start: str
    end: str
    curve: Curve
    parameter: Floats
    sheet_mm: Floats
    bore_mm: Floats
    length_mm: float
    deviation_mm: float

    def __post_init__(self) -> None:
        points = frozen_floats("sheet_mm", self.sheet_mm, (None, 2))
        object.__setattr__(self, "sheet_mm", points)
        object.__setattr__(self, "parameter", frozen_floats("parameter", self.parameter, (len(points),)))
        object.__setattr__(self, "bore_mm", frozen_floats("bore_mm", self.bore_mm, (len(points),)))
        if len(points) < 2 or self.bore_mm.min() <= 0.0:
            raise ValueError(f"branch {self.id}: expected two or more samples with positive bores")


class DropReason(StrEnum):
    """Why a piece of the image is not in the graph."""

    ISLAND = "island"
    PINHOLE = "pinhole"
    SPUR = "spur"
    NO_PORT = "piece without a port"
    TRIMMED = "dead end trimmed as accepted"


@dataclass(frozen=True, slots=True)
class Dropped:
    """A piece of the image that was dropped: why, where (sheet mm) and how large (mm^2; a spur: its length x width)."""

    reason: DropReason
    sheet_mm: tuple[float, float]
    area_mm2: float


@dataclass(frozen=True, slots=True, eq=False)
class Bridge:
    """A suggested way on from a dead end through grey density; never built by itself.

    Args:
        id: "G1" ..., numbered by (y, x) of its middle.
        node: the dead end it starts from. onto: branch or node id it would meet.
        path_mm: (k, 2) way on the sheet. gap_mm: its length.
        lowest_density: the lowest density on the way. likely: it looks like a blocked channel.
        width_mm: how wide the grey way is where it stands halfway between background and its own ridge.
        grey: the way stands clear of the background all along.
        grey_mm: length of its stretch at or below the level. middle_mm: middle of that stretch.
    """

    id: str
    node: str
    onto: str
    path_mm: Floats
    gap_mm: float
    lowest_density: float
    likely: bool
    width_mm: float = math.inf
    grey: bool = False
    grey_mm: float = 0.0
    middle_mm: tuple[float, float] = (0.0, 0.0)

    def __post_init__(self) -> None:
        object.__setattr__(self, "path_mm", frozen_floats("path_mm", self.path_mm, (None, 2)))


class Ahead(StrEnum):
    """What lies ahead of a dead end."""

    GREY = "grey"
    SOLID = "solid"
    FRAME = "frame"


@dataclass(frozen=True, slots=True)
class DeadEnd:
    """An end branch that ends blind, and what lies ahead of it.

    Args:
        id: "D1" ..., numbered by (y, x). node: its node. branch: the branch that ends there.
        sheet_mm: where its coolant ends, on its line. length_mm: of the branch. bore_mm: its bore at the end.
        ahead: grey (a way to another channel, or a cloud without one within reach), solid metal, or the frame.
        bridge: id of the suggestion that leads on, or None when no channel lies within reach ahead.
        onto: node or branch that way meets. gap_mm: length of its grey stretch.
        lowest_density: on that stretch; without a way, on the first bore beyond the end.
    """

    id: str
    node: str
    branch: str
    sheet_mm: tuple[float, float]
    length_mm: float
    bore_mm: float
    ahead: Ahead
    bridge: str | None = None
    onto: str | None = None
    gap_mm: float | None = None
    lowest_density: float | None = None


@dataclass(frozen=True, slots=True)
class Accepted:
    """A suggestion that was carried out: its id, "bridge" or "trim", place, length and mean bore of what it changed."""

    id: str
    what: str
    sheet_mm: tuple[float, float]
    length_mm: float
    bore_mm: float


@dataclass(frozen=True, slots=True)
class LevelCount:
    """Pieces (8-connected coolant) and holes of the image at one level."""

    level: float
    pieces: int
    holes: int


@dataclass(frozen=True, slots=True, eq=False)
class ChannelGraph:
    """What the layout stage found.

    Args:
        size_mm: width and height of the sheet (doubled when mirrored).
        level: the density level used. area_ratio: coolant area over sheet area at that level.
        nodes, branches: sorted by id number.
        dropped: pieces that were removed and why. bridges: suggestions.
        levels: pieces and holes at level - 0.1, level, level + 0.1.
        notices: degraded or surprising paths.
        loose_nodes, loose_branches: pieces without a port (each also in `dropped`); not built, kept
            because a suggested bridge may join them.
        turn_mm: on a joined seam the width after which sheet x repeats: nodes lie within it, and a branch
            across the seam runs on past it, or below 0, so that it stays one curve. None: an open sheet.
        dead_ends: every dead end, those of loose pieces included, by id number.
        accepted: the suggestions that were carried out.
    """

    size_mm: tuple[float, float]
    level: float
    area_ratio: float
    nodes: tuple[Node, ...]
    branches: tuple[Branch, ...]
    dropped: tuple[Dropped, ...] = ()
    bridges: tuple[Bridge, ...] = ()
    levels: tuple[LevelCount, ...] = ()
    notices: tuple[Notice, ...] = ()
    loose_nodes: tuple[Node, ...] = ()
    loose_branches: tuple[Branch, ...] = ()
    turn_mm: float | None = None
    dead_ends: tuple[DeadEnd, ...] = ()
    accepted: tuple[Accepted, ...] = ()

    def __post_init__(self) -> None:
        place = {node.id: node.sheet_mm for node in self.nodes + self.loose_nodes}
        for branch in self.branches + self.loose_branches:
            for node_id, point in ((branch.start, branch.sheet_mm[0]), (branch.end, branch.sheet_mm[-1])):
                away = place[node_id] - point
                if self.turn_mm is not None:
                    away = away - np.array([self.turn_mm * np.round(away[0] / self.turn_mm), 0.0])
                if np.abs(away).max() > COINCIDE_MM:
                    raise ValueError(f"branch {branch.id} does not end on node {node_id}")


def count_loops(n_nodes: int, ends: list[tuple[int, int]]) -> tuple[int, int]:
    """Returns pieces and loops (first Betti number) of a graph of `n_nodes` nodes with branches `ends`.

    >>> count_loops(2, [(0, 1), (0, 1)])
    (1, 1)
    """
    joined = Pieces(n_nodes)
    for a, b in ends:
        joined.join(a, b)
    pieces = len({joined.root(i) for i in range(n_nodes)})
    return pieces, len(ends) - n_nodes + pieces
