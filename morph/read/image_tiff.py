"""TIFF images of one page of grey values: 8 or 16 bits, or floating point 0..1."""

from __future__ import annotations

import io
import struct
import warnings
from typing import Any

import numpy as np
from numpy.typing import NDArray

from morph.core.errors import InputError
from morph.read.image_fault import Decoded, damaged, not_its_kind, require_shape, too_large
from morph.read.image_png import grey_of

MAGIC = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
GREY_MODES = ("L", "LA", "RGB", "RGBA", "I;16", "I;16L", "I;16B", "F", "I")
ORIENTATION, BITS, PHOTOMETRIC, OFFSETS, COUNTS, TILE_OFFSETS, TILE_COUNTS = 274, 258, 262, 273, 279, 324, 325
WIDTH, HEIGHT, COMPRESSION, SAMPLES, FORMAT = 256, 257, 259, 277, 339
UPRIGHT, WHITE_IS_ZERO, FLOATING = 1, 0, 3
MOST_STRIPS = 100_000


def read_tiff(content: bytes, name: str) -> Decoded:
    """Returns the grey values of a TIFF: pixels / largest value, or floating-point numbers as they are.

    Raises:
        InputError: no TIFF, damaged, several pages, or of a kind that is not read without loss.
    """
    from PIL import Image

    if not content.startswith(MAGIC):
        raise not_its_kind(".tif", name)
    doubles = _read_doubles(content, name)
    if doubles is not None:
        grid = f"TIFF of {doubles.shape[1]} x {doubles.shape[0]} pixels"
        return Decoded(doubles, f"{grid}, 64-bit floating point, values as they are")
    try:
        with warnings.catch_warnings(action="ignore"), Image.open(io.BytesIO(content), formats=["TIFF"]) as image:
            require_shape((image.height, image.width), name)
            tags = {key: _numbers(image, key) for key in (BITS, ORIENTATION, PHOTOMETRIC)}
            _require_kind(image.mode, tags, name)
            _require_data(image, len(content), name)
            _require_one_page(image, name)
            image.load()
            mode, value = image.mode, np.asarray(image)
    except InputError:
        raise
    except Image.DecompressionBombError as error:
        raise too_large("a header that claims hundreds of millions of pixels", name) from error
    except (MemoryError, *_FAULTS) as error:
        raise damaged("a complete TIFF file", "missing or broken data", name) from error
    if value.shape[:2] != (image.height, image.width):
        raise damaged("one grey value per pixel", f"data of shape {value.shape}", name)
    grid = f"TIFF of {image.width} x {image.height} pixels"
    if mode == "F":
        return Decoded(value, f"{grid}, floating point, values as they are")
    if mode == "I":
        return Decoded(_plain_integers(value, name), f"{grid}, whole numbers")
    bits = max(tags[BITS] or (8,))
    return Decoded(grey_of(value, False, name), f"{grid}, {bits} bits, linear values without gamma")


def _read_doubles(content: bytes, name: str) -> NDArray[Any] | None:
    """Returns the values of one plain page of 64-bit floating point, which the decoder does not know, else None.

    The first directory is read by the TIFF 6.0 specification, section 2: entries of tag, type, count, value.
    """
    order = "<" if content[:2] == b"II" else ">"
    try:
        (at,) = struct.unpack_from(f"{order}I", content, 4)
        (n_entries,) = struct.unpack_from(f"{order}H", content, at)
        tags: dict[int, tuple[int, ...]] = {}
        for entry in range(n_entries):
            tag, kind, count = struct.unpack_from(f"{order}HHI", content, at + 2 + 12 * entry)
            letter, width = {3: ("H", 2), 4: ("I", 4)}.get(kind, ("", 0))
            if letter and count <= MOST_STRIPS:
                place = at + 10 + 12 * entry
                if count * width > 4:
                    (place,) = struct.unpack_from(f"{order}I", content, place)
                tags[tag] = struct.unpack_from(f"{order}{count}{letter}", content, place)
        columns, rows = tags[WIDTH][0], tags[HEIGHT][0]
        (next_page,) = struct.unpack_from(f"{order}I", content, at + 2 + 12 * n_entries)
    except (struct.error, KeyError, IndexError):
        return None
    plain = tags.get(COMPRESSION, (1,)) == (1,) and tags.get(SAMPLES, (1,)) == (1,) and next_page == 0
    if content[2:4] not in {b"*\0", b"\0*"} or tags.get(BITS) != (64,) or tags.get(FORMAT) != (FLOATING,) or not plain:
        return None
    require_shape((rows, columns), name)
    if tags.get(ORIENTATION, (UPRIGHT,)) != (UPRIGHT,):
        raise _refuse("an upright image", f"orientation {tags[ORIENTATION][0]}", name)
    offsets, counts = tags.get(OFFSETS, ()), tags.get(COUNTS, ())
    data = b"".join(content[offset : offset + count] for offset, count in zip(offsets, counts, strict=False))
    if len(data) != 8 * rows * columns:
        raise damaged(f"{8 * rows * columns} bytes of values, as its header says", f"{len(data)} bytes", name)
    return np.frombuffer(data, dtype=f"{order}f8").reshape(rows, columns)


_FAULTS = (
    OSError, SyntaxError, ValueError, EOFError, KeyError, IndexError, TypeError, OverflowError, RuntimeError,
    AttributeError, ZeroDivisionError, struct.error,
)  # fmt: skip
"""What the decoder raises on hostile bytes."""


def _numbers(image: Any, tag: int) -> tuple[int, ...]:
    """Returns the whole numbers of a tag, none when it is absent."""
    value = image.tag_v2.get(tag, ())
    items = value if isinstance(value, tuple) else (value,)
    return tuple(int(item) for item in items)


def _refuse(expected: str, found: str, name: str) -> InputError:
    return InputError(
        "image-tiff-kind",
        expected=expected,
        found=found,
        where=name,
        do="Save it as one page of 8- or 16-bit grey, or 32-bit floating point 0..1, upright.",
    )


def _require_kind(mode: str, tags: dict[int, tuple[int, ...]], name: str) -> None:
    if mode not in GREY_MODES:
        raise _refuse("grey values", f"pixels of kind {mode}", name)
    bits = set(tags[BITS]) or {1}
    if not bits <= {8, 16, 32, 64}:
        raise _refuse("8, 16, 32 or 64 bits per value", f"{max(bits)} bits", name)
    if (tags[ORIENTATION] or (UPRIGHT,)) != (UPRIGHT,):
        raise _refuse("an upright image", f"orientation {tags[ORIENTATION][0]}", name)
    if tags[PHOTOMETRIC] == (WHITE_IS_ZERO,) and mode != "L":
        raise _refuse("black as zero", "white as zero", name)


def _require_data(image: Any, n_bytes: int, name: str) -> None:
    """Raises unless every strip or tile lies within the file."""
    for offsets, counts in ((OFFSETS, COUNTS), (TILE_OFFSETS, TILE_COUNTS)):
        for offset, count in zip(_numbers(image, offsets), _numbers(image, counts), strict=True):
            if offset + count > n_bytes:
                raise damaged(f"{offset + count} bytes, as its header says", f"{n_bytes} bytes", name)


def _require_one_page(image: Any, name: str) -> None:
    try:
        image.seek(1)
    except EOFError:
        image.seek(0)
        return
    raise _refuse("one page", "several pages", name)


def _plain_integers(value: NDArray[Any], name: str) -> NDArray[Any]:
    if value.min() < 0 or value.max() > 1:
        raise _refuse("8- or 16-bit grey, or floating point", f"integers {value.min()}..{value.max()}", name)
    return value
