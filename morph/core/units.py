"""Conversions between the shop's units (mm, bar, L/min, degrees) and SI; the only place they happen."""

from __future__ import annotations


def mass_g(volume_mm3: float, density_kg_m3: float) -> float:
    """Returns the mass in g of `volume_mm3` of a material of `density_kg_m3`.

    >>> mass_g(1000.0, 8000.0)
    8.0
    """
    return volume_mm3 * density_kg_m3 * 1e-6
