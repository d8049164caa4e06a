"""Resolution of the channel field, and its sampling on sparse blocks of 8 x 8 x 8 cells.

Only blocks that the channel wall can pass are ever sampled, so time and memory grow with the wall's
area, not with the volume of the insert. Metal between two channels that is thinner than h can fall
between the samples: such channels come out as one, with one more loop or fewer openings than planned.
Before anything is taken the number of triangles and the memory are predicted from the plan.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from morph.body.plan import ChannelPlan
from morph.body.section import SectionRule, hydraulic_diameter_mm, section_area_mm2
from morph.core.arrays import Floats, Ints
from morph.core.errors import GeometryError
from morph.core.progress import Progress
from morph.geometry.slabs import run_slabs
from morph.settings.job import QualitySettings, SectionShape
from morph.solid.sweep import Sweep

CELLS_PER_BORE = 12.0
"""Enough for areas within 0.2 % and bores within 0.02 mm (measured on plane cuts); 16 costs 1.8x the triangles."""

FINEST_H_MM, COARSEST_H_MM = 0.15, 0.30
LEAST_CELLS_PER_BORE = 4.0
MOST_TRIANGLES = 60e6
MOST_BYTES = 12e9
BYTES_PER_TRIANGLE = 1200.0
"""Peak memory per extracted triangle, reached while the surface is sharpened and simplified (measured 1100 on the
whole process at 0.7 million)."""

PIECES_PER_SLAB = 512
BLOCKS_PER_SLAB = 512


def predict_triangles(plan: ChannelPlan, h_mm: float) -> float:
    """Returns about how many triangles the extracted wall of `plan` has at resolution `h_mm`: 3 area / h^2.

    Roofs count as on a channel that lies flat.
    """
    area = 0.0
    for branch in plan.branches:
        step = np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1)
        area += float((_perimeter_mm(0.5 * (branch.bore_mm[:-1] + branch.bore_mm[1:]), plan.section) * step).sum())
    area += float(sum(_perimeter_mm(np.array([x.bore_mm]), plan.section)[0] * x.overshoot_mm for x in plan.exits))
    return 3.0 * area / h_mm**2


def _perimeter_mm(bore_mm: Floats, rule: SectionRule) -> Floats:
    """Returns the perimeters (k,) of channels that lie flat."""
    level = np.cross(rule.up, np.eye(3)[np.abs(rule.up).argmin()])[None, :]
    if rule.shape is SectionShape.ARCHED:  # the perimeter goes with the bore
        one = np.array([1.0])
        return bore_mm * (4.0 * section_area_mm2(one, level, rule) / hydraulic_diameter_mm(one, level, rule))
    level = np.repeat(level, len(bore_mm), axis=0)
    return 4.0 * section_area_mm2(bore_mm, level, rule) / hydraulic_diameter_mm(bore_mm, level, rule)


def choose_h_mm(plan: ChannelPlan, quality: QualitySettings) -> float:
    """Returns the field resolution: as given, or smallest bore / 12 held between 0.15 and 0.30 mm.

    Args:
        plan: all channels with their final bores.
        quality: `h_mm` None to choose.

    Raises:
        GeometryError: ``bore-below-resolution`` when a bore is below 4 h, ``solid-too-large`` when the wall would
            need more than 60 million triangles or 12 GB.
    """
    worst = min(plan.branches, key=lambda branch: float(branch.bore_mm.min()))
    at = int(np.argmin(worst.bore_mm))
    smallest = float(worst.bore_mm[at])
    h_mm = quality.h_mm
    if h_mm is None:
        h_mm = min(max(smallest / CELLS_PER_BORE, FINEST_H_MM), COARSEST_H_MM)
    if smallest < LEAST_CELLS_PER_BORE * h_mm:
        x, y, z = worst.xyz_mm[at]
        raise GeometryError(
            "bore-below-resolution",
            expected=f"a bore of at least {LEAST_CELLS_PER_BORE * h_mm:.3g} mm (4 x h_mm = {h_mm:.3g} mm)",
            found=f"a bore of {smallest:.3g} mm",
            where=f"branch {worst.id} at ({x:.2f}, {y:.2f}, {z:.2f}) mm",
            do="Raise [section] bore_range_mm or bore_scale, or lower [quality] h_mm.",
        )
    triangles = predict_triangles(plan, h_mm)
    if triangles > MOST_TRIANGLES or triangles * BYTES_PER_TRIANGLE > MOST_BYTES:
        least = h_mm * math.sqrt(triangles / min(MOST_TRIANGLES, MOST_BYTES / BYTES_PER_TRIANGLE))
        raise GeometryError(
            "solid-too-large",
            expected=f"at most {MOST_TRIANGLES / 1e6:.0f} million triangles and {MOST_BYTES / 1e9:.0f} GB",
            found=f"{triangles / 1e6:.3g} million triangles, {triangles * BYTES_PER_TRIANGLE / 1e9:.3g} GB predicted",
            where=f"{len(plan.branches)} branches at h_mm = {h_mm:.3g} mm",
            do=f"Set [quality] h_mm to {math.ceil(1000.0 * least) / 1000.0:.3f} mm or more, or shrink the layout.",
        )
    return float(h_mm)


@dataclass(frozen=True, slots=True, eq=False)
class SampledField:
    """The field on its active blocks; work arrays of one build, not copied.

    Args:
        sweep: the pieces. origin_mm: (3,) place of sample (0, 0, 0). h_mm: cell size.
        corner: (n, 3) lowest cell of each block, in key order.
        start, length: (n,) where each block's list of pieces stands in `near`. near: piece numbers.
        neighbours: (n, 27) block numbers around each block, -1 for none. keys: (n,) of the blocks, rising.
        shape: (3,) blocks of the whole box.
        values: (n, 9, 9, 9) float32 samples in mm. codes: (n, 8, 8, 8) uint8 inside bits of the corners.
        end, planes: where rings make the wall instead (kernels/stretch.py); no planes: nowhere.
    """

    sweep: Sweep
    origin_mm: Floats
    h_mm: float
    corner: Ints
    start: Ints
    length: Ints
    near: Ints
    neighbours: Ints
    keys: Ints
    shape: Ints
    values: NDArray[np.float32]
    codes: NDArray[np.uint8]
    end: Ints
    planes: Floats

    def kernel_arguments(self) -> tuple[Any, ...]:
        """Returns what every kernel on blocks takes between its range and its own arrays."""
        return (self.corner, *self.list_arguments(), self.origin_mm, self.h_mm)

    def list_arguments(self) -> tuple[Any, ...]:
        """Returns the lists of the blocks and what they point into."""
        s = self.sweep
        return (self.start, self.length, self.near, s.pieces, s.owner, s.nodes, s.blend_mm)

    def block_at(self, xyz_mm: Floats, otherwise: Ints) -> Ints:
        """Returns the block (k,) that holds each point (k, 3), `otherwise (k,)` where it is not an active one."""
        cell = np.floor((xyz_mm - self.origin_mm) / (8.0 * self.h_mm)).astype(np.int64)
        key = (cell[:, 0] * self.shape[1] + cell[:, 1]) * self.shape[2] + cell[:, 2]
        at = np.minimum(np.searchsorted(self.keys, key), len(self.keys) - 1)
        return np.where(self.keys[at] == key, at, otherwise)


@dataclass(frozen=True, slots=True, eq=False)
class BlockLists:
    """The pieces near each block of 8 x 8 x 8 cells; work arrays.

    Args:
        origin_mm: (3,) place of sample (0, 0, 0). block_mm: edge of a block. shape: (3,) blocks of the whole box.
        keys: (m,) blocks with a piece near them, rising.
        start: (m + 1,) where each block's pieces stand in `near (p,)`, rising.
        pad_mm: a piece nearer to a block than this is in its list.
    """

    origin_mm: Floats
    block_mm: float
    shape: Ints
    keys: Ints
    start: Ints
    near: Ints
    pad_mm: float


def list_pieces(sweep: Sweep, h_mm: float, progress: Progress) -> BlockLists:
    """Returns the blocks that the surface of `sweep` may pass at resolution `h_mm`, with the pieces near each."""
    from morph.kernels.distance_field import BLOCK

    block_mm, pad = BLOCK * h_mm, 1.25 * sweep.blend_mm + 2.0 * h_mm
    origin, shape = _frame(sweep, h_mm, block_mm)
    key, near = _list_pairs(sweep, pad, origin, block_mm, shape, progress)
    first = np.flatnonzero(np.concatenate([[True], key[1:] != key[:-1]]))
    return BlockLists(origin, block_mm, shape, key[first], np.concatenate([first, [len(key)]]), near, pad)


def sample_field(
    sweep: Sweep, h_mm: float, progress: Progress, lists: BlockLists | None = None,
    end: Ints | None = None, planes: Floats | None = None,
) -> SampledField:  # fmt: skip
    """Returns the field of `sweep` sampled at `h_mm` on all blocks its surface can pass.

    Args:
        sweep: the pieces.
        h_mm: cell size.
        progress: told after each slab of blocks; may raise Cancelled.
        lists: of `list_pieces`, made anew without; its lists are shortened in place.
        end: (n,) with `planes (k, 6)` where rings make the wall (kernels/stretch.py); None: nowhere.
        planes: see `end`.
    """
    from morph.kernels.distance_field import BLOCK, prune_blocks, sample_blocks

    lists = lists or list_pieces(sweep, h_mm, progress)
    if end is None or planes is None:
        end, planes = np.full(len(sweep.pieces), -1), np.zeros((0, 6))
    keys, start, shape = lists.keys, lists.start, lists.shape
    length = np.zeros(len(keys), np.int64)
    rows = (sweep.pieces, sweep.owner, sweep.blend_mm, lists.origin_mm, lists.block_mm, shape, end, planes)
    run_slabs(
        "solid: blocks",
        len(keys),
        8 * BLOCKS_PER_SLAB,
        lambda a, b: prune_blocks(a, b, keys, start, lists.near, length, *rows),
        progress,
    )
    active = np.flatnonzero(length)
    keys, start, length = keys[active], start[:-1][active], length[active]
    cell = np.column_stack([keys // (shape[1] * shape[2]), (keys // shape[2]) % shape[1], keys % shape[2]])
    field = SampledField(
        sweep=sweep,
        origin_mm=lists.origin_mm,
        h_mm=h_mm,
        corner=BLOCK * cell,
        start=start,
        length=length,
        near=lists.near,
        neighbours=_neighbours(keys, shape),
        keys=keys,
        shape=shape,
        values=np.empty((len(keys), BLOCK + 1, BLOCK + 1, BLOCK + 1), np.float32),
        codes=np.empty((len(keys), BLOCK, BLOCK, BLOCK), np.uint8),
        end=end,
        planes=planes,
    )
    arguments = (*field.kernel_arguments(), end, planes)
    run_slabs(
        "solid: field",
        len(keys),
        BLOCKS_PER_SLAB,
        lambda a, b: sample_blocks(a, b, *arguments, field.values, field.codes),
        progress,
    )
    return field


def _frame(sweep: Sweep, h_mm: float, block_mm: float) -> tuple[Floats, Ints]:
    """Returns the origin (3,) in mm and the number of blocks (3,) of a box around all pieces.

    The origin is a whole number of blocks from the part's origin, less an odd share of a cell so that walls at round
    coordinates do not lie on samples.
    """
    start = sweep.pieces[:, :3]
    end = start + sweep.pieces[:, 3:6] * sweep.pieces[:, 6:7]
    radius = np.maximum(sweep.pieces[:, 7], sweep.pieces[:, 7] + sweep.pieces[:, 8] * sweep.pieces[:, 6])
    arch = float(sweep.pieces[:, 15].max())
    rise = math.sqrt(2.0 * arch - 1.0) if arch > 0.0 else 1.0 / float(sweep.pieces[:, 13].min())
    pad = (float(radius.max()) + 1.25 * sweep.blend_mm + 2.0 * h_mm) * rise
    low, high = np.minimum(start, end).min(axis=0) - pad, np.maximum(start, end).max(axis=0) + pad
    origin = (np.floor(low / block_mm) - 1.0) * block_mm - 0.137 * h_mm
    return origin, np.ceil((high - origin) / block_mm).astype(np.int64) + 1


def _list_pairs(
    sweep: Sweep, pad: float, origin: Floats, block_mm: float, shape: Ints, progress: Progress
) -> tuple[Ints, Ints]:
    """Returns block keys (p,) and piece numbers (p,) of all near pairs, sorted by key, then piece."""
    from morph.kernels.distance_field import list_blocks

    n = len(sweep.pieces)
    count = np.zeros(n, np.int64)
    none = np.empty(0, np.int64)
    fixed = (sweep.pieces, origin, block_mm, shape, pad)
    run_slabs(
        "solid: lists", n, PIECES_PER_SLAB, lambda a, b: list_blocks(a, b, *fixed, count, none, none, False), progress
    )
    offset = np.concatenate([[0], np.cumsum(count)[:-1]])
    key, piece = np.empty(int(count.sum()), np.int64), np.empty(int(count.sum()), np.int64)
    run_slabs(
        "solid: lists", n, PIECES_PER_SLAB, lambda a, b: list_blocks(a, b, *fixed, offset, key, piece, True), progress
    )
    order = np.argsort(key, kind="stable")
    return key[order], piece[order]


def _neighbours(keys: Ints, shape: Ints) -> Ints:
    """Returns the block numbers (n, 27) around each block, -1 for none; the box has an empty rim: keys do not wrap."""
    out = np.full((len(keys), 27), -1, np.int64)
    for number, (dx, dy, dz) in enumerate(np.ndindex(3, 3, 3)):
        wanted = keys + ((dx - 1) * shape[1] + (dy - 1)) * shape[2] + (dz - 1)
        at = np.minimum(np.searchsorted(keys, wanted), len(keys) - 1)
        out[:, number] = np.where(keys[at] == wanted, at, -1)
    return out
