"""Content hashes of records: the same content gives the same text on every machine.

Used to compare records (``==`` on arrays is ambiguous), to tell which stages must run again, and
to state in summary.json what went in and what came out.
"""

from __future__ import annotations

import dataclasses
import hashlib
import os
import struct
from collections.abc import Mapping
from enum import Enum
from pathlib import Path
from typing import Any

import numpy as np


def _feed(digest: Any, value: Any) -> None:
    if value is None:
        digest.update(b"N")
    elif isinstance(value, bool | int):
        digest.update(b"i" + str(int(value)).encode())
    elif isinstance(value, float):
        digest.update(b"f" + struct.pack("<d", value + 0.0))
    elif isinstance(value, Enum):
        _feed(digest, value.value)
    elif isinstance(value, str):
        digest.update(b"s" + str(len(value)).encode() + b":" + value.encode())
    elif isinstance(value, np.ndarray):
        digest.update(b"a" + str(value.dtype).encode() + str(value.shape).encode())
        digest.update(np.ascontiguousarray(value).tobytes())
    elif isinstance(value, os.PathLike):
        _feed(digest, Path(value).name)
    elif dataclasses.is_dataclass(value) and not isinstance(value, type):
        digest.update(b"d" + type(value).__name__.encode())
        for field in dataclasses.fields(value):
            _feed(digest, getattr(value, field.name))
    elif isinstance(value, Mapping):
        digest.update(b"m")
        for key in sorted(value):
            _feed(digest, key)
            _feed(digest, value[key])
    elif isinstance(value, tuple | list):
        digest.update(b"t" + str(len(value)).encode())
        for item in value:
            _feed(digest, item)
    else:
        raise TypeError(f"no fingerprint for {type(value).__name__}")


def fingerprint(value: Any) -> str:
    """Returns 16 hexadecimal digits that change when the content of `value` changes.

    Args:
        value: a record, array, number, text, enum, tuple, list or mapping of these; a path counts
            by its base name only, so that a job moved to another folder keeps its fingerprint.

    >>> fingerprint((1, "a")) == fingerprint((1, "a"))
    True
    """
    digest = hashlib.sha256()
    _feed(digest, value)
    return digest.hexdigest()[:16]


def file_fingerprint(content: bytes) -> str:
    """Returns 16 hexadecimal digits of the SHA-256 of `content`."""
    return hashlib.sha256(content).hexdigest()[:16]
