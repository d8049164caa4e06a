"""The colours of the report: one even, colour-blind safe map for figures, one colour per outcome.

The map is a curve in the Oklab space (B. Ottosson, "A perceptual color space for image processing",
2020) from dark blue over green to pale yellow, walked at even speed: equal steps of a figure are
equal steps to the eye, and lightness rises all the way, which red-green blind readers and grey
printers keep. Outcomes always come with a sign as well, so none is told by colour alone.
"""

from __future__ import annotations

import numpy as np

from morph.core.arrays import Floats
from morph.core.verdict import Outcome

MAP_ENDS = ((0.31, -0.010, -0.115), (0.72, -0.125, 0.010), (0.93, -0.045, 0.165))
"""Start, bend and end of the map as Oklab lightness, green-red and blue-yellow; all inside what a screen shows."""

COLOUR_STEPS = 24
"""Flat pictures use this many steps of the map."""

_TO_CONE = np.array([[1.0, 0.3963377774, 0.2158037573], [1.0, -0.1055613458, -0.0638541728]])
_TO_CONE = np.vstack([_TO_CONE, [1.0, -0.0894841775, -1.2914855480]])
_TO_LINEAR = np.array(
    [
        [4.0767416621, -3.3077115913, 0.2309699292],
        [-1.2684380046, 2.6097574011, -0.3413193965],
        [-0.0041960863, -0.7034186147, 1.7076147010],
    ]
)

OUTCOME_COLOUR = {
    Outcome.FAIL: "#a4161a",
    Outcome.NOT_CHECKED: "#4a5560",
    Outcome.WATCH: "#8a5a00",
    Outcome.PASS: "#1b6b3a",
}
OUTCOME_SIGN = {Outcome.FAIL: "✕", Outcome.NOT_CHECKED: "?", Outcome.WATCH: "!", Outcome.PASS: "✓"}
OUTCOME_WORD = {
    Outcome.FAIL: "Fail",
    Outcome.NOT_CHECKED: "Not checked",
    Outcome.WATCH: "Watch",
    Outcome.PASS: "Pass",
}


def round_scale(low: float, high: float, step: float = 0.5) -> tuple[float, float]:
    """Returns the ends of a scale around `low` to `high`, multiples of `step`, never the same.

    >>> round_scale(5.4, 6.5), round_scale(4.0, 4.0)
    ((5.0, 6.5), (4.0, 4.5))
    """
    ends = np.floor(np.round(low / step, 6)) * step, np.ceil(np.round(high / step, 6)) * step
    return (float(ends[0]), float(ends[1]) if ends[1] > ends[0] else float(ends[0]) + step)


def round_ticks(low: float, high: float, most: int = 6) -> list[float]:
    """Returns at most `most` ticks from `low` to `high`, all multiples of 1, 2, 2.5 or 5 times a power of ten.

    >>> round_ticks(6.0, 7.5), round_ticks(5.0, 30.0)
    ([6.0, 6.5, 7.0, 7.5], [5.0, 10.0, 15.0, 20.0, 25.0, 30.0])
    """
    base = 10.0 ** np.floor(np.log10((high - low) / most))
    for step in (base * k for k in (1.0, 2.0, 2.5, 5.0, 10.0, 20.0)):
        first, last = int(np.ceil(low / step - 1e-9)), int(np.floor(high / step + 1e-9))
        if last - first < most:
            return [round(float(k * step), 9) for k in range(first, last + 1)]
    return [low, high]


def _linear_from_oklab(lab: Floats) -> Floats:
    cone = np.einsum("ij,kj->ki", _TO_CONE, lab) ** 3
    return np.asarray(np.einsum("ij,kj->ki", _TO_LINEAR, cone), dtype=np.float64)


def _screen_from_linear(linear: Floats) -> Floats:
    """The sRGB transfer curve (IEC 61966-2-1)."""
    safe = np.clip(linear, 0.0, 1.0)
    return np.where(safe <= 0.0031308, 12.92 * safe, 1.055 * safe ** (1.0 / 2.4) - 0.055)


def _on_curve(ratio: Floats) -> Floats:
    """Returns the map's Oklab places (k, 3), `ratio (k,)` of the way along it measured in Oklab distance."""
    start, bend, end = np.array(MAP_ENDS)
    t = np.linspace(0.0, 1.0, 513)[:, None]
    curve = (1.0 - t) ** 2 * start + 2.0 * t * (1.0 - t) * bend + t**2 * end
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(curve, axis=0), axis=1))])
    return np.column_stack([np.interp(ratio, along / along[-1], curve[:, axis]) for axis in range(3)])


def map_colours(ratio: Floats) -> Floats:
    """Returns screen red, green and blue 0..1 as (k, 3) for places `ratio (k,)` on the map, clipped to 0..1."""
    lab = _on_curve(np.clip(np.asarray(ratio, dtype=np.float64), 0.0, 1.0))
    return _screen_from_linear(_linear_from_oklab(lab))


def map_hex(ratio: Floats) -> list[str]:
    """Returns the map's colours at `ratio (k,)` as #rrggbb."""
    rounded = np.rint(255.0 * map_colours(ratio)).astype(int)
    return [f"#{r:02x}{g:02x}{b:02x}" for r, g, b in rounded.tolist()]


def map_scale(steps: int = 17) -> list[list[float | str]]:
    """Returns the map as `steps` pairs of place 0..1 and #rrggbb."""
    place = np.linspace(0.0, 1.0, steps)
    return [[float(t), colour] for t, colour in zip(place, map_hex(place), strict=True)]
