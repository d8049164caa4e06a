"""Distortion of a laid sheet as maps over the sheet, its worst places, and the walls that result.

With J the Jacobian at depth and s1 >= s2 its singular values: length along u and v are the column norms of J, area is
s1 s2, the angle error is 2 asin((s1 - s2) / (s1 + s2)), the greatest change of any angle (Tissot 1859). A wall between
two parallel channels drawn a pitch apart is at least pitch x s2 - bore, whichever way they run.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.surface.carrier import Carrier

MAP_MM = 2.0
"""Spacing of the maps, at most 121 places a side."""
MOST_PLACES = 121


@dataclass(frozen=True, slots=True, eq=False)
class DistortionMaps:
    """What the sheet's lengths, areas and angles become at depth, on a regular grid of the sheet.

    Args:
        x_mm: (n,) sheet x of the columns.
        y_mm: (m,) sheet y of the rows.
        length_u: (n, m) length at depth over length on the sheet, along x.
        length_v: the same along y.
        area: area ratio.
        angle_deg: greatest change of an angle.
        largest: largest length ratio in any direction.
        least: smallest length ratio in any direction.
    """

    x_mm: Floats
    y_mm: Floats
    length_u: Floats
    length_v: Floats
    area: Floats
    angle_deg: Floats
    largest: Floats
    least: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "x_mm", frozen_floats("x_mm", self.x_mm, (None,)))
        object.__setattr__(self, "y_mm", frozen_floats("y_mm", self.y_mm, (None,)))
        for name in ("length_u", "length_v", "area", "angle_deg", "largest", "least"):
            array = frozen_floats(name, getattr(self, name), (len(self.x_mm), len(self.y_mm)))
            object.__setattr__(self, name, array)

    @property
    def length_error(self) -> Floats:
        """Returns the larger of largest - 1 and 1 - least (n, m): the worst length error in any direction."""
        return np.maximum(self.largest - 1.0, 1.0 - self.least)

    @property
    def length_error_max(self) -> float:
        """Returns the worst length error."""
        return float(self.length_error.max())

    @property
    def length_error_rms(self) -> float:
        """Returns the root mean square of both principal length errors over the sheet (by the trapezoidal rule)."""
        weight = np.outer(_trapezoid(len(self.x_mm)), _trapezoid(len(self.y_mm)))
        square = 0.5 * ((self.largest - 1.0) ** 2 + (self.least - 1.0) ** 2)
        return float(np.sqrt((weight * square).sum() / weight.sum()))

    def worst_mm(self) -> tuple[float, float]:
        """Returns the sheet place of the worst length error, of equals the first along x, then y."""
        i, j = np.unravel_index(int(self.length_error.argmax()), self.length_error.shape)
        return float(self.x_mm[i]), float(self.y_mm[j])

    def wall_mm(self, pitch_mm: float, bore_mm: float) -> float:
        """Returns the least wall at depth between parallel channels drawn `pitch_mm` apart, in mm.

        Pitch times the least length ratio, less the bore; negative where they run into each other.
        """
        return pitch_mm * float(self.least.min()) - bore_mm


def _trapezoid(n: int) -> Floats:
    weight = np.ones(n)
    weight[[0, -1]] = 0.5
    return weight


def measure_maps(carrier: Carrier, size_mm: tuple[float, float], depth_mm: float) -> DistortionMaps:
    """Returns the distortion maps of any carrier over a sheet of `size_mm` at `depth_mm`."""
    counts = [int(np.clip(round(side / MAP_MM) + 1, 9, MOST_PLACES)) for side in size_mm]
    x, y = (np.linspace(0.0, side, count) for side, count in zip(size_mm, counts, strict=True))
    sheet = np.column_stack([np.repeat(x, len(y)), np.tile(y, len(x))])
    slope = carrier.jacobian(sheet, depth_mm)
    along, up = np.linalg.norm(slope, axis=1).T
    s1, s2 = np.linalg.svd(slope, compute_uv=False).T
    angle = 2.0 * np.degrees(np.arcsin(np.clip((s1 - s2) / np.maximum(s1 + s2, 1e-300), 0.0, 1.0)))
    shape = (len(x), len(y))
    return DistortionMaps(x, y, *(row.reshape(shape) for row in (along, up, s1 * s2, angle, s1, s2)))


def advice(maps: DistortionMaps, size_mm: tuple[float, float], *, least_worst: bool) -> str:
    """Returns what lowers the worst length error of a sheet: shrink, move, turn, or lay for the least worst error.

    Args:
        maps: of the sheet.
        size_mm: its width and height.
        least_worst: the sheet was laid for the least worst error already.
    """
    x, y = maps.worst_mm()
    side = "left" if x < 0.5 * size_mm[0] else "right"
    end = "lower" if y < 0.5 * size_mm[1] else "upper"
    texts = [
        f"Move anchor_mm away from the {end} {side} part of the sheet, where the worst error of "
        f"{100.0 * maps.length_error_max:.1f} % lies at ({x:.1f}, {y:.1f}) mm"
    ]
    if not least_worst:
        texts.append('set least = "worst", which spreads the error')
    texts.append("turn the sheet with up so that its long side follows the straighter direction")
    texts.append("make the sheet smaller: the error of a curved face grows with the square of its size")
    return "; ".join(texts) + "."
