"""Ceilings: channel wall that faces down flatter than the roof angle, and the widest piece of it.

A ceiling is flat where its angle from the build plate (0 = level) is below the roof angle. The
unsupported span is the largest circle, seen along the build direction, that fits inside a flat
patch; it decides, the area only informs.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.check.centreline import Centrelines, Place
from morph.check.channel_wall import nearest_samples
from morph.check.flat_circle import largest_circle, patch_numbers
from morph.check.flat_patch import FlatTriangles, find_flat, flat_area_mm2
from morph.check.machine import upright_frame
from morph.check.rows import judge_length, place
from morph.core.arrays import Floats
from morph.core.verdict import Outcome, Verdict
from morph.geometry.mesh import Mesh, mesh_area_mm2
from morph.settings.profile import Profile


@dataclass(frozen=True, slots=True)
class CeilingFinding:
    """Flat ceiling of a channel wall.

    Args:
        area_mm2: its area. share: of the whole channel wall.
        span_mm: diameter of the largest circle in it, seen along the build direction (0 for no flat ceiling).
        xyz_mm: the middle of that circle, None for no flat ceiling.
    """

    area_mm2: float
    share: float
    span_mm: float
    xyz_mm: Place | None


def measure_ceiling(wall: Mesh, direction: Floats, roof_angle_deg: float) -> CeilingFinding:
    """Returns the flat ceiling of a channel wall.

    Args:
        wall: triangles facing into the channel.
        direction: (3,) unit, from the plate into the part.
        roof_angle_deg: flattest ceiling that prints without support, from the build plate.
    """
    flat = find_flat(wall, direction, roof_angle_deg)
    circle = largest_circle(wall, flat, upright_frame(direction))
    if circle is None:
        return CeilingFinding(0.0, 0.0, 0.0, None)
    area = flat_area_mm2(wall, flat)
    return CeilingFinding(area, area / mesh_area_mm2(wall), circle[0], place(circle[1]))


@dataclass(frozen=True, slots=True)
class FlatPatch:
    """One connected piece of flat ceiling: area, the middle of its area on the wall, and the triangles it lies in."""

    area_mm2: float
    xyz_mm: Place
    triangles: tuple[int, ...]


def list_flat_patches(wall: Mesh, direction: Floats, roof_angle_deg: float) -> tuple[FlatPatch, ...]:
    """Returns where the flat ceiling of a channel wall lies, largest patch first: what a picture of it shows.

    Args:
        wall: triangles facing into the channel.
        direction: (3,) unit, from the plate into the part.
        roof_angle_deg: flattest ceiling that prints without support, from the build plate.
    """
    flat = find_flat(wall, direction, roof_angle_deg)
    patches = []
    number = patch_numbers(wall, flat)
    for rows in (np.flatnonzero(number == patch) for patch in range(int(number.max(initial=-1)) + 1)):
        own = FlatTriangles(flat.triangle[rows], flat.over_deg[rows])
        centre = wall.vertices_mm[wall.triangles[own.triangle]].mean(axis=1)
        middle = centre.mean(axis=0)
        nearest = centre[int(np.argmin(((centre - middle) ** 2).sum(axis=1)))]
        patches.append(FlatPatch(flat_area_mm2(wall, own), place(nearest), tuple(own.triangle.tolist())))
    return tuple(sorted(patches, key=lambda patch: (-round(patch.area_mm2, 6), patch.xyz_mm)))


def check_ceiling(wall: Mesh, profile: Profile, direction: Floats, lines: Centrelines | None = None) -> list[Verdict]:
    """Returns the `ceiling` row (area, informs) and the `span` row (decides).

    Args:
        wall: channel wall as written, facing into the channel.
        profile: roof angle and free span.
        direction: (3,) unit build direction.
        lines: centrelines to name the branch by; None for a mesh without a plan.
    """
    roof, free, band = profile.roof_angle_deg, profile.free_span_mm, profile.bore_band_mm.value
    found = measure_ceiling(wall, direction, roof.value)
    ids: tuple[str, ...] = ()
    sheet = None
    if lines is not None and found.xyz_mm is not None:
        sample = int(nearest_samples(lines, np.array([found.xyz_mm]))[0])
        ids, sheet = (lines.branch_of(sample).id,), lines.sheet_of(sample)
    outcome = judge_length(found.span_mm, free.value, band, "most") if found.xyz_mm else Outcome.PASS
    at = f", in {ids[0]}" if ids else ""
    return [
        Verdict(
            "ceiling",
            Outcome.WATCH if outcome is not Outcome.PASS else Outcome.PASS,
            f"{found.area_mm2:.1f} mm2 of the channel wall ({100.0 * found.share:.1f} %) is ceiling flatter than "
            f"{roof.value:.0f} deg; what decides is its unsupported span.",
            value=found.area_mm2,
            unit="mm2",
            source=roof.source,
            branch_ids=ids,
            sheet_mm=sheet,
            xyz_mm=found.xyz_mm,
        ),
        Verdict(
            "span",
            outcome,
            f"The largest unsupported span is {found.span_mm:.2f} mm{at}; {free.value:.2f} mm print freely after a "
            f"band of {band:.2f} mm.",
            value=found.span_mm,
            unit="mm",
            limit=free.value,
            limit_is="most",
            band=band,
            source=free.source,
            branch_ids=ids,
            sheet_mm=sheet,
            xyz_mm=found.xyz_mm,
            hint="" if outcome is Outcome.PASS else "Lower the bore or turn the build direction.",
        ),
    ]
