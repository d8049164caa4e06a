"""Threads of port ends: ISO 228-1 pipe threads G1/16 to G1, ISO metric coarse and fine M5 to M20.

Every size follows from major diameter d and pitch P by the basic profile:

    pipe (55 degrees)     minor D1 = d - 1.280654 P     pitch diameter D2 = d - 0.640327 P   (ISO 228-1)
    metric (60 degrees)   minor D1 = D - 1.082532 P     pitch diameter D2 = D - 0.649519 P   (ISO 68-1, ISO 724)

The pipe standard rounds the thread height 0.640327 P to 0.001 mm first; so does this file.

A tapping drill lies between D1 and the largest minor diameter allowed. Where the usual drill is
known it stands in the table; elsewhere a rule picks one, see `make_thread`.
"""

from __future__ import annotations

import difflib
import re
from dataclasses import dataclass
from enum import StrEnum

from morph.core.errors import SettingError

PIPE_HEIGHT_PER_PITCH = 0.640327
METRIC_MINOR_PER_PITCH, METRIC_PITCH_DIAMETER_PER_PITCH = 1.082532, 0.649519

PIPE_MM: dict[str, tuple[float, float, float | None]] = {
    "G1/16": (7.723, 0.907, 6.8),
    "G1/8": (9.728, 0.907, 8.8),
    "G1/4": (13.157, 1.337, 11.8),
    "G3/8": (16.662, 1.337, None),
    "G1/2": (20.955, 1.814, 19.0),
    "G5/8": (22.911, 1.814, 21.0),
    "G3/4": (26.441, 1.814, 24.5),
    "G1": (33.249, 2.309, 30.75),
}
"""Major diameter and pitch of ISO 228-1, and the usual drill (from memory, inside the limits), all in mm."""

PIPE_TOLERANCE_MM = {0.907: 0.282, 1.337: 0.445, 1.814: 0.541, 2.309: 0.640}
"""How far the minor diameter of a pipe thread may exceed D1, by pitch (ISO 228-1)."""

METRIC_PITCHES_MM: dict[int, tuple[float, ...]] = {
    5: (0.8, 0.5),
    6: (1.0, 0.75),
    7: (1.0, 0.75),
    8: (1.25, 1.0, 0.75),
    10: (1.5, 1.25, 1.0, 0.75),
    12: (1.75, 1.5, 1.25, 1.0),
    14: (2.0, 1.5, 1.25, 1.0),
    16: (2.0, 1.5, 1.0),
    18: (2.5, 2.0, 1.5, 1.0),
    20: (2.5, 2.0, 1.5, 1.0),
}
"""Pitches of ISO 261 by major diameter, the coarse one first (from memory)."""

METRIC_TOLERANCE_MM = {
    0.5: 0.140,
    0.75: 0.190,
    0.8: 0.200,
    1.0: 0.236,
    1.25: 0.265,
    1.5: 0.300,
    1.75: 0.335,
    2.0: 0.375,
    2.5: 0.450,
}
"""How far the minor diameter of a metric thread 6H may exceed D1, by pitch (ISO 965-1; the values from memory)."""

METRIC_DRILL_MM = {5: 4.2, 6: 5.0, 8: 6.8, 10: 8.5, 12: 10.2, 14: 12.0, 16: 14.0}
"""Usual drills of coarse threads (from memory, inside the limits), by major diameter."""

FINE_STEPS_TO_MM = 14.0
"""Twist drills come in steps of 0.1 mm up to this diameter and of 0.25 mm above (from memory)."""

_METRIC = re.compile(r"M(\d{1,2})(?:x(\d(?:\.\d{1,2})?))?")


class ThreadStandard(StrEnum):
    """Where the sizes of a thread come from."""

    PIPE = "ISO 228-1"
    METRIC = "ISO 261, 6H"


@dataclass(frozen=True, slots=True)
class Thread:
    """One size of an internal thread, all in mm.

    Args:
        designation: as the job names it, such as "G1/4", "M10" or "M10x1".
        standard: where the sizes come from.
        major_mm, pitch_mm: nominal outer diameter and pitch.
        minor_mm, minor_max_mm: basic minor diameter D1 and the largest allowed.
        pitch_diameter_mm: basic pitch diameter D2.
        drill_mm: tapping drill. drill_source: the usual one, or the rule.
    """

    designation: str
    standard: ThreadStandard
    major_mm: float
    pitch_mm: float
    minor_mm: float
    minor_max_mm: float
    pitch_diameter_mm: float
    drill_mm: float
    drill_source: str


def thread_names() -> tuple[str, ...]:
    """Returns every designation, pipe threads first, then metric by size; coarse ones without their pitch."""
    metric = (
        f"M{size}" if pitch == pitches[0] else f"M{size}x{pitch:g}"
        for size, pitches in METRIC_PITCHES_MM.items()
        for pitch in pitches
    )
    return (*PIPE_MM, *metric)


def make_thread(designation: str, where: str = "thread") -> Thread:
    """Returns the sizes of a thread.

    Where no usual drill is known: aim at D - P (metric) or three quarters of the way from D1 to the
    largest minor diameter (pipe), and take the nearest drill made that lies inside the limits.

    Args:
        designation: "G1/16" to "G1", or "M5" to "M20" with an optional pitch such as "M10x1".
        where: what to name in a message.

    Raises:
        SettingError: `thread-unknown` with the nearest names.

    >>> make_thread("G1/4").minor_mm, make_thread("M10").minor_mm, make_thread("M10x1").drill_mm
    (11.445, 8.376, 9.0)
    """
    name = designation.strip()
    if name in PIPE_MM:
        major, pitch, drill = PIPE_MM[name]
        return _sized(name, ThreadStandard.PIPE, major, pitch, PIPE_TOLERANCE_MM[pitch], drill)
    match = _METRIC.fullmatch(name.replace("X", "x").replace("\u00d7", "x"))
    size = int(match[1]) if match else 0
    pitches = METRIC_PITCHES_MM.get(size, ())
    pitch = float(match[2]) if match and match[2] else next(iter(pitches), 0.0)
    if pitch not in pitches:
        raise SettingError(
            "thread-unknown",
            expected="an ISO 228-1 thread G1/16 to G1, or an ISO metric thread M5 to M20 such as M10 or M10x1",
            found=f"'{designation[:40]}'",
            where=where,
            do=_nearest(name, size),
        )
    coarse = pitch == pitches[0]
    drill = METRIC_DRILL_MM.get(size) if coarse else None
    plain = f"M{size}" if coarse else f"M{size}x{pitch:g}"
    return _sized(plain, ThreadStandard.METRIC, float(size), pitch, METRIC_TOLERANCE_MM[pitch], drill)


def _nearest(name: str, size: int) -> str:
    """Returns the sentence that names the nearest designations: of the same or the next sizes when it has a size."""
    known = thread_names()
    by_case = {one.lower(): one for one in known}
    close = difflib.get_close_matches(name.lower().replace(" ", "")[:24], list(by_case), n=3, cutoff=0.4)
    names = [by_case[one] for one in close]
    if size:
        off = min(abs(size - other) for other in METRIC_PITCHES_MM)
        sizes = {f"M{other}" for other in METRIC_PITCHES_MM if abs(size - other) == off}
        names = [one for one in known if one.split("x")[0] in sizes]
    return f"Did you mean {' or '.join(names)}?" if names else f"Known: {', '.join(known)}."


def _sized(
    name: str, standard: ThreadStandard, major: float, pitch: float, tolerance: float, drill: float | None
) -> Thread:
    if standard is ThreadStandard.PIPE:
        height = round(PIPE_HEIGHT_PER_PITCH * pitch, 3)
        middle, minor = round(major - height, 3), round(major - 2.0 * height, 3)
    else:
        middle = round(major - METRIC_PITCH_DIAMETER_PER_PITCH * pitch, 3)
        minor = round(major - METRIC_MINOR_PER_PITCH * pitch, 3)
    largest = round(minor + tolerance, 3)
    source = "usual tapping drill, from memory, inside the minor-diameter limits"
    if drill is None:
        metric = standard is ThreadStandard.METRIC
        drill = _drill_near(major - pitch if metric else minor + 0.75 * tolerance, minor, largest)
        aim = "major diameter less pitch" if metric else "three quarters of the minor-diameter tolerance"
        source = f"by rule: drill size nearest to {aim}"
    return Thread(name, standard, major, pitch, minor, largest, middle, drill, source)


def _drill_near(aim_mm: float, low_mm: float, high_mm: float) -> float:
    """Returns the drill size nearest to `aim_mm` inside the limits; the larger of two that are as near."""
    step = 0.1 if high_mm <= FINE_STEPS_TO_MM else 0.25
    sizes = [round(k * step, 2) for k in range(int(low_mm / step), int(high_mm / step) + 2)]
    inside = [size for size in sizes if low_mm <= size <= high_mm]
    return min(inside, key=lambda size: (round(abs(size - aim_mm), 6), -size))
