"""From grey density to a clean picture of coolant: smoothing, level, fine grid, crumbs removed.

One binomial [1 2 1] smooth per axis cancels a checkerboard exactly. Coolant is density > level,
pieces are 8-connected and metal 4-connected, so that a picture has one count of pieces and holes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats
from morph.core.errors import InputError, SettingError
from morph.layout.density import Density
from morph.layout.graph import Dropped, DropReason, LevelCount
from morph.settings.job import LayoutSettings, LevelRule, Samples, Seam

PIXELS_PER_WIDTH = 8.0
MOST_REFINEMENT = 6
MOST_FINE_PIXELS = 64_000_000
ISLAND_DISCS = 1.76
"""A piece smaller than this many discs of the channel width is a crumb, not a channel."""
PINHOLE_DISCS = 0.20
"""A hole smaller than this many discs of the channel width is a flaw, not metal left on purpose."""
AREA_SLACK = 0.02
SLAB_ROWS = 512
SMOOTH_ROWS = 16
EIGHT = np.ones((3, 3), dtype=np.int64)


@dataclass(frozen=True, slots=True)
class Grid:
    """Where samples lie: `first_mm` (x, y) of sample [0, 0] and `pitch_mm` (x, y)."""

    first_mm: tuple[float, float]
    pitch_mm: tuple[float, float]

    @property
    def pixel_mm(self) -> float:
        """Side of the square with a pixel's area."""
        return math.sqrt(self.pitch_mm[0] * self.pitch_mm[1])

    def sheet_mm(self, row_column: Floats) -> Floats:
        """Returns (n, 2) places (x, y) of fractional array positions `row_column (n, 2)`."""
        return np.asarray(row_column, dtype=np.float64)[:, ::-1] * self.pitch_mm + self.first_mm

    def row_column(self, sheet_mm: Floats) -> Floats:
        """Returns (n, 2) fractional array positions of `sheet_mm (n, 2)`."""
        return ((np.asarray(sheet_mm, dtype=np.float64) - self.first_mm) / self.pitch_mm)[:, ::-1]


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """Coolant and metal on the fine grid.

    Args:
        field: (rows, columns) smoothed density, pushed to the metal or coolant side where crumbs went.
        mask: field > level. grid: where the samples lie. level: the density level.
        width_mm: mean channel width, 2 area / perimeter.
        betti: pieces and holes.
        dropped: the crumbs.
    """

    field: Floats
    mask: Bools
    grid: Grid
    level: float
    width_mm: float
    betti: tuple[int, int]
    dropped: tuple[Dropped, ...]


def smoothed(value: Floats, *, joined: bool = False) -> Floats:
    """Returns `value (rows, columns)` after one binomial [1 2 1] / 4 smooth along each axis.

    Edges are repeated; `joined`: the first and the last column are neighbours.
    """
    value = np.asarray(value, dtype=np.float64)
    smooth, n = np.empty(value.shape), len(value)
    for first in range(0, n, SMOOTH_ROWS):  # few rows at a time stay near the processor
        row = np.arange(first, min(first + SMOOTH_ROWS, n))
        rows = value[np.maximum(row - 1, 0)] + value[np.minimum(row + 1, n - 1)]
        rows *= 0.25
        rows += 0.5 * value[row]
        part = smooth[first : first + len(row)]
        np.add(rows[:, :-2], rows[:, 2:], out=part[:, 1:-1])
        part[:, 0] = rows[:, -1 if joined else 0] + rows[:, 1]
        part[:, -1] = rows[:, -2] + rows[:, 0 if joined else -1]
        part *= 0.25
        rows *= 0.5
        part += rows
    return smooth


def cell_weight(shape: tuple[int, ...], samples: Samples) -> Floats:
    """Returns the share of the sheet each sample stands for: edge nodes count half."""
    weight = np.ones(shape)
    if samples is Samples.NODES:
        weight[[0, -1]] *= 0.5
        weight[:, [0, -1]] *= 0.5
    return np.asarray(weight / weight.sum(), dtype=np.float64)


def find_level(density: Density, settings: LayoutSettings) -> float:
    """Returns the density level at which coolant ends.

    Args:
        density: canonical density.
        settings: `level` half, a number, or keep-area: then the level above which coolant covers
            `area_ratio` of the sheet (default: the mean density).

    Raises:
        SettingError: `keep-area-missed`, no level comes within 2 % of the sheet of that area.
    """
    if not isinstance(settings.level, LevelRule):
        return float(settings.level)
    if settings.level is LevelRule.HALF:
        return 0.5
    weight = cell_weight(density.value.shape, density.samples).ravel()
    wanted = settings.area_ratio if settings.area_ratio is not None else float(weight @ density.value.ravel())
    value = smoothed(density.value, joined=density.seam is Seam.JOINED).ravel()
    order = np.argsort(-value, kind="stable")
    covered = np.cumsum(weight[order])
    last = min(int(np.searchsorted(covered, wanted)), len(order) - 2)
    level = 0.5 * float(value[order[last]] + value[order[last + 1]])
    found = float(weight[value > level].sum())
    if abs(found - wanted) > AREA_SLACK or not 0.0 < level < 1.0:
        raise SettingError(
            "keep-area-missed",
            expected=f"a level with coolant on {100 * wanted:.1f} % of the sheet",
            found=f"{100 * found:.1f} % at the nearest level {level:.3f}",
            where="[layout] area_ratio",
            do='Set level = "half", or an area_ratio that the image can give.',
        )
    return level


def count_pieces_and_holes(mask: Bools) -> tuple[int, int]:
    """Returns the number of 8-connected pieces and of holes (metal not joined to the outside) of `mask`.

    >>> count_pieces_and_holes(np.array([[1, 1, 1], [1, 0, 1], [1, 1, 1]], dtype=bool))
    (1, 1)
    """
    from scipy import ndimage

    pieces = int(ndimage.label(mask, EIGHT)[1])
    return pieces, int(ndimage.label(~np.pad(mask, 1))[1]) - 1


def measure_width_px(mask: Bools) -> float:
    """Returns the mean channel width 2 area / perimeter in pixels.

    Edges counted along rows and columns are 4 / pi times the perimeter of a shape without preferred
    direction (Cauchy-Crofton).
    """
    edges = np.count_nonzero(mask[1:] != mask[:-1]) + np.count_nonzero(mask[:, 1:] != mask[:, :-1])
    return 2.0 * float(np.count_nonzero(mask)) / max(1.0, edges * math.pi / 4.0)


def refined(field: Floats, factor: int, samples: Samples) -> Floats:
    """Returns `field` sampled `factor` times finer by cubic splines.

    Cells: each is cut in `factor` cells; nodes: `factor` - 1 are put between neighbours.
    """
    if factor == 1:
        return field
    from scipy.interpolate import CubicSpline

    margin = 4
    for axis in (0, 1):
        n = field.shape[axis]
        widths = [(margin, margin) if a == axis else (0, 0) for a in (0, 1)]
        padded = np.pad(field, widths, mode="edge")
        if samples is Samples.CELLS:
            at = (np.arange(n * factor) + 0.5) / factor - 0.5
        else:
            at = np.arange((n - 1) * factor + 1) / factor
        field = CubicSpline(np.arange(n + 2 * margin), padded, axis=axis, bc_type="natural")(at + margin)
    return np.ascontiguousarray(field, dtype=np.float64)


def find_refinement(mask: Bools) -> int:
    """Returns how many times finer the grid must be for 8 pixels across the mean channel."""
    wanted = math.ceil(PIXELS_PER_WIDTH / max(measure_width_px(mask), 0.5))
    possible = int(math.sqrt(MOST_FINE_PIXELS / mask.size))
    return max(1, min(wanted, possible, MOST_REFINEMENT))


@dataclass(frozen=True, slots=True, eq=False)
class Cleaned:
    """A mask without crumbs, what was removed and filled (rows, columns), and its pieces and holes."""

    mask: Bools
    islands: Bools
    pinholes: Bools
    pieces: int
    holes: int


def measure_area_ratio(picture: Picture, samples: Samples) -> float:
    """Returns coolant area over sheet area of a picture, as `measure_covered_ratio` does."""
    return measure_covered_ratio(picture.field, picture.level, samples)


def measure_covered_ratio(field: Floats, level: float, samples: Samples) -> float:
    """Returns the share of the sheet above `level`; a sample cut by the contour counts with the share it leaves it.

    Args:
        field: (rows, columns) density.
        level: where coolant ends.
        samples: what a value stands for.
    """
    share = np.empty(field.shape)
    for first in range(0, len(field), SLAB_ROWS):
        last = min(first + SLAB_ROWS, len(field))
        low, high = max(0, first - 1), min(len(field), last + 1)  # a row more on either side for the slope
        own = slice(first - low, last - low)
        steep_y, steep_x = (np.gradient(field[low:high], axis=axis)[own] for axis in (0, 1))
        over = field[first:last] - level
        near = np.abs(over) < 0.5 * np.maximum(np.abs(steep_y) + np.abs(steep_x), 1e-9)  # elsewhere all or nothing
        part = (over > 0.0).astype(np.float64)
        slope = np.hypot(steep_y[near], steep_x[near])
        part[near] = np.clip(0.5 + over[near] / np.maximum(slope, 1e-9), 0.0, 1.0)
        share[first:last] = part
    share *= 1.0 / share.size if samples is Samples.CELLS else cell_weight(share.shape, samples)
    return float(share.sum())


def clean(mask: Bools, width_px: float, keep_px: Floats) -> Cleaned:
    """Returns `mask` without islands and pinholes.

    Args:
        mask: coolant.
        width_px: mean channel width.
        keep_px: (n, 2) array positions (row, column) of ports; the piece nearest to one, within one width, stays.
    """
    from scipy import ndimage

    disc = math.pi * width_px**2 / 4.0
    label, n = ndimage.label(mask, EIGHT)
    crumb = np.bincount(label.ravel(), minlength=n + 1) < ISLAND_DISCS * disc
    crumb[0] = False
    for port in np.asarray(keep_px).reshape(-1, 2):
        corner = np.maximum(port - width_px, 0.0).astype(np.int64)
        stop = (port + width_px).astype(np.int64) + 2
        near = np.argwhere(mask[corner[0] : stop[0], corner[1] : stop[1]]) + corner
        if len(near):
            row, column = near[int(np.argmin(np.hypot(*(near - port).T)))]
            crumb[label[row, column]] = False
    islands = crumb[label] if crumb.any() else np.zeros_like(mask)
    pieces = n - int(crumb.sum())
    solid = mask & ~islands
    label, n = ndimage.label(~np.pad(solid, 1))
    flaw = np.bincount(label.ravel(), minlength=n + 1) < PINHOLE_DISCS * disc
    flaw[[0, label[0, 0]]] = False
    pinholes = flaw[label][1:-1, 1:-1] if flaw.any() else np.zeros_like(mask)
    return Cleaned(solid | pinholes, islands, pinholes, pieces, n - 1 - int(flaw.sum()))


def list_dropped(region: Bools, reason: DropReason, grid: Grid) -> tuple[Dropped, ...]:
    """Returns one Dropped per piece of `region`: its centroid on the sheet and its area."""
    from scipy import ndimage

    if not region.any():
        return ()
    label, n = ndimage.label(region, EIGHT)
    index = np.arange(1, n + 1)
    area = ndimage.sum_labels(region, label, index) * grid.pixel_mm**2
    centre = grid.sheet_mm(np.array(ndimage.center_of_mass(region, label, index)))
    return tuple(Dropped(reason, (float(x), float(y)), float(a)) for (x, y), a in zip(centre, area, strict=True))


def make_picture(density: Density, level: float, ports_mm: Floats, more: int = 1) -> Picture:
    """Returns the clean coolant picture of `density` at `level`.

    Args:
        density: canonical density.
        level: coolant is the smoothed density above it.
        ports_mm: (n, 2) declared ports; pieces there are never crumbs.
        more: further refinement of the fine grid (1 = as the width asks).

    Raises:
        InputError: nothing, or everything, lies above the level.
    """
    base = smoothed(density.value)
    _require_both_phases(base, level)
    factor = find_refinement(base > level)
    if factor * more * factor * more * base.size <= MOST_FINE_PIXELS:
        factor *= more
    field = refined(base, factor, density.samples)
    pitch_mm = (density.pitch_mm[0] / factor, density.pitch_mm[1] / factor)
    inset = 0.5 if density.samples is Samples.CELLS else 0.0
    grid = Grid((inset * pitch_mm[0], inset * pitch_mm[1]), pitch_mm)
    mask = field > level
    width_px = measure_width_px(mask)
    found = clean(mask, width_px, grid.row_column(ports_mm))
    nudge = 1e-4
    pushed = np.minimum(field, level - nudge)
    np.maximum(field, level + nudge, out=pushed, where=found.mask)
    dropped = list_dropped(found.islands, DropReason.ISLAND, grid) + list_dropped(
        found.pinholes, DropReason.PINHOLE, grid
    )
    width_mm = measure_width_px(found.mask) * grid.pixel_mm
    return Picture(pushed, found.mask, grid, level, width_mm, (found.pieces, found.holes), dropped)


def _require_both_phases(field: Floats, level: float) -> None:
    low, high = float(field.min()), float(field.max())
    if high <= level:
        raise InputError(
            "level-empty",
            expected=f"coolant above level {level:.3f}",
            found=f"a largest smoothed density of {high:.3f}",
            where="[layout] level",
            do='Lower the level, or set channel = "low" if dark means coolant.',
        )
    if low > level:
        raise InputError(
            "level-full",
            expected=f"metal at or below level {level:.3f}",
            found=f"a smallest smoothed density of {low:.3f}",
            where="[layout] level",
            do='Raise the level, or set channel = "low" if dark means coolant.',
        )


def count_at_levels(density: Density, picture: Picture, step: float = 0.1) -> tuple[LevelCount, ...]:
    """Returns pieces and holes, crumbs removed, at level - step, level, level + step (those within 0..1).

    Args:
        density: canonical density.
        picture: its picture at the level in use.
        step: change of level.
    """
    base = smoothed(density.value)
    field = refined(base, round(density.pitch_mm[0] / picture.grid.pitch_mm[0]), density.samples)
    counts = []
    for change in (-step, 0.0, step):
        level = picture.level + change
        if change == 0.0:
            counts.append(LevelCount(level, *picture.betti))
        elif 0.0 < level < 1.0:
            mask = field > level
            found = clean(mask, measure_width_px(mask), np.empty((0, 2)))
            counts.append(LevelCount(level, found.pieces, found.holes))
    return tuple(counts)
