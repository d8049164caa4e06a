"""What can be wrong with a free-form surface or with the sheet on it, each with its place in mm and its own advice."""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import GeometryError

WHERE = "[carrier] kind freeform"


def place_text(xyz_mm: Floats) -> str:
    """Returns a place in the part frame as text.

    >>> place_text(np.array([1.0, 2.5, -3.0]))
    '(1.00, 2.50, -3.00) mm'
    """
    return f"({xyz_mm[0]:.2f}, {xyz_mm[1]:.2f}, {xyz_mm[2]:.2f}) mm"


def sheet_text(sheet_mm: Floats) -> str:
    """Returns a place on the sheet (from its lower left corner) as text."""
    return f"sheet place ({sheet_mm[0]:.2f}, {sheet_mm[1]:.2f}) mm"


def others_text(count: int) -> str:
    """Returns how many more places there are, as the end of a sentence part."""
    return "" if count <= 1 else f", and at {count - 1} other {'place' if count == 2 else 'places'}"


def fault(code: str, *, expected: str, found: str, do: str, at_mm: Floats | None = None) -> GeometryError:
    """Returns the error `code` at the place `at_mm (3,)` of the part frame."""
    where = WHERE if at_mm is None else f"{WHERE}, at {place_text(at_mm)}"
    return GeometryError(code, expected=expected, found=found, where=where, do=do)


def unit(vector: tuple[float, float, float] | Floats) -> Floats:
    """Returns `vector (3,)` with length 1; a zero vector stays zero."""
    row = np.asarray(vector, dtype=np.float64)
    return row / max(float(np.linalg.norm(row)), 1e-300)
