"""Conversions between the shop's units (mm, bar, L/min, degrees) and SI; the only place they happen."""

from __future__ import annotations


def mass_g(volume_mm3: float, density_kg_m3: float) -> float:
    """Returns the mass in g of `volume_mm3` of a material of `density_kg_m3`.

    >>> mass_g(1000.0, 8000.0)
    8.0
    """
    return volume_mm3 * density_kg_m3 * 1e-6


def m3_s_from_l_min(flow_l_min: float) -> float:
    """Returns a flow in m3/s.

    >>> m3_s_from_l_min(60.0)
    0.001
    """
    return flow_l_min / 60_000.0


def l_min_from_m3_s(flow_m3_s: float) -> float:
    """Returns a flow in L/min.

    >>> l_min_from_m3_s(0.001)
    60.0
    """
    return flow_m3_s * 60_000.0


def pa_from_bar(pressure_bar: float) -> float:
    """Returns a pressure in Pa.

    >>> pa_from_bar(1.5)
    150000.0
    """
    return pressure_bar * 1e5


def bar_from_pa(pressure_pa: float) -> float:
    """Returns a pressure in bar.

    >>> bar_from_pa(250000.0)
    2.5
    """
    return pressure_pa / 1e5
