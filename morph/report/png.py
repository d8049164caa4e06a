"""A grey picture as PNG bytes, for the page's own use: signature, header, one data chunk, end (PNG, ISO/IEC 15948)."""

from __future__ import annotations

import base64
import struct
import zlib

import numpy as np
from numpy.typing import NDArray

SIGNATURE = b"\x89PNG\r\n\x1a\n"


def _chunk(kind: bytes, content: bytes) -> bytes:
    return struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))


def png_bytes(grey: NDArray[np.uint8]) -> bytes:
    """Returns the picture `grey (rows, columns)`, top row first, as an 8-bit grey PNG."""
    rows, columns = grey.shape
    header = struct.pack(">IIBBBBB", columns, rows, 8, 0, 0, 0, 0)
    unfiltered = np.column_stack([np.zeros(rows, dtype=np.uint8), grey]).tobytes()
    data = zlib.compress(unfiltered, 9)
    return SIGNATURE + _chunk(b"IHDR", header) + _chunk(b"IDAT", data) + _chunk(b"IEND", b"")


def png_address(grey: NDArray[np.uint8]) -> str:
    """Returns the picture as a data address, so that the page needs no second file."""
    return "data:image/png;base64," + base64.b64encode(png_bytes(grey)).decode("ascii")
