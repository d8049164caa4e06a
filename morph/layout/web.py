"""The working graph while a layout is being cleaned: joints, and runs of samples between them.

Unlike the ChannelGraph it may be changed; it never leaves the layout package. All places are sheet mm.
"""

from __future__ import annotations

import heapq
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from morph.core.arrays import Bools, Floats


@dataclass(slots=True)
class Joint:
    """A node in the making: place, largest half-width there, mouth it leaves by (or -1), port name, protection."""

    place_mm: Floats
    radius_mm: float
    mouth: int = -1
    port: str | None = None
    keep: bool = False


@dataclass(slots=True)
class Run:
    """A branch in the making, from joint `start` to joint `end`.

    Args:
        start, end: joint keys.
        place_mm: (k, 2) samples, ends on the joints.
        half_mm: (k,) half-width at the samples.
        free: (k,) both walls at the sample are the channel's own; None before centring.
        shift_mm: on a sheet whose left and right edge are one line, how far along x the last sample lies
            from joint `end`: whole widths of the sheet.
    """

    start: int
    end: int
    place_mm: Floats
    half_mm: Floats
    free: Bools | None = None
    shift_mm: float = 0.0
    length_mm: float = 0.0

    def __post_init__(self) -> None:
        self.length_mm = measure_length_mm(self.place_mm)

    def reversed(self) -> Run:
        """Returns the same run walked from its end."""
        free = None if self.free is None else self.free[::-1]
        place = moved_along(self.place_mm[::-1], -self.shift_mm)
        return Run(self.end, self.start, place, self.half_mm[::-1], free, -self.shift_mm)


def moved_along(place_mm: Floats, shift_mm: float) -> Floats:
    """Returns the places (k, 2), or one (2,), moved by `shift_mm` along x."""
    return place_mm + np.array([shift_mm, 0.0]) if shift_mm else place_mm


def measure_length_mm(place_mm: Floats) -> float:
    """Returns the length of the polyline `place_mm (k, 2)`."""
    return float(np.hypot(*np.diff(place_mm, axis=0).T).sum())


def line_through(place_mm: Floats) -> tuple[Floats, Floats]:
    """Returns the middle of `place_mm (k, 2)` and the unit direction of the line nearest to them (principal axis)."""
    middle = place_mm.mean(axis=0)
    (xx, xy), (_, yy) = (place_mm - middle).T @ (place_mm - middle)
    angle = 0.5 * float(np.arctan2(2.0 * xy, xx - yy))
    return middle, np.array([np.cos(angle), np.sin(angle)])


def arc_mm(place_mm: Floats) -> Floats:
    """Returns (k,) lengths along the polyline `place_mm (k, 2)` from its first point."""
    return np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(place_mm, axis=0).T))])


@dataclass(slots=True)
class Web:
    """Joints and runs by key; `at` lists the runs at each joint, a closed run twice."""

    joints: dict[int, Joint] = field(default_factory=dict)
    runs: dict[int, Run] = field(default_factory=dict)
    at: dict[int, list[int]] = field(default_factory=dict)
    next_key: int = 0

    def new_key(self) -> int:
        """Returns a key never used before."""
        self.next_key += 1
        return self.next_key - 1

    def add_joint(self, joint: Joint) -> int:
        """Adds `joint` and returns its key."""
        key = self.new_key()
        self.joints[key] = joint
        self.at[key] = []
        return key

    def add_run(self, run: Run) -> int:
        """Adds `run`, its end samples moved onto its joints, and returns its key."""
        key = self.new_key()
        run.place_mm = run.place_mm.copy()
        run.place_mm[0] = self.joints[run.start].place_mm
        run.place_mm[-1] = moved_along(self.joints[run.end].place_mm, run.shift_mm)
        run.length_mm = measure_length_mm(run.place_mm)
        self.runs[key] = run
        self.at[run.start].append(key)
        self.at[run.end].append(key)
        return key

    def remove_run(self, key: int) -> Run:
        """Removes and returns the run `key`."""
        run = self.runs.pop(key)
        self.at[run.start].remove(key)
        self.at[run.end].remove(key)
        return run

    def remove_joint(self, key: int) -> None:
        """Removes the joint `key`, which no run may touch."""
        del self.joints[key]
        del self.at[key]

    def degree(self, joint: int) -> int:
        """Returns how many run ends meet in `joint`."""
        return len(self.at[joint])

    def leaving(self, joint: int) -> Iterator[tuple[int, Run]]:
        """Yields (key, run walked away from `joint`) for each run end there; a closed run in both directions."""
        seen: set[int] = set()
        for key in self.at[joint]:
            run = self.runs[key]
            if run.start == joint and key not in seen:
                yield key, run
            else:
                yield key, run.reversed()
            seen.add(key)

    def pieces(self) -> dict[int, int]:
        """Returns the lowest joint key of each joint's connected piece."""
        piece: dict[int, int] = {}
        for first in sorted(self.joints):
            if first in piece:
                continue
            waiting = [first]
            piece[first] = first
            while waiting:
                joint = waiting.pop()
                for key in self.at[joint]:
                    run = self.runs[key]
                    for other in (run.start, run.end):
                        if other not in piece:
                            piece[other] = first
                            waiting.append(other)
        return piece

    def betti(self) -> tuple[int, int]:
        """Returns the numbers of pieces and of loops."""
        n_pieces = len(set(self.pieces().values()))
        return n_pieces, len(self.runs) - len(self.joints) + n_pieces


def join_through(web: Web, joint: int) -> int | None:
    """Makes one run of the two that meet in `joint`, unless it is kept or they are one closed run.

    Returns:
        The key of the joined run, or None when nothing was done.
    """
    here = web.joints[joint]
    if web.degree(joint) != 2 or here.keep or here.port is not None or here.mouth >= 0:
        return None
    (key_a, run_a), (key_b, run_b) = web.leaving(joint)
    if key_a == key_b:
        return None
    free = None
    if run_a.free is not None and run_b.free is not None:
        free = np.concatenate([run_a.free[::-1], run_b.free[1:]])
    joined = Run(
        run_a.end,
        run_b.end,
        moved_along(np.concatenate([run_a.place_mm[::-1], run_b.place_mm[1:]]), -run_a.shift_mm),
        np.concatenate([run_a.half_mm[::-1], run_b.half_mm[1:]]),
        free,
        run_b.shift_mm - run_a.shift_mm,
    )
    web.remove_run(key_a)
    web.remove_run(key_b)
    web.remove_joint(joint)
    return web.add_run(joined)


def join_all(web: Web) -> None:
    """Joins runs through every joint where just two meet."""
    for joint in sorted(web.joints):
        join_through(web, joint)


def prune(web: Web, pixel_mm: float, ratio: float = 1.5, least_px: float = 2.0) -> list[tuple[Floats, float, float]]:
    """Removes end branches shorter than `ratio` half-widths of their junction plus `least_px` pixels, shortest first.

    The length is counted to the end wall (the half-width at the tip is added), because thinning
    stops about that far from it.

    Returns:
        Place (2,), length in mm and width in mm of each spur removed.
    """
    removed = []
    heap: list[tuple[float, int, int]] = []

    def consider(tip: int) -> None:
        joint = web.joints.get(tip)
        if joint is None or web.degree(tip) != 1 or joint.keep or joint.port is not None or joint.mouth >= 0:
            return
        key = web.at[tip][0]
        run = web.runs[key]
        root = run.end if run.start == tip else run.start
        if web.degree(root) < 3:
            return
        limit_mm = ratio * web.joints[root].radius_mm + least_px * pixel_mm
        score = (run.length_mm + min(joint.radius_mm, web.joints[root].radius_mm)) / limit_mm
        if score < 1.0:
            heapq.heappush(heap, (score, tip, key))

    for tip in sorted(web.joints):
        consider(tip)
    while heap:
        _, tip, key = heapq.heappop(heap)
        if key not in web.runs or tip not in web.joints or web.at[tip] != [key]:
            continue
        run = web.runs[key]
        root = run.end if run.start == tip else run.start
        if web.degree(root) < 3:
            continue
        web.remove_run(key)
        removed.append((web.joints[tip].place_mm, run.length_mm, 2.0 * float(run.half_mm.mean())))
        web.remove_joint(tip)
        if web.degree(root) == 2:
            joined = join_through(web, root)
            if joined is not None:
                consider(web.runs[joined].start)
                consider(web.runs[joined].end)
    return removed


def merge_near(web: Web, ratio: float = 1.0) -> int:
    """Makes one junction of every two that lie closer along a run than `ratio` half-widths, nearest first.

    Runs that are one of several between the same two junctions enclose metal and stay.

    Returns:
        How many runs were taken up.
    """
    heap: list[tuple[float, int]] = []

    def consider(key: int) -> None:
        run = web.runs[key]
        if run.start == run.end or web.degree(run.start) < 3 or web.degree(run.end) < 3:
            return
        score = run.length_mm / (ratio * max(web.joints[run.start].radius_mm, web.joints[run.end].radius_mm))
        if score < 1.0 and not is_parallel(web, run):
            heapq.heappush(heap, (score, key))

    for key in sorted(web.runs):
        consider(key)
    n_merged = 0
    while heap:
        _, key = heapq.heappop(heap)
        if key not in web.runs:
            continue
        joint = web.runs[key].start
        merge_along(web, key)  # the runs at the merged joint get new keys, so what is said of old ones is void
        n_merged += 1
        for other in sorted(set(web.at[joint])):
            consider(other)
    return n_merged


def is_parallel(web: Web, run: Run) -> bool:
    """Returns whether another run joins the same two joints."""
    ends = {run.start, run.end}
    return sum({web.runs[key].start, web.runs[key].end} == ends for key in web.at[run.start]) > 1


def merge_along(web: Web, key: int) -> None:
    """Takes up the run `key`: its two joints become one, halfway between them."""
    run = web.remove_run(key)
    first, second = run.start, run.end
    kept, gone = web.joints[first], web.joints[second]
    kept.place_mm = 0.5 * (kept.place_mm + gone.place_mm)
    kept.radius_mm = max(kept.radius_mm, gone.radius_mm)
    kept.keep, kept.port = kept.keep or gone.keep, kept.port or gone.port
    for other in sorted(set(web.at[second])):
        moved = web.remove_run(other)
        start = first if moved.start == second else moved.start
        end = first if moved.end == second else moved.end
        place, half = moved.place_mm, moved.half_mm
        if moved.start == second:
            place, half = np.vstack([place[:1], place]), np.concatenate([half[:1], half])
        if moved.end == second:
            place, half = np.vstack([place, place[-1:]]), np.concatenate([half, half[-1:]])
        free = moved.free
        if free is not None:
            head, tail = [False] * (moved.start == second), [False] * (moved.end == second)
            free = np.concatenate([head, free, tail]).astype(np.bool_)
        web.add_run(Run(start, end, place, half, free))
    web.remove_joint(second)
    for other in sorted(set(web.at[first])):
        web.add_run(web.remove_run(other))
