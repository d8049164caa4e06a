"""Places for names in a crowded drawing: each is put where it covers nothing, as near to its item as there is room.

Greedy, in the order the names come: the first free place of a fixed list around the item is taken;
where none is free, the one that covers least, with a thin line back to the item.
"""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats
from morph.report.drawing import Drawing

SIZE_PX, LETTER_PX = 11.0, 7.0
REACHES_PX = (0.0, 14.0, 22.0, 32.0, 44.0, 58.0)
LINE_FROM_PX = 30.0
"""Names farther off than this are tied to their item by a line."""


class LabelPlaces:
    """Writes names into a drawing and remembers what they cover.

    Args:
        drawing: where to.
    """

    def __init__(self, drawing: Drawing) -> None:
        self._drawing = drawing
        self._taken: list[tuple[Floats, Floats]] = []

    def keep_clear(self, at_mm: Floats, radius_px: float) -> None:
        """Keeps names off a sign of `radius_px` around `at_mm (2,)`."""
        self._taken.append((self._pixel(at_mm), np.array([radius_px, radius_px])))

    def keep_below_clear(self, low_px: float) -> None:
        """Keeps names off the lowest `low_px` of the drawing, where its legend stands."""
        half = np.array([0.5 * self._drawing.width_px, 0.5 * low_px])
        self._taken.append((np.array([half[0], self._drawing.height_px - half[1]]), half))

    def write(self, at_mm: Floats, name: str, colour: str, *, beside: bool) -> None:
        """Writes `name` near `at_mm (2,)`, on it when there is room and not `beside` it."""
        item = self._pixel(at_mm)
        half = np.array([0.5 * LETTER_PX * len(name) + 2.0, 0.5 * SIZE_PX + 1.0])
        place = min(self._places(item, half, beside), key=lambda at: self._covered(at, half))
        self._taken.append((place, half))
        middle = self._millimetre(place)
        if float(np.linalg.norm(place - item)) > LINE_FROM_PX:
            self._drawing.line((float(at_mm[0]), float(at_mm[1])), middle, colour, 0.8)
        self._drawing.label(middle, name, size_px=SIZE_PX, colour=colour, bold=True)

    def _places(self, item: Floats, half: Floats, beside: bool) -> list[Floats]:
        """Returns middles of a name around its item, nearest first; up and to the right before the rest."""
        around = np.radians([35.0, 145.0, -35.0, -145.0, 90.0, -90.0, 0.0, 180.0])
        steps = np.column_stack([np.cos(around), -np.sin(around)])
        found = [] if beside else [item]
        for reach in REACHES_PX[1:]:
            found += [item + step * (reach + np.array([half[0] - 6.0, 0.0])) for step in steps]
        return found

    def _covered(self, place: Floats, half: Floats) -> float:
        """Returns the area in square pixels that a name at `place` shares with what is there, rims outside included."""
        size = np.array([self._drawing.width_px, self._drawing.height_px])
        total = 1e3 * float(np.maximum(half - np.minimum(place, size - place), 0.0).sum())
        for middle, other in self._taken:
            shared = half + other - np.abs(place - middle)
            total += float(shared.min() > 0.0) * float(np.prod(np.maximum(shared, 0.0)))
        return round(total, 3)

    def _pixel(self, at_mm: Floats) -> Floats:
        x, y = self._drawing.xy((float(at_mm[0]), float(at_mm[1])))
        return np.array([float(x), float(y)])

    def _millimetre(self, place_px: Floats) -> tuple[float, float]:
        low, high, scale = self._drawing.low_mm, self._drawing.high_mm, self._drawing.px_per_mm
        return (low[0] + float(place_px[0]) / scale, high[1] - float(place_px[1]) / scale)
