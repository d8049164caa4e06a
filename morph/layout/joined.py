"""Sheets whose left and right edge are one line: full wraps.

The image is turned so that it starts at the column where least coolant crosses (of equals the one whose image
reads first), repeated half a turn to both sides, traced as any other image, and folded onto one turn
(fold.py). Everything is done on the turned image, so an image turned by whole columns gives the same
graph, turned alike. Ways on from dead ends are sought across the seam as anywhere.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from morph.core.arrays import Bools, Floats
from morph.core.errors import GeometryError, SettingError
from morph.core.progress import Progress
from morph.core.verdict import Notice
from morph.layout import notices as say
from morph.layout.assemble import Parts, assemble
from morph.layout.bridges import suggest_bridges
from morph.layout.dead_ends import find_end_walls
from morph.layout.density import Density
from morph.layout.fold import fold, normalise
from morph.layout.graph import ChannelGraph, Dropped, LevelCount
from morph.layout.level import (
    EIGHT,
    Grid,
    Picture,
    clean,
    find_level,
    measure_area_ratio,
    measure_width_px,
    refined,
    smoothed,
)
from morph.layout.ports import attach_ports, list_candidates
from morph.layout.trace import N_STEPS, RETRIES, STAGE, Traced, trace
from morph.layout.web import Web, join_all
from morph.settings.job import LayoutSettings, PortSettings, Samples, Seam

SEAM_SLACK = 1e-3
"""Nodes given twice on the seam agree within this share of the scale."""
CALM_COLUMNS = 4
MARGIN_WIDTHS = 10.0
"""The strip goes on for half a turn beyond the turn, and at least for this many channel widths."""


@dataclass(frozen=True, slots=True, eq=False)
class Strip:
    """A repeating image laid out: one turn from column `margin`, more on both sides.

    Args:
        density: the strip as an open sheet. n_columns: of one turn. margin: columns before the turn.
        first: column of the image that comes first in the turn. turn_mm: width of the sheet.
    """

    density: Density
    n_columns: int
    margin: int
    first: int
    turn_mm: float

    @property
    def margin_mm(self) -> float:
        """Width of the strip before the turn."""
        return self.margin * self.density.pitch_mm[0]

    @property
    def shift_mm(self) -> float:
        """What x on the strip gains to be x on the sheet, before whole turns are taken off."""
        return self.first * self.density.pitch_mm[0] - self.margin_mm

    def turn_of(self, picture: Picture) -> slice:
        """Returns the fine columns of `picture` that make one turn."""
        factor = round(self.density.pitch_mm[0] / picture.grid.pitch_mm[0])
        return slice(self.margin * factor, (self.margin + self.n_columns) * factor)


def one_turn(density: Density) -> Floats:
    """Returns the columns of one turn (rows, columns): nodes on the seam are given twice and kept once.

    Raises:
        SettingError: `seam-edges-differ` when the first and the last column of nodes are not the same.
    """
    if density.samples is Samples.CELLS:
        return density.value
    away = np.abs(density.value[:, 0] - density.value[:, -1])
    if float(away.max()) > SEAM_SLACK:
        row = int(away.argmax())
        raise SettingError(
            "seam-edges-differ",
            expected="the same values on the first and the last column, which are one line of nodes",
            found=f"{density.value[row, 0]:.4f} and {density.value[row, -1]:.4f} "
            f"at y = {row * density.pitch_mm[1]:.2f} mm",
            where='[layout] seam = "joined", samples = "nodes"',
            do='Write samples = "cells" if the image holds cells, or seam = "open" if it does not close.',
        )
    return density.value[:, :-1]


def find_first_column(value: Floats) -> int:
    """Returns the column at which a repeating image is best cut, the same one however the image is turned.

    That is where fewest of the columns around hold coolant (above a half); of equals the one from which
    the columns, ranked by their values, read first.
    """
    coolant = np.count_nonzero(value > 0.5, axis=0)
    cost = sum(np.roll(coolant, shift) for shift in range(-CALM_COLUMNS, CALM_COLUMNS + 1))
    rank = np.unique(value, axis=1, return_inverse=True)[1].ravel().astype(">i8")
    cheapest: list[int] = np.flatnonzero(cost == np.min(cost)).tolist()
    return min(cheapest, key=lambda column: np.roll(rank, -column).tobytes())


def make_strip(density: Density) -> Strip:
    """Returns the strip of a joined density."""
    value = one_turn(density)
    n = value.shape[1]
    first = find_first_column(value)
    width = measure_width_px(np.roll(value, -first, axis=1) > 0.5)
    margin = max(math.ceil(0.5 * n), math.ceil(MARGIN_WIDTHS * width))
    more = 0 if density.samples is Samples.CELLS else 1
    columns = (first + np.arange(-margin, n + margin + more)) % n
    pitch_x = density.pitch_mm[0]
    size_mm = ((len(columns) - more) * pitch_x, density.size_mm[1])
    laid = Density(value[:, columns], size_mm, density.samples, Seam.OPEN, density.source, density.content)
    return Strip(laid, n, margin, first, density.size_mm[0])


def count_around(mask: Bools) -> tuple[int, int]:
    """Returns pieces and loops of coolant `mask` (rows, columns) whose left and right edge are one line.

    Loops: pieces of metal less one, metal below and above the sheet counted with them (Alexander duality on the
    sphere that the sheet becomes when both ends are filled).

    >>> count_around(np.array([[0, 0, 0], [1, 1, 1], [0, 0, 0]], dtype=bool))
    (1, 1)
    """
    rows = np.zeros((1, mask.shape[1]), dtype=np.bool_)
    metal = ~np.vstack([rows, mask, rows])
    return _n_around(mask, diagonal=True), _n_around(metal, diagonal=False) - 1


def _n_around(mask: Bools, *, diagonal: bool) -> int:
    from scipy import ndimage
    from scipy.sparse import coo_matrix
    from scipy.sparse.csgraph import connected_components

    label, n = ndimage.label(mask, EIGHT if diagonal else None)
    if n == 0:
        return 0
    left, right = label[:, 0], label[:, -1]
    pairs = [(left, right)] + ([(left[1:], right[:-1]), (left[:-1], right[1:])] if diagonal else [])
    one, two = (np.concatenate(ends) for ends in zip(*pairs, strict=True))
    both = (one > 0) & (two > 0)
    link = coo_matrix((np.ones(np.count_nonzero(both)), (one[both] - 1, two[both] - 1)), shape=(n, n))
    return int(connected_components(link, directed=False)[0])


def find_joined_graph(
    density: Density, settings: LayoutSettings, ports: tuple[PortSettings, ...], progress: Progress
) -> ChannelGraph:
    """Returns the channel graph of a sheet whose left and right edge are one line.

    Args:
        density: canonical density with a joined seam.
        settings: the [layout] table.
        ports: declared ports, places in sheet mm.
        progress: told after each step; may cancel.

    Raises:
        InputError, SettingError, GeometryError: as `find_graph`; and `seam-edges-differ`, `seam-not-traced`.
    """
    strip = make_strip(density)
    level = find_level(density, settings)
    laid = lay_ports(strip, ports)
    web, traced, betti = trace_turn(strip, level, laid, ports, progress)
    turned = strip.turn_of(traced.picture)
    normalise(web, strip.turn_mm, strip.shift_mm)
    progress.step(STAGE, 4, N_STEPS)
    levels = _count_at_levels(strip, traced.picture, betti)
    found: list[Notice] = []
    if betti != web.betti():
        found.append(say.topology_differs(betti, web.betti()))
    found += say.level_decides(levels, level)
    more = 0 if density.samples is Samples.CELLS else 1  # the seam's nodes count half on either side
    middle = replace(traced.picture, field=traced.picture.field[:, turned.start : turned.stop + more])
    parts = Parts(
        density.size_mm,
        level,
        measure_area_ratio(middle, density.samples),
        _dropped_once(strip, traced.picture.dropped + traced.spurs),
        levels,
        tuple(found),
        traced.picture.grid.pixel_mm,
        strip.turn_mm,
        ends=find_end_walls(
            web,
            smoothed(one_turn(density), joined=True),
            Grid(density.first_mm, density.pitch_mm),
            level,
            strip.turn_mm,
        ),
    )
    once = smoothed(one_turn(density), joined=True)
    graph = assemble(web, parts, suggest_bridges(web, once, density, traced.picture, strip.turn_mm))
    progress.step(STAGE, N_STEPS, N_STEPS)
    return graph


def lay_ports(strip: Strip, ports: tuple[PortSettings, ...]) -> tuple[PortSettings, ...]:
    """Returns every copy of every port on the part of the strip that the fold may keep."""
    low, high = 0.45 * strip.margin_mm, strip.turn_mm + 1.55 * strip.margin_mm
    laid = []
    for port in ports:
        x = port.at_mm[0] - strip.shift_mm
        for turn in range(math.floor((low - x) / strip.turn_mm), math.ceil((high - x) / strip.turn_mm) + 1):
            if low <= x + turn * strip.turn_mm <= high:
                laid.append(replace(port, at_mm=(x + turn * strip.turn_mm, port.at_mm[1])))
    return tuple(laid)


def trace_turn(
    strip: Strip, level: float, laid: tuple[PortSettings, ...], ports: tuple[PortSettings, ...], progress: Progress
) -> tuple[Web, Traced, tuple[int, int]]:
    """Returns the folded web with its ports, the strip's trace, and pieces and loops of the picture around the turn.

    A finer grid is tried while the web's pieces or loops differ from the picture's.
    """
    at_mm = np.array([port.at_mm for port in laid])
    result: tuple[Web, Traced, tuple[int, int]] | None = None
    for more in RETRIES:
        traced = trace(strip.density, level, laid, at_mm, more, progress)
        _attach(traced, laid, ports, strip)
        join_all(traced.web)
        half_mm = 0.5 * strip.margin_mm
        web = fold(traced.web, strip.turn_mm, half_mm, strip.margin_mm + half_mm)
        betti = count_around(traced.picture.mask[:, strip.turn_of(traced.picture)])
        result = (web, traced, betti)
        if betti == web.betti():
            break
    assert result is not None
    return result


def _attach(traced: Traced, laid: tuple[PortSettings, ...], ports: tuple[PortSettings, ...], strip: Strip) -> None:
    """Ties the ports to the web; an error names the port's place on the sheet, not on the strip.

    Raises:
        GeometryError: `port-off-channel` or `ports-on-one-node`.
    """
    place = {port.name: port.at_mm for port in ports}
    for port in laid:
        try:
            attach_ports(traced.web, (port,), (), strip.density.size_mm)
        except GeometryError as error:
            x, y = place[port.name]
            candidates = [
                f"[{item.sheet_mm[0] + strip.shift_mm:.1f}, {item.sheet_mm[1]:.1f}]"
                for item in list_candidates(traced.picture, strip.density.size_mm)
                if item.side.value in {"bottom", "top"} and 0.0 <= item.sheet_mm[0] - strip.margin_mm < strip.turn_mm
            ]
            raise GeometryError(
                error.code,
                expected=error.expected,
                found=error.found,
                where=f'[[port]] "{port.name}" at [{x:g}, {y:g}] mm',
                do="Move it onto a channel of its own"
                + (f"; channels meet the frame at {', '.join(candidates)} mm." if candidates else "."),
            ) from None


def _count_at_levels(
    strip: Strip, picture: Picture, betti: tuple[int, int], step: float = 0.1
) -> tuple[LevelCount, ...]:
    """Returns pieces and loops around the turn, crumbs removed, at level - step, level and level + step."""
    factor = round(strip.density.pitch_mm[0] / picture.grid.pitch_mm[0])
    field = refined(smoothed(strip.density.value), factor, strip.density.samples)
    counts = []
    for change in (-step, 0.0, step):
        level = picture.level + change
        if change == 0.0:
            counts.append(LevelCount(level, *betti))
        elif 0.0 < level < 1.0:
            mask = field > level
            kept = clean(mask, measure_width_px(mask), np.empty((0, 2))).mask
            counts.append(LevelCount(level, *count_around(kept[:, strip.turn_of(picture)])))
    return tuple(counts)


def _dropped_once(strip: Strip, dropped: tuple[Dropped, ...]) -> tuple[Dropped, ...]:
    """Returns what was dropped within the turn, with its place on the sheet."""
    kept = []
    for item in dropped:
        x, y = item.sheet_mm
        if strip.margin_mm <= x < strip.margin_mm + strip.turn_mm:
            kept.append(replace(item, sheet_mm=((x + strip.shift_mm) % strip.turn_mm, y)))
    return tuple(kept)
