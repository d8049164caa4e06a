"""Outlines of sections for the finite elements: sides between corners, graded towards the corners.

The sections of body/section.py, of unit ball radius, in the plane square to the centreline with up along +y:

    roofed   lean is the angle from up to the normal of the roof line (cos lean = cos b / s), cut the angle from
             that normal to where the roof line meets the circle (0: a full roof, tangent; cut = lean: round)
    arched   from its support function h(a): the outline is h n + h' t; the corner at the top spans a range of a
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable

import numpy as np

from morph.core.arrays import Floats

CORNER_GRADING = 2.0
"""Points crowd towards the ends of a side: with x in 0..1 their place is x^g / (x^g + (1 - x)^g)."""

Side = Callable[[Floats], Floats]
"""A side of the section: place in 0..1 (k,) to points (k, 2)."""


def join_sides(sides: list[Side], n_elements: int) -> Floats:
    """Returns the closed outline (2 n, 2) of sides that run counter-clockwise, `n_elements` on each of them."""
    place = np.arange(2 * n_elements) / (2.0 * n_elements)
    near, far = place**CORNER_GRADING, (1.0 - place) ** CORNER_GRADING
    graded = near / (near + far)
    graded[1::2] = 0.5 * (graded[0::2] + np.append(graded[2::2], 1.0))
    return np.concatenate([side(graded) for side in sides])


def line(start: tuple[float, float], end: tuple[float, float]) -> Side:
    """Returns the straight side between two points."""
    one, two = np.array(start), np.array(end)
    return lambda t: one + t[:, None] * (two - one)


def arc(start_rad: float, end_rad: float, width: float = 1.0, height: float = 1.0) -> Side:
    """Returns the arc of the ellipse (width cos a, height sin a) between two angles a."""

    def points(t: Floats) -> Floats:
        angle = start_rad + t * (end_rad - start_rad)
        return np.stack([width * np.cos(angle), height * np.sin(angle)], axis=1)

    return points


def roofed_outline(lean_rad: float, cut_rad: float, n_elements: int) -> Floats:
    """Returns the outline (2 n, 2) of the roofed section of unit radius; its centre is the origin.

    Args:
        lean_rad: angle from up to the normal of the roof line, 0 <= lean < pi / 2.
        cut_rad: angle from that normal to where the roof line meets the circle, 0 <= cut <= lean.
        n_elements: elements on each straight roof line; the circle gets six times as many.
    """
    top = 0.5 * math.pi
    meets = lean_rad - cut_rad
    bottom = np.linspace(top + meets, 2.5 * math.pi - meets, 7)
    arcs = [arc(float(a), float(b)) for a, b in itertools.pairwise(bottom)]
    if meets <= 1e-9:
        return join_sides(arcs, n_elements)
    apex = (0.0, math.cos(cut_rad) / math.cos(lean_rad))
    right = (math.sin(meets), math.cos(meets))
    return join_sides([line(right, apex), line(apex, (-right[0], right[1])), *arcs], n_elements)


def arched_outline(angle_rad: float, sine: float, n_elements: int) -> Floats:
    """Returns the outline (2 n, 2) of the arched section of unit radius; its centre is the origin.

    Args:
        angle_rad: the roof angle b; the arc's radius is k = 1 / (1 - sin b).
        sine: of the angle between centreline and up, 0 to 1.
        n_elements: elements on each of the twelve sides.
    """
    k = 1.0 / (1.0 - math.sin(angle_rad))

    def points(angle: Floats) -> Floats:
        rise = sine * np.sin(angle)
        level = np.sqrt(1.0 - rise * rise)
        above = rise > 0.0
        support = np.where(above, k - (k - 1.0) * level, 1.0)
        slope = np.where(above, (k - 1.0) * rise * sine * np.cos(angle) / np.maximum(level, 1e-12), 0.0)
        cosine, sine_ = np.cos(angle), np.sin(angle)
        return np.stack([support * cosine - slope * sine_, support * sine_ + slope * cosine], axis=1)

    corner = math.asin(min(math.cos(angle_rad) / sine, 1.0)) if sine > 0.0 else 0.5 * math.pi
    quarter = np.linspace(0.0, corner, 5)
    right = [_between(points, float(a), float(b)) for a, b in itertools.pairwise(quarter)]
    left = [_mirrored(side) for side in reversed(right)]
    lower = np.linspace(math.pi, 2.0 * math.pi, 5)
    below = [arc(float(a), float(b)) for a, b in itertools.pairwise(lower)]
    return join_sides([*right, *left, *below], n_elements)


def _between(points: Side, start: float, end: float) -> Side:
    return lambda t: points(start + t * (end - start))


def _mirrored(side: Side) -> Side:
    return lambda t: side(1.0 - t) * np.array([-1.0, 1.0])
