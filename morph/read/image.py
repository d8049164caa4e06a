"""The density image as it lies in its file, every byte suspect until checked.

Sizes are predicted from the header and held against the file's real length before anything is
allocated. Values come out as they lie, 0..1, first row first: where that row lies on the sheet and which
end of the scale is coolant is settled by the layout stage.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import InputError
from morph.core.fingerprint import file_fingerprint
from morph.read.image_fault import LARGEST_SIDE, SMALLEST_SIDE, Decoded, too_large

__all__ = ["SMALLEST_SIDE", "RawImage", "read_image"]

RANGE_SLACK = 1e-6
LARGEST_FILE_BYTES = LARGEST_SIDE * LARGEST_SIDE * 16 + 4096
LARGEST_DRAWING_BYTES = 50_000_000
IMAGES = (".npy", ".npz", ".png", ".tif", ".tiff", ".csv", ".vti")
DRAWINGS = (".dxf", ".svg")


@dataclass(frozen=True, slots=True, eq=False)
class RawImage:
    """A density image as it lies in its file.

    Args:
        value: (rows, columns) 0..1, first row of the file first, each side at least 8.
        source: base name of the file. content: fingerprint of the file's bytes.
        note: format and grid as words, for the report.
        rows: where the first row lies by the format's own convention ("top-down" or "bottom-up").
        samples: what a value stands for ("cells" or "nodes").
        states: the file itself says so; else the job does.
        size_units: width and height the file gives itself, without a unit; None when it gives none.
        remarks: what was left out or assumed, as sentences.
    """

    value: Floats
    source: str
    content: str
    note: str = ""
    rows: str = "top-down"
    samples: str = "cells"
    states: bool = False
    size_units: tuple[float, float] | None = None
    remarks: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        object.__setattr__(self, "value", frozen_floats("value", self.value, (None, None)))


def read_image(path: Path, size_mm: tuple[float, float] | None = None, pixel_mm: float | None = None) -> RawImage:
    """Returns the density image in the file `path`.

    Args:
        path: an image (.npy, .npz, .png, .tif, .csv, .vti) of values 0..1, or of grey pixels taken as linear
            (value / largest value, no gamma); or an outline drawing (.dxf, .svg) of channels.
        size_mm: width and height of the sheet; an outline drawing is filled on it.
        pixel_mm: of the grid an outline drawing is filled on; None: a tenth of its mean channel width.

    Raises:
        InputError: the file is missing, not what its name says, damaged, too large, or its values
            are not a density.
    """
    kind = path.suffix.lower()
    if kind not in IMAGES + DRAWINGS:
        raise InputError(
            "image-format-unknown",
            expected="an image (.npy .npz .png .tif .csv .vti) or an outline drawing (.dxf .svg)",
            found=f"the extension {kind or '(none)'}",
            where=path.name,
            do="Save the density as .npy (values 0..1) or 16-bit grey .png.",
        )
    content = _read_bytes(path, LARGEST_DRAWING_BYTES if kind in DRAWINGS else LARGEST_FILE_BYTES)
    raw = _decoded(kind, content, path.name, size_mm, pixel_mm)
    facts = (raw.note, raw.rows, raw.samples, raw.states, raw.size_units, raw.remarks)
    return RawImage(_checked(raw.value, path.name), path.name, file_fingerprint(content), *facts)


def _decoded(
    kind: str, content: bytes, name: str, size_mm: tuple[float, float] | None, pixel_mm: float | None
) -> Decoded:
    """Returns what the reader of `kind` finds; each reader is loaded only when it is needed."""
    if kind in DRAWINGS:
        return _filled(kind, content, name, size_mm, pixel_mm)
    if kind in {".npy", ".npz"}:
        from morph.read.image_npy import read_npy, read_npz

        return read_npy(content, name) if kind == ".npy" else read_npz(content, name)
    if kind == ".png":
        from morph.read.image_png import read_png

        return read_png(content, name)
    if kind == ".csv":
        from morph.read.image_table import read_table

        return read_table(content, name)
    if kind == ".vti":
        from morph.read.image_vti import read_vti

        return read_vti(content, name)
    from morph.read.image_tiff import read_tiff

    return read_tiff(content, name)


def _filled(
    kind: str, content: bytes, name: str, size_mm: tuple[float, float] | None, pixel_mm: float | None
) -> Decoded:
    """Returns the density of an outline drawing on the sheet.

    Raises:
        InputError: `outline-needs-size` without a sheet, or the drawing is refused.
    """
    if size_mm is None:
        raise InputError(
            "outline-needs-size",
            expected="the sheet's size beside an outline drawing",
            found="none",
            where=name,
            do="Give size_mm (width and height of the sheet in mm); the drawing's own numbers are mm.",
        )
    from morph.read.outline import fill_outlines

    if kind == ".dxf":
        from morph.read.outline_dxf import read_dxf

        return fill_outlines(read_dxf(content, name), size_mm, pixel_mm, name)
    from morph.read.outline_svg import read_svg

    return fill_outlines(read_svg(content, name), size_mm, pixel_mm, name)


def _read_bytes(path: Path, most_bytes: int) -> bytes:
    name = path.name
    if path.is_dir():
        raise InputError(
            "image-is-folder", expected="a file", found="a folder", where=name, do="Name the image file inside it."
        )
    if not path.exists():
        raise InputError(
            "image-missing",
            expected="an existing file",
            found="no such file",
            where=name,
            do="Check the name; it is taken relative to the job file.",
        )
    if not path.is_file():
        raise InputError(
            "image-unreadable",
            expected="a regular file",
            found="a pipe or device",
            where=name,
            do="Copy the image into a file.",
        )
    try:
        size = path.stat().st_size
        if size > most_bytes:
            raise too_large(f"a file of {size / 1e6:.0f} MB", name)
        content = path.read_bytes()
    except OSError as error:
        raise InputError(
            "image-unreadable",
            expected="a readable file",
            found=f"the system said: {error.strerror}",
            where=name,
            do="Check the file's permissions.",
        ) from error
    if not content:
        raise InputError(
            "image-empty",
            expected="an image",
            found="a file of 0 bytes",
            where=name,
            do="Export the image again; the writing may have been cut off.",
        )
    return content


def _checked(raw: NDArray[Any], name: str) -> Floats:
    """Returns `raw` as float64 clipped to [0, 1] after its values are found to be a density."""
    with np.errstate(invalid="ignore"):  # a signalling NaN is caught below
        value = raw.astype(np.float64)
    bad = ~np.isfinite(value)
    if bad.any():
        row, column = (int(i) for i in np.argwhere(bad)[0])
        raise InputError(
            "image-not-finite",
            expected="finite numbers",
            found=f"{value[row, column]} in row {row}, column {column} ({int(bad.sum())} such values)",
            where=name,
            do="Replace undefined values by 0 (metal) or the value meant.",
        )
    low, high = float(value.min()), float(value.max())
    if low < -RANGE_SLACK or high > 1.0 + RANGE_SLACK:
        raise InputError(
            "image-out-of-range",
            expected="values within 0..1",
            found=f"values from {low:.9g} to {high:.9g}",
            where=name,
            do="Scale the density to 0..1 before saving; morph does not guess a scale.",
        )
    if high - low < RANGE_SLACK:
        raise InputError(
            "image-constant",
            expected="channels and metal",
            found=f"the same value {low:.6g} everywhere",
            where=name,
            do="Check that the right field was exported.",
        )
    return np.clip(value, 0.0, 1.0)
