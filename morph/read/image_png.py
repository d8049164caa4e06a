"""PNG images of grey values, 8 or 16 bits, with or without an opaque alpha."""

from __future__ import annotations

import io
import struct
import zlib
from typing import Any

import numpy as np
from numpy.typing import NDArray

from morph.core.errors import InputError
from morph.read.image_fault import Decoded, damaged, not_its_kind, require_shape

PNG_MAGIC = b"\x89PNG\r\n\x1a\n"


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
        raise not_its_kind(".png", name)
    if len(content) < 33 or content[12:16] != b"IHDR":
        raise damaged("a complete PNG header", f"{len(content)} bytes", name)
    columns, rows, bits, colour = struct.unpack(">IIBB", content[16:26])
    require_shape((rows, columns), name)
    if colour == 3:
        raise _png_refused("grey values", "a colour table (palette)", name)
    if colour not in {0, 2, 4, 6}:
        raise damaged("a PNG colour type 0, 2, 4 or 6", f"type {colour}", name)
    if bits not in {8, 16}:
        raise _png_refused("8 or 16 bits per value", f"{bits} bits", name)
    if bits == 16 and colour in {2, 6}:
        raise _png_refused("8 bits per value in an image with colour", "16 bits", name)


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
        raise damaged("a complete PNG file", "broken image data", name) from error
    if have < wanted:
        raise damaged(f"{wanted} bytes of image data, as its header says", f"{have} bytes", name)


def read_png(content: bytes, name: str) -> Decoded:
    """Returns the grey values of a PNG, value / largest value, no gamma.

    Raises:
        InputError: no PNG, damaged, of a kind that is not read without loss, coloured or transparent.
    """
    _require_png_header(content, name)
    _require_png_data(content, name)
    bits, colour = content[24], content[25]
    value = _grey_and_alpha_16(content, name) if (bits, colour) == (16, 4) else _decode(content, name)
    return Decoded(
        value, f"PNG of {value.shape[1]} x {value.shape[0]} pixels, {bits} bits, linear values without gamma"
    )


def _grey_and_alpha_16(content: bytes, name: str) -> NDArray[Any]:
    """Returns a PNG of 16-bit grey and alpha, which the decoder would cut to 8 bits.

    Its pixels have four bytes as those of an 8-bit colour image with alpha have, and PNG filters work on bytes
    (ISO/IEC 15948, clause 9.2); so it is decoded as one, and the bytes are put together.
    """
    header = content[12:24] + bytes([8, 6]) + content[26:29]
    renamed = content[:12] + header + struct.pack(">I", zlib.crc32(header)) + content[33:]
    four = _pixels(renamed, name)[0]
    pair = np.ascontiguousarray(four).view(">u2").reshape(*four.shape[:2], 2)
    return grey_of(pair, False, name)


def _decode(content: bytes, name: str) -> NDArray[Any]:
    return grey_of(*_pixels(content, name), name)


def _pixels(content: bytes, name: str) -> tuple[NDArray[Any], bool]:
    """Returns the pixels, and whether a value is declared transparent."""
    from PIL import Image

    try:
        with Image.open(io.BytesIO(content), formats=["PNG"]) as image:
            image.load()
            transparent_value = image.info.get("transparency") is not None
            value = np.asarray(image)
    except (OSError, SyntaxError, ValueError, EOFError, struct.error, Image.DecompressionBombError) as error:
        raise damaged("a complete PNG file", "missing or broken data", name) from error
    return value, transparent_value


def grey_of(value: NDArray[Any], transparent_value: bool, name: str) -> NDArray[Any]:
    """Returns `value (rows, columns[, bands])` of 8- or 16-bit pixels as (rows, columns) in 0..1."""
    full = 65535.0 if value.dtype.itemsize > 1 else 255.0
    bands = value.reshape(value.shape[0], value.shape[1], -1)
    n_bands = bands.shape[2]
    if transparent_value or (n_bands in {2, 4} and bands[:, :, -1].min() < full):
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
