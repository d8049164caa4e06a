"""A web traced on a strip of a repeating sheet, folded onto one turn of it.

The strip holds every channel of the turn and repeats beyond it on both sides. It is cut along two lines one
turn apart, chosen where they are clear of junctions and ends and cross channels steeply; what lies between
is kept, and each run cut on the right line goes on where its copy was cut on the left one. No sample is
added or moved: a run across the cut is an ordinary run whose samples go on past the turn.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import GeometryError
from morph.layout.web import Joint, Run, Web, moved_along

N_LINES = 81
MATCH_SHARE = 0.5
"""Both copies of a channel cross the two lines at the same height, within this share of its half-width."""
LEAST_STEEPNESS = 0.35
"""Least cosine between a channel and the x axis where a line may cut it (70 degrees)."""


@dataclass(frozen=True, slots=True)
class _Cut:
    """Where a run crosses a line: the run, the index of the sample before, height, half-width, steepness."""

    run: int
    before: int
    y_mm: float
    half_mm: float
    steepness: float


@dataclass(frozen=True, slots=True, eq=False)
class _Piece:
    """A stretch of a run between the lines; `ends`: a joint key, or ("left" | "right", rank along the line)."""

    place_mm: Floats
    half_mm: Floats
    free: np.ndarray
    ends: tuple[int | tuple[str, int], int | tuple[str, int]]

    def walked_from(self, end: int) -> tuple[Floats, Floats, np.ndarray, int | tuple[str, int]]:
        """Returns samples, half-widths, free flags and the far end, walked from end 0 or 1."""
        step = 1 if end == 0 else -1
        return self.place_mm[::step], self.half_mm[::step], self.free[::step], self.ends[1 - end]


def fold(web: Web, turn_mm: float, first_mm: float, last_mm: float) -> Web:
    """Returns one turn of `web`: each joint and run once, runs across the cut in one piece.

    Args:
        web: centred, on a strip that reaches further than the turn on both sides.
        turn_mm: width after which the sheet repeats.
        first_mm: where along the strip the left line may lie, at the least.
        last_mm: and at the most.

    Raises:
        GeometryError: `seam-not-traced` when no line meets the same channels as its copy a turn further.
    """
    line_mm = _choose_line(web, turn_mm, first_mm, last_mm)
    lines = {"left": line_mm, "right": line_mm + turn_mm}
    cuts = {side: _cuts(web, x) for side, x in lines.items()}
    pieces = _make_pieces(web, lines, cuts)
    return _joined(web, pieces, lines, turn_mm)


def normalise(web: Web, turn_mm: float, shift_mm: float) -> None:
    """Moves the whole web by `shift_mm` along x, and every joint by whole turns to 0 <= x < `turn_mm`."""
    turns: dict[int, float] = {}
    for key, joint in web.joints.items():
        moved = moved_along(joint.place_mm, shift_mm)
        turns[key] = turn_mm * float(np.floor(moved[0] / turn_mm))
        joint.place_mm = moved_along(moved, -turns[key])
    for run in web.runs.values():
        run.place_mm = moved_along(run.place_mm, shift_mm - turns[run.start])
        run.shift_mm += turns[run.end] - turns[run.start]
        run.place_mm[0] = web.joints[run.start].place_mm
        run.place_mm[-1] = moved_along(web.joints[run.end].place_mm, run.shift_mm)


def _cuts(web: Web, x_mm: float) -> list[_Cut]:
    """Returns where runs cross the line x = `x_mm`, by height."""
    found = []
    for key in sorted(web.runs):
        place, half = web.runs[key].place_mm, web.runs[key].half_mm
        inside = place[:, 0] >= x_mm
        for before in np.flatnonzero(inside[1:] != inside[:-1]).tolist():
            one, two = place[before], place[before + 1]
            share = (x_mm - one[0]) / (two[0] - one[0])
            low, high = max(0, before - 2), min(len(place) - 1, before + 3)
            way = place[high] - place[low]
            steepness = abs(float(way[0])) / max(float(np.hypot(*way)), 1e-12)
            y = float(one[1] + share * (two[1] - one[1]))
            found.append(_Cut(key, before, y, float(half[before]), steepness))
    return sorted(found, key=lambda cut: (cut.y_mm, cut.run, cut.before))


def _choose_line(web: Web, turn_mm: float, first_mm: float, last_mm: float) -> float:
    """Returns the line furthest from all joints, with its copy, among those that cut the same channels as the copy."""
    joint_x = np.array([joint.place_mm[0] for joint in web.joints.values()])
    best: tuple[float, float] | None = None
    for x in np.linspace(first_mm, last_mm, N_LINES):
        left, right = _cuts(web, float(x)), _cuts(web, float(x) + turn_mm)
        if len(left) != len(right) or any(cut.steepness < LEAST_STEEPNESS for cut in left + right):
            continue
        if any(abs(a.y_mm - b.y_mm) > MATCH_SHARE * a.half_mm for a, b in zip(left, right, strict=True)):
            continue
        clear = min(float(np.abs(joint_x - line).min(initial=np.inf)) for line in (x, x + turn_mm))
        if best is None or clear > best[0] + 1e-9:
            best = (clear, float(x))
    if best is None:
        raise GeometryError(
            "seam-not-traced",
            expected="the same channels on both sides of the joined seam",
            found=f"no line between {first_mm:.2f} mm and {last_mm:.2f} mm of the strip that cuts them alike",
            where='[layout] seam = "joined"',
            do="Make the image finer there, or turn it so that the seam lies where fewer channels cross.",
        )
    return best[1]


def _make_pieces(web: Web, lines: dict[str, float], cuts: dict[str, list[_Cut]]) -> list[_Piece]:
    """Returns the stretches of all runs that lie between the two lines."""
    rank = {(cut.run, cut.before, side): (side, number) for side, row in cuts.items() for number, cut in enumerate(row)}
    pieces = []
    for key in sorted(web.runs):
        run = web.runs[key]
        x: Floats = run.place_mm[:, 0]
        between = (x >= lines["left"]) & (x < lines["right"])
        step = np.diff(np.concatenate([[0], between.astype(np.int8), [0]]))
        free = np.ones(len(x), dtype=np.bool_) if run.free is None else run.free
        for first, last in zip(np.flatnonzero(step == 1).tolist(), np.flatnonzero(step == -1).tolist(), strict=True):
            ends: list[int | tuple[str, int]] = []
            for sample, before, joint in ((first, first - 1, run.start), (last, last - 1, run.end)):
                if sample in (0, len(x)):
                    ends.append(joint)
                else:
                    outer = x[before] if before < first else x[sample]
                    ends.append(rank[key, before, "left" if outer < lines["left"] else "right"])
            here = slice(first, last)
            pieces.append(_Piece(run.place_mm[here], run.half_mm[here], free[here], (ends[0], ends[1])))
    return pieces


def _joined(web: Web, pieces: list[_Piece], lines: dict[str, float], turn_mm: float) -> Web:
    """Returns the web of the turn: pieces walked from joint to joint, on through the cut."""
    folded, key_of = Web(), {}
    for key in sorted(web.joints):
        joint = web.joints[key]
        if lines["left"] <= joint.place_mm[0] < lines["right"]:
            key_of[key] = folded.add_joint(replace(joint))
    at_cut = {end: (n, side) for n, piece in enumerate(pieces) for side, end in enumerate(piece.ends) if _is_cut(end)}
    used: set[int] = set()
    for number, piece in enumerate(pieces):
        for side, end in enumerate(piece.ends):
            if number not in used and not isinstance(end, tuple):
                run, far = _walk(pieces, at_cut, number, side, turn_mm, used)
                run.start, run.end = key_of[end], key_of[far]
                folded.add_run(run)
    for number in range(len(pieces)):
        if number not in used:
            _add_ring(folded, pieces, at_cut, number, turn_mm, used)
    return folded


def _is_cut(end: int | tuple[str, int]) -> bool:
    return isinstance(end, tuple)


def _walk(
    pieces: list[_Piece],
    at_cut: dict[int | tuple[str, int], tuple[int, int]],
    number: int,
    side: int,
    turn_mm: float,
    used: set[int],
) -> tuple[Run, int]:
    """Returns the run from piece `number`, entered at its end `side`, to the next joint, and that joint.

    The joint is -1 when the way ends at a used piece (a ring).
    """
    places, halves, frees, shift_mm = [], [], [], 0.0
    while True:
        used.add(number)
        place, half, free, far = pieces[number].walked_from(side)
        places.append(moved_along(place, shift_mm))
        halves.append(half)
        frees.append(free)
        if not isinstance(far, tuple):
            break
        shift_mm += turn_mm if far[0] == "right" else -turn_mm
        number, side = at_cut["left" if far[0] == "right" else "right", far[1]]
        if number in used:
            far = -1
            break
    run = Run(-1, -1, np.concatenate(places), np.concatenate(halves), np.concatenate(frees), shift_mm)
    return run, far


def _add_ring(
    folded: Web,
    pieces: list[_Piece],
    at_cut: dict[int | tuple[str, int], tuple[int, int]],
    number: int,
    turn_mm: float,
    used: set[int],
) -> None:
    """Adds a channel that closes around the turn without a joint: one is put on its first sample."""
    run, _ = _walk(pieces, at_cut, number, 0, turn_mm, used)
    run.place_mm = np.vstack([run.place_mm, moved_along(run.place_mm[:1], run.shift_mm)])
    run.half_mm = np.append(run.half_mm, run.half_mm[0])
    run.free = np.append(run.free, run.free[0]) if run.free is not None else None
    run.start = run.end = folded.add_joint(Joint(run.place_mm[0].copy(), float(run.half_mm[0])))
    folded.add_run(run)
