"""The density: the optimiser's grid in one canonical form, whatever the file looked like.

Canonical means: row 0 lies at the bottom of the sheet, values are 0..1 with 1 = coolant, mirrored
halves already doubled. The drawing is not flipped for ``seen_from``: the carrier does that.
"""

from __future__ import annotations

from dataclasses import dataclass

from morph.core.arrays import Floats, frozen_floats
from morph.settings.job import Samples, Seam


@dataclass(frozen=True, slots=True, eq=False)
class Density:
    """The canonical density.

    Args:
        value: (rows, columns) coolant fraction 0..1, row 0 at the bottom.
        size_mm: width and height of the sheet.
        samples: whether values stand for cells (centres at (i + 0.5) size / n) or grid nodes (i size / (n - 1)).
        seam: whether the left and right edge are one line.
        source: base name of the file. content: fingerprint of the file's bytes.
    """

    value: Floats
    size_mm: tuple[float, float]
    samples: Samples
    seam: Seam
    source: str
    content: str

    def __post_init__(self) -> None:
        object.__setattr__(self, "value", frozen_floats("value", self.value, (None, None)))
