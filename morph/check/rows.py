"""How a figure becomes a row: limits with their sources, places, and judging after the band."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.check.centreline import Place
from morph.core.arrays import Floats
from morph.core.verdict import COMMON_PRACTICE, Outcome, judge

MEASURE_MM = 0.02
"""Two routes that differ by no more than this agree: the written surface lies within 0.011 mm of the field on
99.9 % of its points, facets and simplifying included (own measurement). No limit is softened by it; the plan
pays for it with BUILD_MM."""

MOST_NAMED = 8
"""A check names at most this many places one by one; the rest are counted."""


@dataclass(frozen=True, slots=True)
class Limit:
    """A limit in mm, where it comes from, and how it reads in a sentence."""

    value: float
    source: str
    words: str


def worse_limit(service_mm: float, service_words: str, process_mm: float, process_source: str) -> Limit:
    """Returns the larger of the service and the process limit; the words show both."""
    words = f"{service_mm:.2f} mm in service ({service_words}) and {process_mm:.2f} mm to print"
    if service_mm >= process_mm:
        return Limit(service_mm, f"[service] {service_words}: {COMMON_PRACTICE}", words)
    return Limit(process_mm, f"process profile wall_mm: {process_source}", words)


def judge_length(value_mm: float, limit_mm: float, band_mm: float, limit_is: str = "least") -> Outcome:
    """Returns the outcome of a measured length after its band."""
    return judge(value_mm, limit_mm, band_mm, limit_is)


def place(xyz_mm: Floats) -> Place:
    """Returns a point (3,) as plain numbers."""
    x, y, z = np.asarray(xyz_mm, dtype=np.float64)
    return (float(x), float(y), float(z))


def name_list(names: list[str] | tuple[str, ...]) -> str:
    """Returns names as "B1, B2 and 3 more".

    >>> name_list(["B1", "B2"])
    'B1, B2'
    """
    shown = ", ".join(names[:MOST_NAMED])
    return shown if len(names) <= MOST_NAMED else f"{shown} and {len(names) - MOST_NAMED} more"
