"""A branch of the channel plan as a row of segments: section, roughness, bend and what its ends cost.

Every sample interval of the centreline is a segment with the section of its mean bore. Segments reach from node to
node; what junctions take of them is found where all legs are known (junction_length.py).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.finish import Finish, ThreadHole
from morph.body.plan import PlanBranch
from morph.body.section import SectionRule, climb_sine, hydraulic_diameter_mm, section_area_mm2
from morph.core.arrays import Floats
from morph.core.errors import FlowError
from morph.flow.duct_table import friction_factor_re
from morph.flow.friction import ROUND_FRICTION_RE
from morph.flow.pipe_law import Segments
from morph.settings.profile import Profile

SAND_PER_RA = 5.86
"""Sand-grain roughness over Ra (Adams, Grant, Watson 2012, Int. J. Mech. Eng. Mechatronics 1(2) 66-71)."""

ENTRY, EXIT = 0.5, 1.0
"""Coefficients of a sharp flush entry and of the exit into a large space (Idelchik; Crane TP-410)."""

CONTRACTION = 0.5
"""Sudden contraction: this times (1 - small / large area), on the small section (Idelchik)."""

LEAST_BORE_MM = 0.05


@dataclass(frozen=True, slots=True)
class Roughness:
    """Sand-grain roughness in mm of a wall that stands upright and of the wall of a channel that lies flat."""

    upright_mm: float
    flat_mm: float


def make_roughness(profile: Profile, roughness_um: float | None) -> Roughness:
    """Returns the user's roughness, or the profile's Ra times 5.86.

    Upright walls get the smooth end of the profile's range; round a channel that lies flat half the wall looks down
    and counts with the rough end.
    """
    if roughness_um is not None:
        return Roughness(1e-3 * roughness_um, 1e-3 * roughness_um)
    ra = profile.roughness_ra_um
    return Roughness(1e-3 * SAND_PER_RA * ra.low, 1e-3 * SAND_PER_RA * ra.middle)


def branch_segments(
    branch: PlanBranch, rule: SectionRule, roughness: Roughness, finish: Finish | None, bore_change_mm: float = 0.0
) -> Segments:
    """Returns a branch as segments (first = [0, k - 1]).

    Args:
        branch: centreline and bores.
        rule: how channels are shaped.
        roughness: of the walls.
        finish: of its end when that is an exit, else None.
        bore_change_mm: added to every printed bore, for the band of the process.

    Raises:
        FlowError: `flow-blocked` when nothing is left of a bore.
    """
    bore = branch.bore_mm + bore_change_mm
    if bore.min() < LEAST_BORE_MM:
        x, y, z = branch.xyz_mm[int(bore.argmin())]
        raise FlowError(
            "flow-blocked",
            expected=f"bores of at least {LEAST_BORE_MM:g} mm after the process' band",
            found=f"{bore.min():.3f} mm in {branch.id} (band {bore_change_mm:+.3f} mm)",
            where=f"branch {branch.id} at ({x:.2f}, {y:.2f}, {z:.2f}) mm",
            do="Give a larger bore_range_mm, or a process with a smaller bore band.",
        )
    step = np.diff(branch.xyz_mm, axis=0)
    chord = np.linalg.norm(step, axis=1)
    tangent = step / np.maximum(chord, 1e-12)[:, None]
    middle = 0.5 * (bore[1:] + bore[:-1])
    area, diameter = section_area_mm2(middle, tangent, rule), hydraulic_diameter_mm(middle, tangent, rule)
    laminar = friction_factor_re(middle, tangent, rule)
    forward, backward = np.zeros(len(middle)), np.zeros(len(middle))
    if finish is not None:
        _cut_end(finish, chord, area, diameter, laminar)
        _steps(area, forward, backward)
        forward[-1] += EXIT
        backward[-1] += ENTRY
    flat = climb_sine(tangent, rule)
    length = chord * branch.length_mm / max(chord.sum(), 1e-12)
    return Segments(
        first=np.array([0, len(middle)]),
        length_m=1e-3 * length,
        area_m2=1e-6 * area,
        diameter_m=1e-3 * diameter,
        friction_re=laminar,
        roughness_m=1e-3 * (roughness.upright_mm + (roughness.flat_mm - roughness.upright_mm) * flat),
        curvature_1_m=1e3 * _curvature(branch.xyz_mm, middle),
        minor_forward=forward,
        minor_backward=backward,
    )


def _cut_end(finish: Finish, chord: Floats, area: Floats, diameter: Floats, laminar: Floats) -> None:
    """Puts the drilled bore of a thread into the last segments of a lead."""
    if not isinstance(finish.detail, ThreadHole):
        return
    from_exit = chord[::-1].cumsum()[::-1] - 0.5 * chord
    drilled = from_exit < finish.detail.drill_depth_mm
    bore = finish.detail.thread.drill_mm
    wider = drilled & (0.25 * np.pi * bore * bore > area)
    area[wider], diameter[wider], laminar[wider] = 0.25 * np.pi * bore * bore, bore, ROUND_FRICTION_RE


def _steps(area: Floats, forward: Floats, backward: Floats) -> None:
    """Adds what sudden steps of the area (k,) cost: Borda-Carnot where it widens, a contraction where it narrows."""
    small = np.minimum(area[1:], area[:-1]) / np.maximum(area[1:], area[:-1])
    for k in np.flatnonzero(small < 0.85):
        widening, narrowing = (1.0 - small[k]) ** 2, CONTRACTION * (1.0 - small[k])
        if area[k + 1] > area[k]:
            forward[k] += widening
            backward[k] += narrowing
        else:
            forward[k + 1] += narrowing
            backward[k + 1] += widening


def _curvature(points: Floats, bore: Floats) -> Floats:
    """Returns the curvature (k - 1,) in 1/mm of a centreline (k, 3), by the turn between chords of half a bore."""
    edge = np.concatenate([[0.0], np.linalg.norm(np.diff(points, axis=0), axis=1).cumsum()])
    place = 0.5 * (edge[1:] + edge[:-1])
    back, ahead = np.maximum(place - 0.5 * bore, 0.0), np.minimum(place + 0.5 * bore, edge[-1])

    def at(s: Floats) -> Floats:
        return np.stack([np.interp(s, edge, points[:, k]) for k in range(3)], axis=1)

    here = at(place)
    before, after = here - at(back), at(ahead) - here
    size = np.linalg.norm(before, axis=1) * np.linalg.norm(after, axis=1)
    cross = np.linalg.norm(np.cross(before, after), axis=1)
    angle = np.arctan2(cross, (before * after).sum(axis=1))
    usable = (place - back > 0.2 * bore) & (ahead - place > 0.2 * bore) & (size > 0.0)
    found = np.where(usable, angle / np.maximum(0.5 * (ahead - back), 1e-12), 0.0)
    if usable.any():
        found = np.interp(place, place[usable], found[usable])
    return np.asarray(found, dtype=np.float64)
