"""What may be wrong with the bytes of any image, the bounds all readers share, and what a reader hands back."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from numpy.typing import NDArray

from morph.core.errors import InputError

LARGEST_SIDE = 8192
SMALLEST_SIDE = 8


@dataclass(frozen=True, slots=True, eq=False)
class Decoded:
    """Values as they lie in a file, before they are checked.

    Args:
        value: (rows, columns) numbers, first row of the file first.
        note: format and grid as words.
        rows: where the first row lies by the format's convention, "top-down" or "bottom-up".
        samples: what a value stands for, "cells" or "nodes".
        states: the file itself says where its rows lie and what its values stand for.
        size_units: width and height that the file gives itself, None when it gives none.
        remarks: what was left out or assumed, as sentences.
    """

    value: NDArray[Any]
    note: str
    rows: str = "top-down"
    samples: str = "cells"
    states: bool = False
    size_units: tuple[float, float] | None = None
    remarks: tuple[str, ...] = ()


def too_large(found: str, name: str) -> InputError:
    """Returns the error for an image larger than morph reads."""
    return InputError(
        "image-too-large",
        expected=f"at most {LARGEST_SIDE} x {LARGEST_SIDE} values",
        found=found,
        where=name,
        do="Reduce the image; 8 pixels across the narrowest channel are enough.",
    )


def damaged(expected: str, found: str, name: str) -> InputError:
    """Returns the error for content that is cut off or altered."""
    return InputError(
        "image-damaged",
        expected=expected,
        found=found,
        where=name,
        do="Export the image again; this copy was cut off or altered.",
    )


def not_its_kind(kind: str, name: str) -> InputError:
    """Returns the error for a file whose name says another format than its bytes."""
    return InputError(
        "image-not-its-kind",
        expected=f"the content of a {kind} file",
        found="other bytes at its start",
        where=name,
        do=f"Save the image as {kind}; renaming a file does not convert it.",
    )


def require_shape(shape: tuple[int, ...], name: str) -> None:
    """Raises unless an array of `shape` is flat and its sides lie within bounds.

    Raises:
        InputError: `image-not-flat`, `image-too-large` or `image-too-small`.
    """
    if len(shape) != 2:
        raise InputError(
            "image-not-flat",
            expected="an array of two axes (rows, columns)",
            found=f"{len(shape)} axes, shape {shape}",
            where=name,
            do="Save one flat slice of the density.",
        )
    if max(shape) > LARGEST_SIDE:
        raise too_large(f"{shape[0]} x {shape[1]} values", name)
    if min(shape) < SMALLEST_SIDE:
        raise InputError(
            "image-too-small",
            expected=f"at least {SMALLEST_SIDE} values along each side",
            found=f"{shape[0]} x {shape[1]}",
            where=name,
            do="Give the optimiser's full grid.",
        )
