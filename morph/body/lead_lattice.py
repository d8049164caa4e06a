"""Ways through the room of a lead, found by a best-first search over places and headings.

A state is a place with a heading. From each the way carries on by one step: straight, or bent by the
bend radius to any of eight sides, a whole step or half of one. Steps are equally long, so the states are
kept in buckets of way so far plus least way to go; the latter is the shortest way over the nodes of the
room grid to where the lead may come out. Of states in the same cell with nearly the same heading only
the first is kept. Every bend has the bend radius by construction; nothing is random.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from morph.body.lead_field import LeadField, RoomGrid
from morph.core.arrays import Bools, Floats, Ints, unit_rows

STEP_RAD = np.pi / 8.0
"""Turn of one whole step."""

SIDES = 8
"""Sides to which the way may bend."""

SIDE_CELLS = 4
"""Headings are told apart by the cell of a cube with this many cells along each edge."""

CELL_STEPS = 0.75
"""Edge of the cells in which states are told apart, in steps."""

BATCH = 3000
OPEN_STEPS, FORGIVEN_MM = 2, 0.4
"""Steps from a port that must be possible, and the spare forgiven over them."""

FREE_STEPS = 0.9
"""A node counts as free while its spare is above this many grid steps below 0: a place between nodes may be free."""

DOUBT_STEPS, SURE_MM = 0.6, 0.15
"""Between -0.6 grid steps and 0.15 mm the tabulated spare may be wrong: there it is measured."""

STRAIGHTER = 0.88
"""Ways over the 26 neighbours of grid nodes are up to 12 % too long."""


@dataclass(frozen=True, slots=True, eq=False)
class States:
    """States (n,) reached so far.

    Args:
        xyz_mm, heading: (n, 3). way_mm: (n,) from the port. parent: (n,), -1 at the start.
        corner_mm: (n, 3) corner of the bend that led here, nan after a straight step.
    """

    xyz_mm: Floats
    heading: Floats
    way_mm: Floats
    parent: Ints
    corner_mm: Floats

    def only(self, keep: Bools | Ints) -> States:
        """Returns the states `keep`."""
        return States(*(getattr(self, name)[keep] for name in States.__slots__))

    def corners(self, state: int) -> Floats:
        """Returns the corners (k, 3) of the bends from the start to `state`, in order."""
        found = []
        while state >= 0:
            if np.isfinite(self.corner_mm[state, 0]):
                found.append(self.corner_mm[state])
            state = int(self.parent[state])
        return np.array(found[::-1]).reshape(-1, 3)


def least_way_mm(grid: RoomGrid, out_mm: Floats) -> Floats:
    """Returns the least way (i, j, k) over free nodes from each node to the outside; inf where there is none.

    Args:
        grid: room of the lead.
        out_mm: (i, j, k) straight way out from a node, inf where there is none.
    """
    from scipy.sparse import coo_matrix
    from scipy.sparse.csgraph import dijkstra

    free = grid.whole() >= -FREE_STEPS * grid.step_mm
    goal = free & np.isfinite(out_mm)
    result = np.full(free.shape, np.inf)
    if not goal.any():
        return result
    n = int(free.sum())
    number = np.full(free.shape, -1, dtype=np.int64)
    number[free] = np.arange(n)
    # All ways out lead to one more node, the outside, from which the search starts.
    rows, columns, lengths = [number[goal]], [np.full(int(goal.sum()), n)], [out_mm[goal]]
    for offset in _half_neighbours():
        one, two = _shifted(number, offset)
        both = (one >= 0) & (two >= 0)
        rows.append(one[both])
        columns.append(two[both])
        lengths.append(np.full(int(both.sum()), grid.step_mm * float(np.linalg.norm(offset))))
    edges = coo_matrix((np.concatenate(lengths), (np.concatenate(rows), np.concatenate(columns))), shape=(n + 1, n + 1))
    result[free] = dijkstra(edges.tocsr(), directed=False, indices=np.array([n]))[0, :n]
    return result


def _half_neighbours() -> list[tuple[int, int, int]]:
    every = [(i, j, k) for i in (-1, 0, 1) for j in (-1, 0, 1) for k in (-1, 0, 1)]
    return [offset for offset in every if offset > (0, 0, 0)]


def _shifted(table: Ints, offset: tuple[int, int, int]) -> tuple[Ints, Ints]:
    """Returns `table` at nodes and at their neighbours by `offset`, over the nodes that have one."""
    here = tuple(slice(max(-o, 0), n - max(o, 0)) for o, n in zip(offset, table.shape, strict=True))
    there = tuple(slice(max(o, 0), n - max(-o, 0)) for o, n in zip(offset, table.shape, strict=True))
    return table[here].ravel(), table[there].ravel()


class Lattice:
    """The search from one start.

    Args:
        grid: room of the lead. least_way_mm: (i, j, k) least way to go.
        xyz_mm: (3,) start. headings: (n, 3) unit headings to start along. radius_mm: of every bend.
        start_mm: straight start before the first bend.
        most: states after which the search gives up.
    """

    def __init__(
        self,
        grid: RoomGrid,
        least_way_mm: Floats,
        xyz_mm: Floats,
        headings: Floats,
        radius_mm: float,
        start_mm: float,
        most: int,
    ) -> None:
        self._grid, self._to_go, self._radius, self._most = grid, least_way_mm, radius_mm, most
        self._whole = grid.whole()
        self.step_mm = STEP_RAD * radius_mm
        n = len(headings)
        nothing = np.full((n, 3), np.nan)
        start = xyz_mm + start_mm * headings
        self.states = States(start, headings, np.full(n, start_mm), np.full(n, -1), nothing)
        self._parts = [self.states]
        self._count = n
        size = np.array(grid.base.shape) * grid.step_mm / (CELL_STEPS * self.step_mm)
        self._cells = tuple(int(k) for k in np.ceil(size) + 2)
        self._seen = np.zeros(int(np.prod(self._cells)) * 6 * SIDE_CELLS**2, dtype=np.bool_)
        self._buckets: dict[int, list[Ints]] = {}
        self._put(self.states, np.arange(n))

    def batches(self) -> Iterator[Ints]:
        """Yields numbers of states, nearest to a way out first; `states` holds all of them by then."""
        while self._buckets:
            lowest = min(self._buckets)
            waiting = np.concatenate(self._buckets.pop(lowest))
            for low in range(0, len(waiting), BATCH):
                batch = waiting[low : low + BATCH]
                if len(self._parts) > 1:
                    self.states = _joined(self._parts)
                    self._parts = [self.states]
                yield batch
                self._expand(batch)
                if self._count >= self._most:
                    return

    def _put(self, states: States, numbers: Ints) -> None:
        """Puts new states in their buckets; those without a way to go are dropped."""
        cell = self._grid.cell(states.xyz_mm)
        to_go = self._to_go[cell[:, 0], cell[:, 1], cell[:, 2]]
        keep = np.flatnonzero(np.isfinite(to_go))
        level = np.floor((states.way_mm[keep] + STRAIGHTER * to_go[keep]) / self.step_mm).astype(np.int64)
        for value in np.unique(level):
            self._buckets.setdefault(int(value), []).append(numbers[keep[level == value]])

    def _expand(self, batch: Ints) -> None:
        middle, after = _moves(self.states, batch, self._radius)
        tables = [self._grid.look_up(self._whole, points) for points in (middle, after.xyz_mm)]
        fits = np.minimum(*tables) >= -DOUBT_STEPS * self._grid.step_mm
        middle, after, tables = middle[fits], after.only(fits), [table[fits] for table in tables]
        key = self._key(after)
        _, first = np.unique(key, return_index=True)
        first = np.sort(first[~self._seen[key[first]]])
        middle, after, tables, key = middle[first], after.only(first), [table[first] for table in tables], key[first]
        keep = np.ones(len(key), dtype=np.bool_)
        for points, table in zip((middle, after.xyz_mm), tables, strict=True):
            doubt = np.flatnonzero(keep & (table < SURE_MM))
            keep[doubt] = self._grid.field.rows(points[doubt])[0].min(axis=0) >= 0.0 if len(doubt) else True
            here = np.flatnonzero(keep)
            keep[here] = self._grid.field.near_spare(points[here], after.way_mm[here]) >= 0.0
        after = after.only(keep)
        self._seen[key[keep]] = True
        self._put(after, np.arange(self._count, self._count + len(after.way_mm)))
        self._count += len(after.way_mm)
        self._parts.append(after)

    def _key(self, states: States) -> Ints:
        """Returns the number (k,) of the cell and heading of each state."""
        step = CELL_STEPS * self.step_mm
        cell = np.rint((states.xyz_mm - self._grid.origin_mm) / step).astype(np.int64)
        cell = np.clip(cell, 0, np.array(self._cells) - 1)
        number = np.ravel_multi_index(tuple(cell.T), self._cells)
        return np.asarray(number * (6 * SIDE_CELLS**2) + _heading_cell(states.heading), dtype=np.int64)


def _joined(parts: list[States]) -> States:
    return States(*(np.concatenate([getattr(one, name) for one in parts]) for name in States.__slots__))


def _sides(heading: Floats) -> list[Floats]:
    """Returns unit vectors (k, 3) square to the headings (k, 3), one array for each of the sides."""
    least = np.eye(3)[np.abs(heading).argmin(axis=1)]
    first = unit_rows(np.cross(heading, least))
    second = np.cross(heading, first)
    turns = 2.0 * np.pi * np.arange(SIDES) / SIDES
    return [np.cos(turn) * first + np.sin(turn) * second for turn in turns]


def _heading_cell(heading: Floats) -> Ints:
    """Returns the cell (k,) of a cube's surface that each heading (k, 3) points to."""
    axis = np.abs(heading).argmax(axis=1)
    rows = np.arange(len(heading))
    along = heading[rows, axis]
    cells = []
    for turn in (1, 2):
        place = 0.5 + 0.5 * heading[rows, (axis + turn) % 3] / np.abs(along)
        cells.append(np.minimum((place * SIDE_CELLS).astype(np.int64), SIDE_CELLS - 1))
    side = 2 * axis + (along > 0.0)
    return np.asarray((side * SIDE_CELLS + cells[0]) * SIDE_CELLS + cells[1], dtype=np.int64)


def _moves(states: States, batch: Ints, radius_mm: float) -> tuple[Floats, States]:
    """Returns the middle points (m, 3) of all moves from the states of `batch`, and the states they lead to."""
    place, heading = states.xyz_mm[batch], states.heading[batch]
    step = STEP_RAD * radius_mm
    middles, places, headings = [place + 0.5 * step * heading], [place + step * heading], [heading]
    corners = [np.full_like(place, np.nan)]
    for turn in (STEP_RAD, 0.5 * STEP_RAD):
        for side in _sides(heading):
            ahead = np.cos(turn) * heading + np.sin(turn) * side
            end = place + radius_mm * (np.sin(turn) * heading + (1.0 - np.cos(turn)) * side)
            at = 0.5 * turn
            middle = place + radius_mm * (np.sin(at) * heading + (1.0 - np.cos(at)) * side)
            straight = step - radius_mm * turn
            middles.append(middle if straight < 1e-9 else end)
            places.append(end + straight * ahead)
            headings.append(ahead)
            corners.append(place + radius_mm * np.tan(at) * heading)
    n = len(places)
    way = np.tile(states.way_mm[batch] + step, n)
    after = States(np.concatenate(places), np.concatenate(headings), way, np.tile(batch, n), np.concatenate(corners))
    return np.concatenate(middles), after


def opens(field: LeadField, place: Floats, heading: Floats, radius_mm: float) -> bool:
    """Returns whether any way of OPEN_STEPS steps from the starts (n, 3) along headings (n, 3) keeps clear.

    Port faces do not count, and a little is forgiven: this only tells starts that are hopeless.
    """
    n = len(place)
    states = States(place.copy(), heading, np.zeros(n), np.full(n, -1), np.full((n, 3), np.nan))
    for _ in range(OPEN_STEPS):
        middle, after = _moves(states, np.arange(len(states.way_mm)), radius_mm)
        clear = [field.inner_spare(points, after.way_mm) >= -FORGIVEN_MM for points in (middle, after.xyz_mm)]
        states = after.only(clear[0] & clear[1])
        if not len(states.way_mm):
            return False
    return True
