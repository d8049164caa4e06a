"""The density: the optimiser's grid in one canonical form, whatever the file looked like.

Canonical means: row 0 lies at the bottom of the sheet, values are 0..1 with 1 = coolant, mirrored
halves already doubled. The drawing is not flipped for ``seen_from``: the carrier does that.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import SettingError
from morph.read.image import read_image
from morph.settings.job import CoolantEnd, LayoutSettings, MirrorAt, Rows, Samples, Seam

ASPECT_SLACK = 0.01


@dataclass(frozen=True, slots=True, eq=False)
class Density:
    """The canonical density.

    Args:
        value: (rows, columns) coolant fraction 0..1, row 0 at the bottom.
        size_mm: width and height of the sheet.
        samples: whether values stand for cells (centres at (i + 0.5) size / n) or grid nodes (i size / (n - 1)).
        seam: whether the left and right edge are one line.
        source: base name of the file. content: fingerprint of the file's bytes.
    """

    value: Floats
    size_mm: tuple[float, float]
    samples: Samples
    seam: Seam
    source: str
    content: str

    def __post_init__(self) -> None:
        object.__setattr__(self, "value", frozen_floats("value", self.value, (None, None)))

    @property
    def pitch_mm(self) -> tuple[float, float]:
        """Distance of neighbouring samples along x and y."""
        return _pitch_mm(self.value.shape, self.size_mm, self.samples)

    @property
    def first_mm(self) -> tuple[float, float]:
        """Place of sample [0, 0] on the sheet: half a cell in, or on the corner when nodes are given."""
        inset = 0.5 if self.samples is Samples.CELLS else 0.0
        return inset * self.pitch_mm[0], inset * self.pitch_mm[1]


def _pitch_mm(shape: tuple[int, ...], size_mm: tuple[float, float], samples: Samples) -> tuple[float, float]:
    less = 0 if samples is Samples.CELLS else 1
    return size_mm[0] / (shape[1] - less), size_mm[1] / (shape[0] - less)


def make_density(settings: LayoutSettings) -> Density:
    """Returns the density of the image named in `settings`, in canonical form.

    Args:
        settings: the [layout] table; `size_mm` is that of the image as it lies (the half when mirrored).

    Raises:
        InputError: the image is not a density.
        SettingError: `aspect-mismatch`, the pixels would not be square within 1 %.
    """
    raw = read_image(settings.image)
    value = np.asarray(raw.value)
    if settings.rows is Rows.TOP_DOWN:
        value = value[::-1]
    if settings.channel is CoolantEnd.LOW:
        value = 1.0 - value
    _require_square_pixels(value.shape, settings)
    value, size_mm = _mirrored(value, settings)
    return Density(value, size_mm, settings.samples, settings.seam, raw.source, raw.content)


def _require_square_pixels(shape: tuple[int, ...], settings: LayoutSettings) -> None:
    pitch_x_mm, pitch_y_mm = _pitch_mm(shape, settings.size_mm, settings.samples)
    if abs(pitch_x_mm / pitch_y_mm - 1.0) <= ASPECT_SLACK:
        return
    width_mm, height_mm = settings.size_mm
    right_mm = pitch_x_mm * height_mm / pitch_y_mm
    raise SettingError(
        "aspect-mismatch",
        expected=f"square pixels within 1 % (a width of {width_mm:g} mm asks for a height of {right_mm:.6g} mm)",
        found=f"size_mm = [{width_mm:g}, {height_mm:g}] on {shape[1]} x {shape[0]} {settings.samples.value}, "
        f"pixels of {pitch_x_mm:.4g} x {pitch_y_mm:.4g} mm",
        where="[layout] size_mm",
        do="Correct size_mm, check that width comes first, or set samples to what the grid holds.",
    )


def _mirrored(value: Floats, settings: LayoutSettings) -> tuple[Floats, tuple[float, float]]:
    """Returns the doubled layout and its size; a line of nodes on the mirror is not repeated."""
    width_mm, height_mm = settings.size_mm
    if settings.mirror_at is MirrorAt.NONE:
        return value, (width_mm, height_mm)
    axis = 1 if settings.mirror_at in {MirrorAt.LEFT, MirrorAt.RIGHT} else 0
    image_first = settings.mirror_at in {MirrorAt.RIGHT, MirrorAt.TOP}
    other = np.flip(value, axis)
    if settings.samples is Samples.NODES:
        keep = slice(1, None) if image_first else slice(None, -1)
        other = other[:, keep] if axis == 1 else other[keep]
    doubled = np.concatenate([value, other] if image_first else [other, value], axis=axis)
    return doubled, (width_mm * 2, height_mm) if axis == 1 else (width_mm, height_mm * 2)
