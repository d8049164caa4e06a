"""What the layout would be at other levels: pieces, loops, dead ends, which ports are joined, and the coolant's area.

The picture is relabelled on a bounded list of levels, crumbs removed as for the layout itself (by the channel
width at the level in use, so that a crumb does not come and go with the level). The interval in which the design
does not change is narrowed by bisection on both sides of the level in use. Limits: a change that begins and ends
between two neighbouring levels of the list is not seen; dead ends are counted on every other coarse level, and only on
images of moderate size.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.core.arrays import Bools, Floats, Ints
from morph.core.errors import MorphError
from morph.core.pieces import Pieces
from morph.core.progress import SILENT, Progress
from morph.core.verdict import Notice
from morph.core.words import counted
from morph.layout.density import Density
from morph.layout.joined import count_around, lay_ports, make_strip, one_turn, trace_turn
from morph.layout.level import (
    EIGHT,
    Grid,
    cell_weight,
    clean,
    find_level,
    find_refinement,
    measure_covered_ratio,
    measure_width_px,
    refined,
    smoothed,
)
from morph.layout.trace import trace
from morph.settings.job import LayoutSettings, PortSettings, Samples, Seam

STAGE = "level report"
COARSE_STEP = 0.05
TRACED_STEP = 0.1
"""Dead ends are counted on these levels: a trace costs as much as twenty rows without it."""
FINE_STEP = 0.02
NEAR = 0.1
"""Around the level in use the list is finer, and a change this near is told."""
SHARP = 0.004
"""The ends of the interval are found to this."""
MOST_TRACED_PIXELS = 24_000_000
MOST_LABELLED_PIXELS = 400_000_000


@dataclass(frozen=True, slots=True)
class LevelRow:
    """The layout at one level.

    Args:
        level: density at which coolant ends. components: pieces without crumbs. loops: holes without pinholes.
        dead_ends: blind ends without a port; None when they were not counted.
        joined: names of the ports on each piece that has some, in the order of the job.
        area_ratio: coolant area over sheet area.
    """

    level: float
    components: int
    loops: int
    dead_ends: int | None
    joined: tuple[tuple[str, ...], ...]
    area_ratio: float

    @property
    def design(self) -> tuple[object, ...]:
        """What must stay the same for the design to be the same."""
        return self.components, self.loops, self.joined


@dataclass(frozen=True, slots=True)
class LevelReport:
    """The layout over the level.

    Args:
        rows: by increasing level; one of them at `level`.
        level: the level in use.
        low, high: the design is the same for levels from low to high.
        below, above: the first other design on either side, None when there is none.
        notices: says that the level in use is near a change.
    """

    rows: tuple[LevelRow, ...]
    level: float
    low: float
    high: float
    below: LevelRow | None
    above: LevelRow | None
    notices: tuple[Notice, ...]


@dataclass(frozen=True, slots=True, eq=False)
class _Field:
    """The smoothed density on the fine grid, and how it is cleaned."""

    value: Floats
    grid: Grid
    weight: Floats
    width_px: float
    ports: tuple[PortSettings, ...]
    around: bool
    samples: Samples

    @property
    def port_px(self) -> Floats:
        return self.grid.row_column(np.array([port.at_mm for port in self.ports]).reshape(-1, 2))


def make_level_report(
    density: Density, settings: LayoutSettings, ports: tuple[PortSettings, ...], progress: Progress = SILENT
) -> LevelReport:
    """Returns what the layout of `density` would be at other levels.

    Args:
        density: canonical density.
        settings: the [layout] table.
        ports: declared ports, places in sheet mm.
        progress: told level by level; may cancel.

    Raises:
        SettingError: a level cannot keep the area.
    """
    level = find_level(density, settings)
    field = _make_field(density, level, ports)
    levels = _list_levels(level, field)
    rows = []
    with_ends = len(levels) * field.value.size <= MOST_TRACED_PIXELS
    for number, value in enumerate(levels):
        row = _row(field, value)
        traced = with_ends and (value == level or abs(value / TRACED_STEP - round(value / TRACED_STEP)) < 1e-6)
        rows.append(replace(row, dead_ends=_count_dead_ends(density, value, ports)) if traced else row)
        progress.step(STAGE, number + 1, len(levels))
    here = levels.index(level)
    low, below = _edge(field, rows, here, -1)
    high, above = _edge(field, rows, here, 1)
    return LevelReport(tuple(rows), level, low, high, below, above, _notices(rows[here], low, high, below, above))


def without_repeats(found: tuple[Notice, ...], report: LevelReport) -> tuple[Notice, ...]:
    """Returns the notices `found` and those of `report`; without `level-decides` where it says that closer."""
    if not report.notices:
        return found
    return tuple(notice for notice in found if notice.code != "level-decides") + report.notices


def _make_field(density: Density, level: float, ports: tuple[PortSettings, ...]) -> _Field:
    around = density.seam is Seam.JOINED
    base = smoothed(one_turn(density) if around else density.value, joined=around)
    factor = find_refinement(base > level) if base.min() <= level < base.max() else 1
    samples = Samples.CELLS if around else density.samples
    value = _refined_around(base, factor) if around else refined(base, factor, samples)
    pitch_mm = (density.pitch_mm[0] / factor, density.pitch_mm[1] / factor)
    inset = 0.5 if density.samples is Samples.CELLS else 0.0
    grid = Grid((inset * pitch_mm[0], inset * pitch_mm[1]), pitch_mm)
    width_px = max(1.0, measure_width_px(value > level))
    return _Field(value, grid, cell_weight(value.shape, samples), width_px, ports, around, samples)


def _refined_around(base: Floats, factor: int) -> Floats:
    margin = min(8, base.shape[1])
    wide = np.pad(base, ((0, 0), (margin, margin)), mode="wrap")
    return refined(wide, factor, Samples.CELLS)[:, margin * factor : (margin + base.shape[1]) * factor]


def _list_levels(level: float, field: _Field) -> list[float]:
    """Returns the levels: coarse over the whole scale, finer around the level in use, that level exactly."""
    coarse = np.round(np.arange(1, round(1.0 / COARSE_STEP)) * COARSE_STEP, 6)
    fine = level + np.arange(-round(2 * NEAR / FINE_STEP), round(2 * NEAR / FINE_STEP) + 1) * FINE_STEP
    if (len(coarse) + len(fine)) * field.value.size > MOST_LABELLED_PIXELS:
        coarse, fine = coarse[1::2], level + np.array([-NEAR, -0.5 * NEAR, 0.0, 0.5 * NEAR, NEAR])
    low, high = float(field.value.min()), float(field.value.max())
    wanted = np.unique(np.round(np.concatenate([coarse, fine]), 6))
    wanted = wanted[(wanted > max(0.0, low)) & (wanted < min(1.0, high)) & (np.abs(wanted - level) > 1e-5)]
    return sorted([*wanted.tolist(), level])


def _row(field: _Field, level: float) -> LevelRow:
    found = clean(field.value > level, field.width_px, field.port_px)
    pieces, loops = count_around(found.mask) if field.around else (found.pieces, found.holes)
    cleaned = found.mask.astype(np.int8) - (field.value > level)  # what crumbs take off and pinholes add
    area_ratio = measure_covered_ratio(field.value, level, field.samples) + float((field.weight * cleaned).sum())
    return LevelRow(level, pieces, loops, None, _joined_ports(field, found.mask), area_ratio)


def _joined_ports(field: _Field, mask: Bools) -> tuple[tuple[str, ...], ...]:
    """Returns the ports by piece; a port with no coolant within one channel width stands alone."""
    from scipy import ndimage

    found, n = ndimage.label(mask, EIGHT)
    label = np.asarray(found, dtype=np.int64)
    root = _around(label, n) if field.around else Pieces(n + 1)
    groups: dict[int, list[str]] = {}
    for number, (port, at) in enumerate(zip(field.ports, field.port_px, strict=True)):
        here = _label_near(label, at, field.width_px)
        groups.setdefault(root.root(here) if here else -1 - number, []).append(port.name)
    return tuple(tuple(names) for names in groups.values())


def _around(label: Ints, n: int) -> Pieces:
    """Returns the pieces of `label (rows, columns)` joined across the seam, diagonally too."""
    pieces = Pieces(n + 1)
    left, right = np.pad(label[:, 0], 1), label[:, -1]
    for shift in (0, 1, 2):
        for one, two in zip(left[shift : shift + len(right)].tolist(), right.tolist(), strict=True):
            if one and two:
                pieces.join(one, two)
    return pieces


def _label_near(label: Ints, at_px: Floats, reach_px: float) -> int:
    corner = np.maximum(at_px - reach_px, 0.0).astype(np.int64)
    stop = (at_px + reach_px).astype(np.int64) + 2
    window = label[corner[0] : stop[0], corner[1] : stop[1]]
    place = np.argwhere(window > 0)
    if not len(place):
        return 0
    row, column = place[int(np.argmin(np.hypot(*(place + corner - at_px).T)))]
    return int(window[row, column])


def _count_dead_ends(density: Density, level: float, ports: tuple[PortSettings, ...]) -> int | None:
    """Returns the blind ends of the traced web that no port claims; None when nothing can be traced."""
    at_mm = np.array([port.at_mm for port in ports]).reshape(-1, 2)
    try:
        if density.seam is Seam.JOINED:
            strip = make_strip(density)
            web, _, _ = trace_turn(strip, level, lay_ports(strip, ports), ports, SILENT)
            return sum(web.degree(key) == 1 and joint.port is None for key, joint in web.joints.items())
        web = trace(density, level, ports, at_mm, 1, SILENT).web
    except MorphError:
        return None
    tips = [key for key in sorted(web.joints) if web.degree(key) == 1]
    near = [
        key
        for key in tips
        if any(np.hypot(*(web.joints[key].place_mm - port.at_mm)) <= 3.0 * web.joints[key].radius_mm for port in ports)
    ]
    return len(tips) - min(len(near), len(ports))


def _edge(field: _Field, rows: list[LevelRow], here: int, way: int) -> tuple[float, LevelRow | None]:
    """Returns the last level going `way` at which the design is that of `rows[here]`, and the first other one."""
    same = here
    while 0 <= same + way < len(rows) and rows[same + way].design == rows[here].design:
        same += way
    if not 0 <= same + way < len(rows):
        return rows[same].level, None
    inside, other = rows[same].level, rows[same + way]
    while abs(other.level - inside) > SHARP:
        middle = _row(field, 0.5 * (inside + other.level))
        if middle.design == rows[here].design:
            inside = middle.level
        else:
            other = middle
    return inside, other


def _words(row: LevelRow, here: LevelRow) -> str:
    text = f"{counted(row.components, 'piece')} and {counted(row.loops, 'loop')}"
    if row.joined != here.joined:
        text += ", ports joined as " + " | ".join("-".join(names) for names in row.joined)
    return text


def _notices(
    here: LevelRow, low: float, high: float, below: LevelRow | None, above: LevelRow | None
) -> tuple[Notice, ...]:
    near = [
        (other, edge)
        for other, edge in ((below, low), (above, high))
        if other is not None and abs(edge - here.level) < NEAR
    ]
    if not near:
        return ()
    told = "; ".join(f"at {other.level:.3f} it has {_words(other, here)}" for other, _ in near)
    return (
        Notice(
            "level-near-change",
            f"The level {here.level:.3f} is within {NEAR:g} of a change of the design, which has {_words(here, here)} "
            f"from {low:.3f} to {high:.3f}: {told}.",
        ),
    )
