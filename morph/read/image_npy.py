"""numpy's own files: .npy, and .npz archives of them; pickles are never opened."""

from __future__ import annotations

import io
import tokenize
import zipfile
import zlib
from typing import Any

import numpy as np
from numpy.typing import NDArray

from morph.core.errors import InputError
from morph.read.image_fault import LARGEST_SIDE, Decoded, damaged, not_its_kind, require_shape, too_large

NPY_MAGIC = b"\x93NUMPY"
LARGEST_ARRAY_BYTES = LARGEST_SIDE * LARGEST_SIDE * 16 + 4096
MOST_MEMBERS = 1000
NAMES = ("density", "rho", "x", "value", "arr_0")
"""Of several flat arrays in an archive, the first of these names is the density."""


def read_npy(content: bytes, name: str) -> Decoded:
    """Returns the values of a .npy file."""
    value = decode_npy(content, name)
    return Decoded(value, f".npy array of {value.shape[1]} x {value.shape[0]} values ({value.dtype})")


def decode_npy(content: bytes, name: str) -> NDArray[Any]:
    """Returns the array of a .npy file; its size is held against its header before it is taken.

    Raises:
        InputError: no .npy file, damaged, pickled, not numbers, not flat, or out of bounds.
    """
    if not content.startswith(NPY_MAGIC):
        raise not_its_kind(".npy", name)
    stream = io.BytesIO(content)
    try:
        version = np.lib.format.read_magic(stream)
        if version == (1, 0):
            shape, by_column, dtype = np.lib.format.read_array_header_1_0(stream)
        else:
            shape, by_column, dtype = np.lib.format.read_array_header_2_0(stream)
    except (ValueError, EOFError, SyntaxError, TypeError, MemoryError, RecursionError, tokenize.TokenError) as error:
        raise damaged("a readable .npy header", "a header that makes no sense", name) from error
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
    require_shape(shape, name)
    wanted = shape[0] * shape[1] * dtype.itemsize
    have = len(content) - stream.tell()
    if have != wanted:
        raise damaged(f"{wanted} bytes of values, as its header says", f"{have} bytes", name)
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


def read_npz(content: bytes, name: str) -> Decoded:
    """Returns the density of a .npz archive: its only flat array, or the one with a usual name.

    Raises:
        InputError: no archive, damaged, no such array or several, or the array is refused.
    """
    if not content.startswith(b"PK"):
        raise not_its_kind(".npz", name)
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as archive:
            members = [item for item in archive.infolist() if item.filename.endswith(".npy")]
            if len(members) > MOST_MEMBERS:
                raise damaged(f"at most {MOST_MEMBERS} arrays", f"{len(members)} arrays", name)
            chosen = _choose(archive, members, name)
            value = decode_npy(_unpacked(archive, chosen, LARGEST_ARRAY_BYTES, name), name)
    except (zipfile.BadZipFile, zlib.error, OSError, EOFError, NotImplementedError, RuntimeError, ValueError) as error:
        raise damaged("a complete .npz archive", "broken or encrypted data", name) from error
    key = chosen.filename.removesuffix(".npy")
    return Decoded(value, f'.npz array "{key}" of {value.shape[1]} x {value.shape[0]} values ({value.dtype})')


def _unpacked(archive: zipfile.ZipFile, item: zipfile.ZipInfo, most: int, name: str) -> bytes:
    """Returns the bytes of a member; one that unpacks to more than it or the bound says is refused."""
    if item.file_size > most:
        raise too_large(f"an array of {item.file_size / 1e6:.0f} MB", name)
    with archive.open(item) as stream:
        content = stream.read(item.file_size + 1)
    if len(content) != item.file_size:
        raise damaged(f"{item.file_size} bytes, as the archive says", f"{len(content)} bytes", name)
    return content


def _choose(archive: zipfile.ZipFile, members: list[zipfile.ZipInfo], name: str) -> zipfile.ZipInfo:
    flat = []
    for item in members:
        with archive.open(item) as stream:
            head = stream.read(4096)
        if _axes(head) == 2:
            flat.append(item)
    by_name = {item.filename.removesuffix(".npy"): item for item in flat}
    usual = [by_name[key] for key in NAMES if key in by_name]
    if len(flat) == 1:
        return flat[0]
    if usual:
        return usual[0]
    listed = ", ".join(sorted(item.filename.removesuffix(".npy")[:40] for item in members)[:8]) or "nothing"
    raise InputError(
        "image-array-choice",
        expected=f"one array of two axes, or one called {', '.join(NAMES[:2])}",
        found=f"{len(flat)} of them (in all: {listed})",
        where=name,
        do="Save the density alone, or as numpy.savez(file, density=...).",
    )


def _axes(head: bytes) -> int | None:
    """Returns the number of axes that a .npy header declares, None when it cannot be read."""
    try:
        stream = io.BytesIO(head)
        version = np.lib.format.read_magic(stream)
        read = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
        return len(read(stream)[0])
    except (ValueError, EOFError, SyntaxError, TypeError, MemoryError, RecursionError, tokenize.TokenError):
        return None
