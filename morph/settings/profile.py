"""Process profiles: what one printing process can do, each number with its source.

A profile is a TOML file, shipped under ``settings/profiles/`` or given by path. The angle
convention is from the horizontal build plate (0 = flat ceiling, 90 = vertical).
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Sourced:
    """A number with its unit and where it comes from."""

    value: float
    unit: str
    source: str


@dataclass(frozen=True, slots=True)
class Profile:
    """One printing process with one material.

    Args:
        name: the name a job gives in [print] process.
        material: alloy in trade terms.
        layer_um: layer thickness.
        roof_angle_deg: flattest ceiling that prints without support.
        free_span_mm: widest flat ceiling that prints without support.
        wall_mm: thinnest wall that prints.
        smallest_bore_mm: smallest channel that stays open. largest_bore_mm: largest round bore allowed.
        powder_ball_mm: smallest passage through which powder leaves.
        position_band_mm: how far a printed wall may lie from its nominal place.
        bore_band_mm: how far a printed bore may differ from nominal.
        bend_radius_bores: least centreline bend radius in bores.
        machine_mm: build volume x, y, z, each Sourced.
        density_kg_m3: of the printed, heat-treated alloy.
    """

    name: str
    material: str
    layer_um: Sourced
    roof_angle_deg: Sourced
    free_span_mm: Sourced
    wall_mm: Sourced
    smallest_bore_mm: Sourced
    largest_bore_mm: Sourced
    powder_ball_mm: Sourced
    position_band_mm: Sourced
    bore_band_mm: Sourced
    bend_radius_bores: Sourced
    machine_mm: tuple[Sourced, Sourced, Sourced]
    density_kg_m3: Sourced
