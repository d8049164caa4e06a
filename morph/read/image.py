"""The density image as it lies in its file: .npy and .png, every byte suspect until checked.

Sizes are predicted from the header and held against the file's real length before anything is
allocated; pickles are never opened. Values come out as they lie, 0..1, first row first: where that
row lies on the sheet and which end of the scale is coolant is settled by the layout stage.
"""

from __future__ import annotations

import io
import struct
import tokenize
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import InputError
from morph.core.fingerprint import file_fingerprint

LARGEST_SIDE = 8192
SMALLEST_SIDE = 8
RANGE_SLACK = 1e-6
LARGEST_FILE_BYTES = LARGEST_SIDE * LARGEST_SIDE * 16 + 4096
NOT_AVAILABLE = (".npz", ".tif", ".tiff", ".csv", ".vti")
PNG_MAGIC = b"\x89PNG\r\n\x1a\n"
NPY_MAGIC = b"\x93NUMPY"


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
    """

    value: Floats
    source: str
    content: str
    note: str = ""
    rows: str = "top-down"
    samples: str = "cells"
    states: bool = False
    size_units: tuple[float, float] | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "value", frozen_floats("value", self.value, (None, None)))


def read_image(path: Path, size_mm: tuple[float, float] | None = None, pixel_mm: float | None = None) -> RawImage:
    """Returns the density image in the file `path`.

    Args:
        path: a .npy file of real numbers 0..1 (or bool), or a .png of grey values of 8 or 16 bits,
            taken as linear: value / largest value, no gamma.

    Raises:
        InputError: the file is missing, not what its name says, damaged, too large, or its values
            are not a density.
    """
    kind = path.suffix.lower()
    if kind in NOT_AVAILABLE:
        raise InputError(
            "format-not-available",
            expected="a .npy or .png image",
            found=f"a {kind} file",
            where=path.name,
            do="Reading this format is not available yet; save the density as .npy (values 0..1) or 16-bit grey .png.",
        )
    if kind not in {".npy", ".png"}:
        raise InputError(
            "image-format-unknown",
            expected="a .npy or .png image",
            found=f"the extension {kind or '(none)'}",
            where=path.name,
            do="Save the density as .npy (values 0..1) or 16-bit grey .png.",
        )
    content = _read_bytes(path)
    raw = _decode_npy(content, path.name) if kind == ".npy" else _decode_png(content, path.name)
    return RawImage(_checked(raw, path.name), path.name, file_fingerprint(content))


def _read_bytes(path: Path) -> bytes:
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
        if size > LARGEST_FILE_BYTES:
            raise _too_large(f"a file of {size / 1e6:.0f} MB", name)
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


def _too_large(found: str, name: str) -> InputError:
    return InputError(
        "image-too-large",
        expected=f"at most {LARGEST_SIDE} x {LARGEST_SIDE} values",
        found=found,
        where=name,
        do="Reduce the image; 8 pixels across the narrowest channel are enough.",
    )


def _damaged(expected: str, found: str, name: str) -> InputError:
    return InputError(
        "image-damaged",
        expected=expected,
        found=found,
        where=name,
        do="Export the image again; this copy was cut off or altered.",
    )


def _not_what_it_says(kind: str, name: str) -> InputError:
    return InputError(
        "image-not-its-kind",
        expected=f"the content of a {kind} file",
        found="other bytes at its start",
        where=name,
        do=f"Save the image as {kind}; renaming a file does not convert it.",
    )


def _require_shape(shape: tuple[int, ...], name: str) -> None:
    if len(shape) != 2:
        raise InputError(
            "image-not-flat",
            expected="an array of two axes (rows, columns)",
            found=f"{len(shape)} axes, shape {shape}",
            where=name,
            do="Save one flat slice of the density.",
        )
    if max(shape) > LARGEST_SIDE:
        raise _too_large(f"{shape[0]} x {shape[1]} values", name)
    if min(shape) < SMALLEST_SIDE:
        raise InputError(
            "image-too-small",
            expected=f"at least {SMALLEST_SIDE} values along each side",
            found=f"{shape[0]} x {shape[1]}",
            where=name,
            do="Give the optimiser's full grid.",
        )


def _decode_npy(content: bytes, name: str) -> NDArray[Any]:
    if not content.startswith(NPY_MAGIC):
        raise _not_what_it_says(".npy", name)
    stream = io.BytesIO(content)
    try:
        version = np.lib.format.read_magic(stream)
        if version == (1, 0):
            shape, by_column, dtype = np.lib.format.read_array_header_1_0(stream)
        else:
            shape, by_column, dtype = np.lib.format.read_array_header_2_0(stream)
    except (ValueError, EOFError, SyntaxError, TypeError, MemoryError, RecursionError, tokenize.TokenError) as error:
        raise _damaged("a readable .npy header", "a header that makes no sense", name) from error
    if dtype.hasobject:
        raise InputError(
            "image-pickled",
            expected="plain numbers",
            found="an array of pickled objects",
            where=name,
            do="Save the density as a float array: numpy.save(file, density.astype(float)).",
        )
    if dtype.kind not in "bfiu":
        raise InputError(
            "image-not-numbers",
            expected="real numbers or bool",
            found=f"values of type {dtype}",
            where=name,
            do="Save the density alone as a float array.",
        )
    _require_shape(shape, name)
    wanted = shape[0] * shape[1] * dtype.itemsize
    have = len(content) - stream.tell()
    if have != wanted:
        raise _damaged(f"{wanted} bytes of values, as its header says", f"{have} bytes", name)
    flat = np.frombuffer(content, dtype=dtype, offset=stream.tell())
    value: NDArray[Any] = flat.reshape(shape, order="F" if by_column else "C")
    if dtype.kind in "iu" and (value.min() < 0 or value.max() > 1):
        raise InputError(
            "image-integers",
            expected="values 0..1",
            found=f"integers {value.min()}..{value.max()}",
            where=name,
            do="Divide by the full scale (255 or 65535) before saving, so that 0..1 is what the optimiser meant.",
        )
    return value


def _png_refused(expected: str, found: str, name: str) -> InputError:
    return InputError(
        "image-png-kind",
        expected=expected,
        found=found,
        where=name,
        do="Save it as 8- or 16-bit grey without colour table.",
    )


def _require_png_header(content: bytes, name: str) -> None:
    """Raises unless the first chunk is an IHDR of a kind that is read without loss and within bounds."""
    if not content.startswith(PNG_MAGIC):
        raise _not_what_it_says(".png", name)
    if len(content) < 33 or content[12:16] != b"IHDR":
        raise _damaged("a complete PNG header", f"{len(content)} bytes", name)
    columns, rows, bits, colour = struct.unpack(">IIBB", content[16:26])
    _require_shape((rows, columns), name)
    if colour == 3:
        raise _png_refused("grey values", "a colour table (palette)", name)
    if colour not in {0, 2, 4, 6}:
        raise _damaged("a PNG colour type 0, 2, 4 or 6", f"type {colour}", name)
    if bits not in {8, 16}:
        raise _png_refused("8 or 16 bits per value", f"{bits} bits", name)
    if bits == 16 and colour != 0:
        raise _png_refused("8 bits per value in an image with colour or alpha", "16 bits", name)


def _png_scanline_bytes(content: bytes) -> int:
    """Returns how many bytes of filtered scanlines a PNG of this header holds, interlaced or not."""
    columns, rows, bits, colour = struct.unpack(">IIBB", content[16:26])
    pixel_bits = bits * {0: 1, 2: 3, 4: 2, 6: 4}[colour]
    passes = [(0, 0, 1, 1)]
    if content[28] == 1:  # Adam7: first column, first row, column step, row step of each pass
        passes = [(0, 0, 8, 8), (4, 0, 8, 8), (0, 4, 4, 8), (2, 0, 4, 4), (0, 2, 2, 4), (1, 0, 2, 2), (0, 1, 1, 2)]
    total = 0
    for first_column, first_row, column_step, row_step in passes:
        width, height = len(range(first_column, columns, column_step)), len(range(first_row, rows, row_step))
        total += height * (1 + (width * pixel_bits + 7) // 8) if width else 0
    return total


def _require_png_data(content: bytes, name: str) -> None:
    """Raises unless the image data unpack to all scanlines the header promises; a decoder fills up silently."""
    wanted, have, at = _png_scanline_bytes(content), 0, len(PNG_MAGIC)
    unpacker = zlib.decompressobj()
    try:
        while at + 8 <= len(content) and have < wanted:
            length, kind = struct.unpack(">I4s", content[at : at + 8])
            if kind == b"IDAT":
                have += len(unpacker.decompress(content[at + 8 : at + 8 + length], wanted + 1 - have))
            at += 12 + length
    except zlib.error as error:
        raise _damaged("a complete PNG file", "broken image data", name) from error
    if have < wanted:
        raise _damaged(f"{wanted} bytes of image data, as its header says", f"{have} bytes", name)


def _decode_png(content: bytes, name: str) -> NDArray[Any]:
    _require_png_header(content, name)
    _require_png_data(content, name)
    from PIL import Image

    try:
        with Image.open(io.BytesIO(content), formats=["PNG"]) as image:
            image.load()
            transparent_value = image.info.get("transparency") is not None
            value = np.asarray(image)
    except (OSError, SyntaxError, ValueError, EOFError, struct.error, Image.DecompressionBombError) as error:
        raise _damaged("a complete PNG file", "missing or broken data", name) from error
    return _grey_of(value, transparent_value, name)


def _grey_of(value: NDArray[Any], transparent_value: bool, name: str) -> NDArray[Any]:
    """Returns `value (rows, columns[, bands])` of 8- or 16-bit pixels as (rows, columns) in 0..1."""
    full = 65535.0 if value.dtype.itemsize > 1 else 255.0
    bands = value.reshape(value.shape[0], value.shape[1], -1)
    n_bands = bands.shape[2]
    if transparent_value or (n_bands in {2, 4} and bands[:, :, -1].min() < 255):
        raise InputError(
            "image-transparent",
            expected="an opaque image",
            found="transparent pixels",
            where=name,
            do="Flatten the image: a transparent pixel has no density.",
        )
    if n_bands >= 3 and np.any(bands[:, :, :3] != bands[:, :, :1]):
        row, column = (int(i) for i in np.argwhere((bands[:, :, :3] != bands[:, :, :1]).any(axis=2))[0])
        raise InputError(
            "image-coloured",
            expected="grey pixels",
            found=f"a coloured pixel in row {row}, column {column}",
            where=name,
            do="Save the density itself, not a colour map of it.",
        )
    return bands[:, :, 0].astype(np.float64) / full


def _checked(raw: NDArray[Any], name: str) -> Floats:
    """Returns `raw` as float64 clipped to [0, 1] after its values are found to be a density."""
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
