"""Numbers as text: the one rule by which every table and JSON file of a build rounds.

Lengths (keys that end in ``_mm``) keep 6 decimals, one nanometre; every other number keeps 9
significant digits. Minus zero is written as zero, and a number that is not finite as null, so that
a file never holds NaN. The text is sorted by key and laid out by one rule: rows of plain numbers
stay on one line.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from enum import Enum
from pathlib import PurePath
from typing import Any

import numpy as np

LENGTH_DECIMALS = 6
SIGNIFICANT_DIGITS = 9
LENGTH_SUFFIX = "_mm"

Plain = None | bool | int | float | str | list[Any] | dict[str, Any]


def rounded(value: float, is_length: bool = False) -> float | None:
    """Returns `value` rounded by the rule, or None when it is not finite.

    >>> rounded(-1e-9, is_length=True), rounded(2 / 3), rounded(math.nan)
    (0.0, 0.666666667, None)
    """
    if not math.isfinite(value):
        return None
    short = round(value, LENGTH_DECIMALS) if is_length else float(f"{value:.{SIGNIFICANT_DIGITS}g}")
    return short + 0.0


def plain(value: Any, is_length: bool = False) -> Plain:
    """Returns `value` as JSON types with every number rounded.

    Args:
        value: None, numbers, text, enums, paths (their base name), arrays, sequences and mappings.
        is_length: whether bare numbers in `value` are lengths in mm; a mapping decides it anew for
            each key that ends in ``_mm`` and passes it on to what lies below.

    Raises:
        TypeError: `value` holds something else.
    """
    if isinstance(value, Enum):
        return plain(value.value, is_length)
    if value is None or isinstance(value, str | bool | np.bool_):
        return bool(value) if isinstance(value, np.bool_) else value
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return rounded(float(value), is_length)
    if isinstance(value, PurePath):
        return value.name
    if isinstance(value, np.ndarray):
        return plain(value.tolist(), is_length)
    if isinstance(value, Mapping):
        return {str(k): plain(v, is_length or str(k).endswith(LENGTH_SUFFIX)) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item, is_length) for item in value]
    raise TypeError(f"no JSON form for {type(value).__name__}")


def _is_row(value: Plain) -> bool:
    if isinstance(value, list):
        return all(_is_row(item) for item in value)
    return not isinstance(value, dict)


def _laid_out(value: Plain, indent: str) -> str:
    if _is_row(value):
        return json.dumps(value, ensure_ascii=False, allow_nan=False)
    inner = indent + "  "
    if isinstance(value, dict):
        rows = [f"{json.dumps(k, ensure_ascii=False)}: {_laid_out(value[k], inner)}" for k in sorted(value)]
        return "{" + ",".join(f"\n{inner}{row}" for row in rows) + (f"\n{indent}" if rows else "") + "}"
    assert isinstance(value, list)
    return "[" + ",".join(f"\n{inner}{_laid_out(item, inner)}" for item in value) + f"\n{indent}]"


def json_bytes(value: Any) -> bytes:
    """Returns `value` as UTF-8 JSON: keys sorted, numbers rounded by the rule, NaN as null, a line feed at the end."""
    return (_laid_out(plain(value), "") + "\n").encode("utf-8")
