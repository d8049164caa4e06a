"""The density: the optimiser's grid in one canonical form, whatever the file looked like.

Canonical means: row 0 lies at the bottom of the sheet, values are 0..1 with 1 = coolant, mirrored
halves already doubled. The drawing is not flipped for ``seen_from``: the carrier does that.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import SettingError
from morph.core.verdict import Notice
from morph.read.image import SMALLEST_SIDE, RawImage, read_image
from morph.settings.job import CoolantEnd, LayoutSettings, MirrorAt, Rows, Samples, Seam

ASPECT_SLACK = 0.01
CROP_SLACK_MM = 1e-6


@dataclass(frozen=True, slots=True, eq=False)
class Density:
    """The canonical density.

    Args:
        value: (rows, columns) coolant fraction 0..1, row 0 at the bottom.
        size_mm: width and height of the sheet.
        samples: whether values stand for cells (centres at (i + 0.5) size / n) or grid nodes (i size / (n - 1)).
        seam: whether the left and right edge are one line.
        source: base name of the file. content: fingerprint of the file's bytes.
        origin: how the file was read, as a sentence: format, size, unit and orientation.
        notices: what about it was rounded or overruled.
    """

    value: Floats
    size_mm: tuple[float, float]
    samples: Samples
    seam: Seam
    source: str
    content: str
    origin: str = ""
    notices: tuple[Notice, ...] = ()

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
    raw = read_image(settings.image, settings.size_mm, settings.pixel_mm)
    rows, samples = settings.rows or Rows(raw.rows), settings.samples or Samples(raw.samples)
    value = np.asarray(raw.value)
    if rows is Rows.TOP_DOWN:
        value = value[::-1]
    if settings.channel is CoolantEnd.LOW:
        value = 1.0 - value
    settings = replace(settings, rows=rows, samples=samples)
    _require_square_pixels(value.shape, settings)
    value, size_mm, cropped = _cropped(value, settings, samples)
    value, size_mm = _mirrored(value, replace(settings, size_mm=size_mm), samples)
    origin = f"{raw.note}; first row at the {'top' if rows is Rows.TOP_DOWN else 'bottom'}, values of {samples.value}"
    found = cropped + _overruled(raw, settings)
    return Density(value, size_mm, samples, settings.seam, raw.source, raw.content, origin, found)


def _overruled(raw: RawImage, settings: LayoutSettings) -> tuple[Notice, ...]:
    """Returns what the file says of itself and the job says otherwise."""
    found = [Notice("image-remark", f"{raw.source}: {text}") for text in raw.remarks]
    said = (("rows", raw.rows, settings.rows), ("samples", raw.samples, settings.samples))
    for key, file_says, used in said:
        if raw.states and used is not None and used.value != file_says:
            found.append(
                Notice(
                    "image-overruled",
                    f'{raw.source} says {key} = "{file_says}" of itself; the job\'s {key} = "{used.value}" is used.',
                )
            )
    if raw.size_units is not None:
        away = max(abs(a / b - 1.0) for a, b in zip(raw.size_units, settings.size_mm, strict=True))
        if away > ASPECT_SLACK:
            width, height = raw.size_units
            found.append(
                Notice(
                    "image-size-differs",
                    f"{raw.source} gives itself a size of {width:.6g} x {height:.6g} without a unit; size_mm = "
                    f"[{settings.size_mm[0]:g}, {settings.size_mm[1]:g}] is used.",
                )
            )
    return tuple(found)


def _cropped(
    value: Floats, settings: LayoutSettings, samples: Samples
) -> tuple[Floats, tuple[float, float], tuple[Notice, ...]]:
    """Returns the cropped values, their size, and a notice when the crop was rounded to whole pixels.

    Raises:
        SettingError: `crop-too-small`, fewer than 8 samples would be left along a side.
    """
    if settings.crop_mm is None:
        return value, settings.size_mm, ()
    pitch_mm = _pitch_mm(value.shape, settings.size_mm, samples)
    (left, bottom, right, top), more = settings.crop_mm, 0 if samples is Samples.CELLS else 1
    spans = [
        (round(low / pitch), round(high / pitch))
        for low, high, pitch in zip((left, bottom), (right, top), pitch_mm, strict=True)
    ]
    (c0, c1), (r0, r1) = spans
    value = value[r0 : r1 + more, c0 : c1 + more]
    size_mm = ((c1 - c0) * pitch_mm[0], (r1 - r0) * pitch_mm[1])
    if min(value.shape) < SMALLEST_SIDE:
        raise SettingError(
            "crop-too-small",
            expected=f"at least {SMALLEST_SIDE} values along each side",
            found=f"{value.shape[1]} x {value.shape[0]} on {right - left:g} x {top - bottom:g} mm",
            where="[layout] crop_mm",
            do="Crop less, or give a finer image.",
        )
    used = (c0 * pitch_mm[0], r0 * pitch_mm[1], c1 * pitch_mm[0], r1 * pitch_mm[1])
    if max(abs(a - b) for a, b in zip(used, settings.crop_mm, strict=True)) <= CROP_SLACK_MM:
        return value, size_mm, ()
    listed = ", ".join(f"{edge:.4f}" for edge in used)
    text = f"crop_mm is rounded to whole pixels: [{listed}] mm; the sheet is {size_mm[0]:.4f} x {size_mm[1]:.4f} mm."
    return value, size_mm, (Notice("crop-rounded", text),)


def _require_square_pixels(shape: tuple[int, ...], settings: LayoutSettings) -> None:
    pitch_x_mm, pitch_y_mm = _pitch_mm(shape, settings.size_mm, settings.samples or Samples.CELLS)
    if abs(pitch_x_mm / pitch_y_mm - 1.0) <= ASPECT_SLACK:
        return
    width_mm, height_mm = settings.size_mm
    right_mm = pitch_x_mm * height_mm / pitch_y_mm
    raise SettingError(
        "aspect-mismatch",
        expected=f"square pixels within 1 % (a width of {width_mm:g} mm asks for a height of {right_mm:.6g} mm)",
        found=f"size_mm = [{width_mm:g}, {height_mm:g}] on {shape[1]} x {shape[0]} values, "
        f"pixels of {pitch_x_mm:.4g} x {pitch_y_mm:.4g} mm",
        where="[layout] size_mm",
        do="Correct size_mm, check that width comes first, or set samples to what the grid holds.",
    )


def _mirrored(value: Floats, settings: LayoutSettings, samples: Samples) -> tuple[Floats, tuple[float, float]]:
    """Returns the doubled layout and its size; a line of nodes on the mirror is not repeated."""
    width_mm, height_mm = settings.size_mm
    if settings.mirror_at is MirrorAt.NONE:
        return value, (width_mm, height_mm)
    axis = 1 if settings.mirror_at in {MirrorAt.LEFT, MirrorAt.RIGHT} else 0
    image_first = settings.mirror_at in {MirrorAt.RIGHT, MirrorAt.TOP}
    other = np.flip(value, axis)
    if samples is Samples.NODES:
        keep = slice(1, None) if image_first else slice(None, -1)
        other = other[:, keep] if axis == 1 else other[keep]
    doubled = np.concatenate([value, other] if image_first else [other, value], axis=axis)
    return doubled, (width_mm * 2, height_mm) if axis == 1 else (width_mm, height_mm * 2)
