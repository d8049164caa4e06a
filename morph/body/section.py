"""The cross-section of a channel: round, roofed or arched, by bore and by the way the channel runs.

The solid is swept from balls that carry their roof with them, so every section follows from one ball:

    round    a ball of radius r
    roofed   the hull of that ball and an apex r / cos b above its centre: a cone tangent to the ball
             whose surface stands at the roof angle b to the plate
    arched   above its equator an arc of radius k r centred (k - 1) r beyond the axis, turned about
             the axis; k is chosen so that the arc still stands at b where it meets the axis

up is the build direction. A channel whose tangent makes an angle with sine s to up shows the ball seen along
its tangent: the apex stands s r / cos b above the centre, and once s < cos b it is inside the circle, so a
channel that climbs is round without any rule. The auto section also fades by bore: the cone gets the smaller
radius q r with q from cos b (its apex just touches the ball: round) to 1 (full roof). Faces of the cone keep the
roof angle all the way. The bore itself is held against the free span, all along the channel: a round ceiling
flatter than b spans 2 r sin b in a straight channel, and up to sqrt 2 of that where channels cross (the circle
through the corners of a cross), which at b = 45 degrees is the bore.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.settings.job import SectionSettings, SectionShape
from morph.settings.profile import Profile

ROOF_MARGIN_DEG = 2.0
"""Roofs are built this much steeper than the limit: one built at the limit is judged by the noise of its facets."""

FADE_FROM = 0.85
"""Auto: the roof starts to grow at bores of this share of the free span, and is full at all of it."""

QUADRATURE = 7200
"""Directions of the quadrature over support functions; areas are good to 1e-6."""


def _up() -> Floats:
    return np.array([0.0, 0.0, 1.0])


@dataclass(frozen=True, slots=True, eq=False)
class SectionRule:
    """How a plan's channels are shaped.

    Args:
        shape: round, roofed, arched or auto.
        roof_angle_deg: angle to the build plate at which roofs are built.
        up: (3,) unit build direction.
        free_span_mm: auto is roofed from this bore on.
    """

    shape: SectionShape = SectionShape.ROUND
    roof_angle_deg: float = 45.0 + ROOF_MARGIN_DEG
    up: Floats = field(default_factory=_up)
    free_span_mm: float = math.inf

    def __post_init__(self) -> None:
        up = np.asarray(self.up, dtype=np.float64)
        object.__setattr__(self, "up", frozen_floats("up", up / np.linalg.norm(up), (3,)))
        if not 0.0 < self.roof_angle_deg < 90.0:
            raise ValueError(f"roof_angle_deg: expected a number between 0 and 90, found {self.roof_angle_deg}")

    @property
    def roof_cosine(self) -> float:
        """Cosine of the roof angle: radius over height of the apex."""
        return math.cos(math.radians(self.roof_angle_deg))

    @property
    def arch_ratio(self) -> float:
        """Arc radius over half-width k of the arched section: asin((k - 1) / k) is the roof angle."""
        return 1.0 / (1.0 - math.sin(math.radians(self.roof_angle_deg)))


def make_section_rule(section: SectionSettings, profile: Profile, up: tuple[float, float, float]) -> SectionRule:
    """Returns the rule of a job: roofs at the process' angle plus ROOF_MARGIN_DEG, its free span less the bore band.

    Args:
        section: the shape.
        profile: roof angle, free span, bore band.
        up: build direction, any length.
    """
    angle = min(profile.roof_angle_deg.value + ROOF_MARGIN_DEG, 89.0)
    span = max(profile.free_span_mm.value - profile.bore_band_mm.value, 0.0)
    return SectionRule(section.shape, angle, np.asarray(up, dtype=np.float64), span)


def roof_share(bore_mm: Floats, rule: SectionRule) -> Floats:
    """Returns how much roof (k,) channels of bore (k,) get, 0 round to 1 full, smooth in the bore.

    Auto leaves bores below FADE_FROM of the free span round; see the head of the file for why the bore is asked.

    >>> rule = SectionRule(SectionShape.AUTO, 47.0, free_span_mm=6.0)
    >>> roof_share(np.array([5.0, 5.55, 6.0]), rule).round(3).tolist()
    [0.0, 0.5, 1.0]
    """
    bore = np.asarray(bore_mm, dtype=np.float64)
    if rule.shape is not SectionShape.AUTO:
        return np.full(bore.shape, float(rule.shape is not SectionShape.ROUND))
    share = np.clip((bore / max(rule.free_span_mm, 1e-9) - FADE_FROM) / (1.0 - FADE_FROM), 0.0, 1.0)
    return np.asarray(share * share * (3.0 - 2.0 * share))


def roof_radius_ratio(share: Floats, rule: SectionRule) -> Floats:
    """Returns the radius (k,) the roof cone is tangent to, over the ball's: from cos b at share 0 to 1 at share 1."""
    ratio: Floats = rule.roof_cosine + (1.0 - rule.roof_cosine) * np.asarray(share, dtype=np.float64)
    return ratio


def climb_sine(tangent: Floats, rule: SectionRule) -> Floats:
    """Returns the sine (k,) of the angle between tangents (k, 3) and up: 1 for a channel that lies flat."""
    along = np.asarray(tangent, dtype=np.float64) @ rule.up / np.linalg.norm(tangent, axis=-1)
    sine: Floats = np.sqrt(np.maximum(1.0 - along * along, 0.0))
    return sine


def apex_mm(bore_mm: Floats, tangent: Floats, rule: SectionRule) -> Floats:
    """Returns the height (k,) of the section's highest point above the centreline, square to it.

    Roofed r max(1, s / cos b); arched s r sqrt(2 k - 1), at least r. Total height of a roofed section at 45 degrees is
    r (1 + 1 / cos b) = 2.414214 r.

    >>> flat, rule = np.array([[1.0, 0.0, 0.0]]), SectionRule(SectionShape.ROOFED, 45.0)
    >>> round(1.0 + float(apex_mm(np.array([2.0]), flat, rule)[0]), 6)
    2.414214
    >>> arch = SectionRule(SectionShape.ARCHED, 30.0)
    >>> round(float(apex_mm(np.array([2.0]), flat, arch)[0]), 5)
    1.73205
    """
    sine = climb_sine(tangent, rule)
    return _support(0.5 * np.asarray(bore_mm, dtype=np.float64), sine, rule, roof_share(bore_mm, rule))


def reach_mm(bore_mm: Floats, direction: Floats, rule: SectionRule) -> Floats:
    """Returns how far (k,) channels of bore (k,) reach from their centreline towards unit directions (k, 3).

    This is the ball's support: bore / 2 sideways and down, bore / (2 cos b) for a roof that looks that way.

    >>> rule = SectionRule(SectionShape.ROOFED, 45.0)
    >>> reach_mm(np.array([4.0, 4.0]), np.array([[0.0, 0.0, 1.0], [1.0, 0.0, 0.0]]), rule).round(4).tolist()
    [2.8284, 2.0]
    """
    rise = np.asarray(direction, dtype=np.float64) @ rule.up
    return _support(0.5 * np.asarray(bore_mm, dtype=np.float64), rise, rule, roof_share(bore_mm, rule))


def bore_of_reach_mm(reach: Floats, direction: Floats, rule: SectionRule, wall_bores: float = 0.0) -> Floats:
    """Returns the largest bore (k,) that reaches at most `reach` (k,) mm towards unit directions (k, 3).

    With `wall_bores` its reach plus that many bores. The reach grows with the bore; by bisection to 1e-9 of the answer
    where the roof fades, else closed.

    >>> rule = SectionRule(SectionShape.ROOFED, 45.0)
    >>> bore_of_reach_mm(np.array([2.0, -1.0]), np.array([[0.0, 0.0, 1.0]] * 2), rule).round(4).tolist()
    [2.8284, -1.4142]
    """
    reach = np.asarray(reach, dtype=np.float64)
    unit = np.broadcast_to(np.asarray(direction, dtype=np.float64), (*reach.shape, 3))
    if rule.shape is SectionShape.ROUND:
        return reach / (0.5 + wall_bores)
    full = _support(np.ones(reach.shape), unit @ rule.up, rule, np.ones(reach.shape))
    low, high = reach / (0.5 * full + wall_bores), reach / (0.5 + wall_bores)
    if rule.shape is not SectionShape.AUTO:
        return low
    low, high = np.minimum(low, high), np.maximum(low, high)
    for _ in range(40):
        middle = 0.5 * (low + high)
        fits = reach_mm(np.maximum(middle, 0.0), unit, rule) + wall_bores * middle <= reach
        low, high = np.where(fits, middle, low), np.where(fits, high, middle)
    return np.where(reach > 0.0, low, reach / (0.5 + wall_bores))


def section_area_mm2(bore_mm: Floats, tangent: Floats, rule: SectionRule) -> Floats:
    """Returns the area (k,) of the section square to the centreline.

    Roofed: r^2 (pi - b' + tan b') with cos b' = cos b / s. A fading roof: the circle and the two slices
    between it and the roof lines. Arched: from the support function, A = 1/2 int h^2 - h'^2.

    >>> flat = np.array([[1.0, 0.0, 0.0]])
    >>> round(float(section_area_mm2(np.array([2.0]), flat, SectionRule(SectionShape.ROOFED, 45.0))[0]), 6)
    3.356194
    >>> round(float(section_area_mm2(np.array([2.0]), flat, SectionRule(SectionShape.ARCHED, 30.0))[0]), 4)
    4.0275
    """
    return _area_and_perimeter(bore_mm, tangent, rule)[0]


def hydraulic_diameter_mm(bore_mm: Floats, tangent: Floats, rule: SectionRule) -> Floats:
    """Returns four areas over the perimeter (k,): the bore itself for round and for a full roof (P = 2 A / r).

    >>> flat = np.array([[1.0, 0.0, 0.0]])
    >>> round(float(hydraulic_diameter_mm(np.array([2.0]), flat, SectionRule(SectionShape.ROOFED, 45.0))[0]), 6)
    2.0
    """
    area, perimeter = _area_and_perimeter(bore_mm, tangent, rule)
    return 4.0 * area / perimeter


def section_centroid_mm(bore_mm: float, tangent: Floats, rule: SectionRule) -> Floats:
    """Returns where (3,) the centroid of a section's area lies from its centreline, whose tangent is (3,): towards up.

    From the outline in QUADRATURE points.

    >>> flat, rule = np.array([1.0, 0.0, 0.0]), SectionRule(SectionShape.ROOFED, 45.0)
    >>> section_centroid_mm(2.0, flat, rule).round(4).tolist()
    [0.0, 0.0, 0.0702]
    """
    sine = float(climb_sine(tangent[None, :], rule)[0])
    if rule.shape is SectionShape.ROUND or sine < 1e-9:
        return np.zeros(3)
    here = _outline(float(roof_share(np.array([bore_mm]), rule)[0]), sine, rule)
    after = np.roll(here, -1, axis=0)
    slices = here[:, 0] * after[:, 1] - after[:, 0] * here[:, 1]
    height = 0.5 * bore_mm * float((slices * (here[:, 1] + after[:, 1])).sum() / (3.0 * slices.sum()))
    across = rule.up - (rule.up @ tangent) / (tangent @ tangent) * tangent
    return np.asarray(height * across / np.linalg.norm(across), dtype=np.float64)


def _outline(share: float, sine: float, rule: SectionRule) -> Floats:
    """Returns the outline (QUADRATURE, 2), sideways and up, of a section of radius 1 that is not round."""
    angle = 2.0 * math.pi * (np.arange(QUADRATURE) + 0.5) / QUADRATURE
    unit = np.column_stack([np.cos(angle), np.sin(angle)])
    if rule.shape is SectionShape.ARCHED:  # convex: the point with the outward normal is h normal + h' tangent
        h = _support(np.ones(QUADRATURE), sine * unit[:, 1], rule, np.ones(1))
        slope = (np.roll(h, -1) - np.roll(h, 1)) / (2.0 * (angle[1] - angle[0]))
        return np.asarray(h[:, None] * unit + slope[:, None] * np.column_stack([-unit[:, 1], unit[:, 0]]))
    q = float(roof_radius_ratio(np.array([share]), rule)[0])
    apex = q * sine / rule.roof_cosine
    lean = math.acos(q / apex) if apex > 1.0 else 0.0  # angle from up to the roof line's normal
    from_up = np.abs(0.5 * math.pi - angle)
    roof = np.where(from_up < lean, q / np.cos(np.minimum(from_up, lean) - lean), 1.0)
    return np.asarray(np.maximum(roof, 1.0)[:, None] * unit)


def _area_and_perimeter(bore_mm: Floats, tangent: Floats, rule: SectionRule) -> tuple[Floats, Floats]:
    r = 0.5 * np.asarray(bore_mm, dtype=np.float64)
    sine = climb_sine(tangent, rule)
    if rule.shape is SectionShape.ARCHED:
        angle = 2.0 * math.pi * (np.arange(QUADRATURE) + 0.5) / QUADRATURE
        h = _support(np.ones((len(r), QUADRATURE)), sine[:, None] * np.sin(angle), rule, np.ones(1))
        step = angle[1] - angle[0]
        slope = (np.roll(h, -1, axis=1) - np.roll(h, 1, axis=1)) / (2.0 * step)
        return 0.5 * step * (h * h - slope * slope).sum(axis=1) * r * r, step * h.sum(axis=1) * r
    q = roof_radius_ratio(roof_share(bore_mm, rule), rule)
    apex = q * sine / rule.roof_cosine  # above the centre, over r
    has_roof = apex > 1.0
    lean = np.arccos(np.clip(q / np.where(has_roof, apex, 1.0), -1.0, 1.0))  # angle from up to the roof line's normal
    cut = np.arccos(np.clip(q, -1.0, 1.0))  # from that normal to where the roof line meets the circle
    along = q * (np.tan(lean) - np.tan(cut))
    slices = np.where(has_roof, q * along - (lean - cut), 0.0)
    edges = np.where(has_roof, 2.0 * along - 2.0 * (lean - cut), 0.0)
    return r * r * (math.pi + slices), r * (2.0 * math.pi + edges)


def _support(r_mm: Floats, rise: Floats, rule: SectionRule, share: Floats) -> Floats:
    """Returns the support of the ball with its roof towards directions whose component along up is `rise`."""
    if rule.shape is SectionShape.ROUND:
        return r_mm * np.ones(np.shape(rise))
    if rule.shape is SectionShape.ARCHED:
        k = rule.arch_ratio
        rise = np.clip(rise, -1.0, 1.0)
        level = np.sqrt(1.0 - rise * rise)
        arc = np.where(level >= (k - 1.0) / k, k - (k - 1.0) * level, rise * math.sqrt(2.0 * k - 1.0))
        return r_mm * np.where(rise > 0.0, arc, 1.0)
    return r_mm * np.maximum(1.0, roof_radius_ratio(share, rule) * rise / rule.roof_cosine)
