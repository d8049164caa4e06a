"""Dead ends by name: where each ends, how long and wide its branch is, and what lies ahead of it."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np

from morph.core.arrays import Floats
from morph.layout.bridges import ABOVE_BACKGROUND
from morph.layout.graph import Ahead, Branch, Bridge, DeadEnd, Node
from morph.layout.level import Grid
from morph.layout.web import Web, arc_mm

Place = tuple[float, float]
HEADING_HALVES = 1.5
"""The direction of a blind end is taken over this many half-widths."""
REACH_HALVES = 4.0
"""Its end wall is looked for this many half-widths ahead."""
STEP_PIXELS = 0.125


@dataclass(frozen=True, slots=True)
class Known:
    """What is known of a dead end before the record is made.

    Args:
        end_mm: where its coolant ends.
        id: its id if it has one.
        lowest_density: on the first bore of its line beyond that; grey: it stands clear of the background.
    """

    end_mm: Place
    id: str = ""
    lowest_density: float | None = None
    grey: bool = False


def known_of(end: DeadEnd) -> Known:
    """Returns what a record's dead end says, for a record made anew."""
    return Known(end.sheet_mm, end.id, end.lowest_density, end.ahead is Ahead.GREY)


def find_end_walls(web: Web, field: Floats, grid: Grid, level: float, turn_mm: float | None = None) -> dict[int, Known]:
    """Returns, by joint, where the coolant of each dead end ends: the first place ahead at the level, on its line.

    Args:
        web: finished, ports attached.
        field: (rows, columns) density the walls come from; on a repeating sheet, of one turn.
        grid: places of its samples.
        level: where coolant ends.
        turn_mm: width after which the sheet repeats.
    """
    from scipy.ndimage import map_coordinates

    if turn_mm is not None:
        field = np.pad(field, ((0, 0), (1, 1)), mode="wrap")
        grid = Grid((grid.first_mm[0] - grid.pitch_mm[0], grid.first_mm[1]), grid.pitch_mm)
    found = {}
    for key in sorted(web.joints):
        joint = web.joints[key]
        if web.degree(key) != 1 or joint.port is not None:
            continue
        run = web.runs[web.at[key][0]]
        run = run if run.start == key else run.reversed()
        half_mm, arc = float(np.median(run.half_mm)), arc_mm(run.place_mm)
        inner = run.place_mm[min(max(1, int(np.searchsorted(arc, HEADING_HALVES * half_mm))), len(arc) - 1)]
        outward = (run.place_mm[0] - inner) / max(float(np.hypot(*(run.place_mm[0] - inner))), 1e-12)
        ahead = np.arange(0.0, REACH_HALVES * half_mm, STEP_PIXELS * grid.pixel_mm)
        place = run.place_mm[0] + ahead[:, None] * outward
        if turn_mm is not None:
            place = np.column_stack([place[:, 0] % turn_mm, place[:, 1]])
        value = map_coordinates(field, grid.row_column(place).T, order=1, mode="nearest")
        below = np.flatnonzero(value <= level)
        last = int(below[0]) if len(below) and joint.mouth < 0 else 0
        share = 0.0 if last == 0 else (value[last - 1] - level) / (value[last - 1] - value[last])
        end = run.place_mm[0] + (max(0, last - 1) + share) * float(ahead[1]) * outward
        beyond = value[last : last + max(1, round(2.0 * half_mm / float(ahead[1])))]
        lowest = float(beyond.min()) if joint.mouth < 0 else None
        grey = lowest is not None and lowest - _background(field) > ABOVE_BACKGROUND
        found[key] = Known((float(end[0]), float(end[1])), "", lowest, grey)
    return found


def _background(field: Floats) -> float:
    """Returns the density that a fifth of the field lies below, from at most a million of its samples."""
    step = max(1, round((field.size / 1e6) ** 0.5))
    return float(np.quantile(field[::step, ::step], 0.2))


def name_dead_ends(
    web: Web,
    nodes: dict[str, Node],
    branches: dict[str, Branch],
    joint_id: dict[int, str],
    run_id: dict[int, str],
    bridges: tuple[Bridge, ...],
    known: dict[int, Known],
) -> tuple[DeadEnd, ...]:
    """Returns every dead end of `web`, numbered by (y, x) rounded to 0.1 mm unless it has an id in `known`.

    Args:
        web: the finished web.
        nodes: by id.
        branches: by id.
        joint_id: node ids by joint.
        run_id: branch ids by run.
        bridges: the suggestions; one that meets another dead end lies ahead of both.
        known: by joint.
    """
    way = {bridge.onto: bridge for bridge in reversed(bridges)} | {bridge.node: bridge for bridge in bridges}
    tips = [key for key in sorted(web.joints) if web.degree(key) == 1 and web.joints[key].port is None]
    taken = {item.id for item in known.values()}
    free = (name for number in itertools.count(1) if (name := f"D{number}") not in taken)

    def rank(key: int) -> tuple[float, ...]:
        x, y = (float(value) for value in web.joints[key].place_mm)
        return round(y, 1) + 0.0, round(x, 1) + 0.0, y, x

    found = []
    for key in sorted(tips, key=rank):
        node, branch = nodes[joint_id[key]], branches[run_id[web.at[key][0]]]
        here = known.get(key) or Known((float(node.sheet_mm[0]), float(node.sheet_mm[1])))
        here = replace(here, id=here.id or next(free))
        found.append(_dead_end(here, node, branch, way.get(node.id), web.joints[key].mouth))
    return tuple(sorted(found, key=lambda end: int(end.id[1:])))


def _dead_end(known: Known, node: Node, branch: Branch, bridge: Bridge | None, mouth: int) -> DeadEnd:
    at = 0 if branch.start == node.id else -1
    grey = known.grey if bridge is None else bridge.grey
    ahead = Ahead.FRAME if mouth >= 0 else Ahead.GREY if grey else Ahead.SOLID
    figures = (known.id, node.id, branch.id, known.end_mm, branch.length_mm, float(branch.bore_mm[at]), ahead)
    if bridge is None:
        return DeadEnd(*figures, lowest_density=known.lowest_density)
    onto = bridge.onto if bridge.node == node.id else bridge.node
    return DeadEnd(*figures, bridge.id, onto, bridge.grey_mm, bridge.lowest_density)
