"""Checked, read-only copies of arrays: how every record guards what it holds.

A frozen dataclass does not protect the arrays inside it. Each record passes its arrays through
these functions in ``__post_init__``; what comes back is C-contiguous, of one dtype, of the
promised shape, finite, and not writable.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

Shape = Sequence[int | None]


def _require_shape(name: str, array: NDArray[Any], shape: Shape) -> None:
    wrong = array.ndim != len(shape) or any(
        want is not None and want != have for want, have in zip(shape, array.shape, strict=False)
    )
    if wrong:
        wanted = "(" + ", ".join("n" if n is None else str(n) for n in shape) + ")"
        raise ValueError(f"{name}: expected an array of shape {wanted}, found {array.shape}")


def frozen_floats(name: str, value: ArrayLike, shape: Shape) -> Floats:
    """Returns a read-only float64 copy of `value`.

    Args:
        name: what the array is called in a message.
        value: anything numpy reads as numbers.
        shape: the wanted shape; None matches any length of that axis.

    Raises:
        ValueError: the shape differs, or an entry is not finite.
    """
    array = np.array(value, dtype=np.float64, order="C")
    _require_shape(name, array, shape)
    if not np.isfinite(array).all():
        index = tuple(int(i) for i in np.argwhere(~np.isfinite(array))[0])
        raise ValueError(f"{name}: expected finite numbers, found {array[index]} at index {index}")
    array.setflags(write=False)
    return array


def frozen_ints(name: str, value: ArrayLike, shape: Shape, *, below: int | None = None) -> Ints:
    """Returns a read-only int64 copy of `value`, each entry in [0, below) when `below` is given.

    Raises:
        ValueError: the shape differs, or an index is out of range.
    """
    array = np.array(value, dtype=np.int64, order="C")
    _require_shape(name, array, shape)
    if below is not None and array.size and (array.min() < 0 or array.max() >= below):
        raise ValueError(f"{name}: expected indices in [0, {below}), found {array.min()}..{array.max()}")
    array.setflags(write=False)
    return array


def frozen_bools(name: str, value: ArrayLike, shape: Shape) -> Bools:
    """Returns a read-only boolean copy of `value`.

    Raises:
        ValueError: the shape differs.
    """
    array = np.array(value, dtype=np.bool_, order="C")
    _require_shape(name, array, shape)
    array.setflags(write=False)
    return array


def unit_rows(vectors: Floats) -> Floats:
    """Returns `vectors (n, d)` scaled to length 1 row by row; a zero row stays zero."""
    length = np.linalg.norm(vectors, axis=-1, keepdims=True)
    return vectors / np.where(length > 0.0, length, 1.0)
