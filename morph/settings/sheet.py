"""What a job says about the flat drawing: its image, how it is read, and what is said about places on the sheet.

Lengths in mm. Part of the Job record tree; everything here is also found in ``settings/job.py``.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path


class Rows(StrEnum):
    """Where the first row of the array lies on the sheet."""

    TOP_DOWN = "top-down"
    BOTTOM_UP = "bottom-up"


class Samples(StrEnum):
    """Whether a value stands for a cell or for a grid node."""

    CELLS = "cells"
    NODES = "nodes"


class SeenFrom(StrEnum):
    """From which side the flat drawing reads."""

    PART = "part"
    METAL = "metal"


class CoolantEnd(StrEnum):
    """Which end of the density scale is coolant."""

    HIGH = "high"
    LOW = "low"


class LevelRule(StrEnum):
    """How the level is found when it is not a number."""

    HALF = "half"
    KEEP_AREA = "keep-area"


class Seam(StrEnum):
    """Whether the left and right edge of the sheet are one line."""

    OPEN = "open"
    JOINED = "joined"


class MirrorAt(StrEnum):
    """The edge of the image at which a symmetric layout is mirrored."""

    NONE = "none"
    LEFT = "left"
    RIGHT = "right"
    BOTTOM = "bottom"
    TOP = "top"


class WideRule(StrEnum):
    """What becomes of stretches wider than any legal bore."""

    CAP = "cap"
    SPLIT = "split"
    ERROR = "error"


@dataclass(frozen=True, slots=True)
class LayoutSettings:
    """The [layout] table; `level` is a LevelRule or a number in (0, 1), `image` an absolute path.

    `rows` and `samples` None: as the file says (formats that state it). `crop_mm`: left, bottom, right, top of the
    part of the image that is the layout. `pixel_mm`: of the grid an outline drawing is filled on, None: by its widths.
    """

    image: Path
    size_mm: tuple[float, float]
    rows: Rows | None = Rows.TOP_DOWN
    samples: Samples | None = Samples.CELLS
    seen_from: SeenFrom = SeenFrom.PART
    channel: CoolantEnd = CoolantEnd.HIGH
    level: LevelRule | float = LevelRule.HALF
    area_ratio: float | None = None
    seam: Seam = Seam.OPEN
    mirror_at: MirrorAt = MirrorAt.NONE
    crop_mm: tuple[float, float, float, float] | None = None
    pixel_mm: float | None = None
    wide: WideRule = WideRule.CAP

    @property
    def sheet_mm(self) -> tuple[float, float]:
        """Width and height of the sheet: the crop, doubled when mirrored (a crop is rounded to pixels later)."""
        width, height = self.size_mm
        if self.crop_mm is not None:
            width, height = self.crop_mm[2] - self.crop_mm[0], self.crop_mm[3] - self.crop_mm[1]
        if self.mirror_at in {MirrorAt.LEFT, MirrorAt.RIGHT}:
            width *= 2.0
        if self.mirror_at in {MirrorAt.BOTTOM, MirrorAt.TOP}:
            height *= 2.0
        return width, height


@dataclass(frozen=True, slots=True)
class AcceptSettings:
    """One [[accept]]: a suggestion of the layout stage that is to be carried out.

    Args:
        bridge: id of a suggested way on ("G2"), or True for the one at `at_mm`.
        trim: id of a dead end to be taken off ("D1"), or True for the one at `at_mm`. Exactly one of both is given.
        at_mm: its place on the sheet; beside an id it says where that id must still be.
    """

    bridge: str | bool | None = None
    trim: str | bool | None = None
    at_mm: tuple[float, float] | None = None


@dataclass(frozen=True, slots=True)
class KeepOutSettings:
    """One [[keep_out]]: a disc (`at_mm`, `diameter_mm`) or a polygon on the sheet that channels stay clear of.

    Args:
        name: how messages call it.
        at_mm: centre of the disc. diameter_mm: of the disc.
        polygon_mm: corners of the polygon in order, not closed.
        clearance_mm: least metal between it and a channel's wall, measured on the sheet.
    """

    name: str
    at_mm: tuple[float, float] | None = None
    diameter_mm: float | None = None
    polygon_mm: tuple[tuple[float, float], ...] | None = None
    clearance_mm: float = 0.0
