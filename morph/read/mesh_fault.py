"""What can be wrong with the bytes of a mesh file, and how much of it is read at most.

The limits hold before anything is allocated: readers predict the number of triangles from the header or the
counted records and stop there.
"""

from __future__ import annotations

from dataclasses import dataclass

from morph.core.arrays import Floats, Ints
from morph.core.errors import InputError

MOST_TRIANGLES = 2_000_000
"""A blank of this many triangles is 100 MB of binary STL and needs about 2 GB while it is cut."""

MOST_POINTS = 3 * MOST_TRIANGLES
LARGEST_FILE_BYTES = 500_000_000

EXPORT_AGAIN = "Export the file again; the writing or the copy may have been cut off."


@dataclass(frozen=True, slots=True, eq=False)
class Soup:
    """Triangles as they lie in a file, not yet checked: points (n, 3) in the file's unit, triangles (m, 3).

    Args:
        points: (n, 3).
        triangles: (m, 3) rows of `points`.
        unit: the unit the file states, None when it has none.
    """

    points: Floats
    triangles: Ints
    unit: str | None = None


def damaged(name: str, expected: str, found: str) -> InputError:
    """Returns the error for a file that breaks the rules of its own format."""
    return InputError("mesh-damaged", expected=expected, found=found, where=name, do=EXPORT_AGAIN)


def truncated(name: str, expected: str, found: str) -> InputError:
    """Returns the error for a file that ends before what it announces."""
    return InputError("mesh-truncated", expected=expected, found=found, where=name, do=EXPORT_AGAIN)


def not_its_format(name: str, expected: str, found: str) -> InputError:
    """Returns the error for a file that is not what its extension says."""
    return InputError(
        "mesh-not-its-format",
        expected=expected,
        found=found,
        where=name,
        do="Give the file the extension of what it is, or export it anew.",
    )


def without_triangles(name: str) -> InputError:
    """Returns the error for a file without a single triangle."""
    return InputError(
        "mesh-no-triangles",
        expected="triangles of a closed body",
        found="no triangle",
        where=name,
        do="Export the solid body itself; points, lines and empty groups are no body.",
    )


def require_few(n_triangles: int, name: str) -> None:
    """Raises `mesh-too-many-triangles` when a file holds or announces more than MOST_TRIANGLES."""
    if n_triangles > MOST_TRIANGLES:
        raise InputError(
            "mesh-too-many-triangles",
            expected=f"at most {MOST_TRIANGLES} triangles",
            found=f"{n_triangles} triangles",
            where=name,
            do="Export it with a coarser chord tolerance: 0.01 mm is enough for a blank.",
        )


def require_indices(triangles: Ints, n_points: int, name: str) -> None:
    """Raises `mesh-damaged` when a triangle names a point that does not exist."""
    if len(triangles) == 0 or (triangles.min() >= 0 and triangles.max() < n_points):
        return
    row = int(((triangles < 0) | (triangles >= n_points)).any(axis=1).argmax())
    raise damaged(
        name, f"faces on the {n_points} points of the file", f"face {row + 1} on the points {triangles[row].tolist()}"
    )
