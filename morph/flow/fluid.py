"""Coolants: density, viscosity, conductivity, heat capacity and vapour pressure at a temperature.

Water, 0 to 180 C: own fits to the industrial formulation IAPWS-IF97 with the viscosity of R12-08 and the
conductivity of R15-11, at 1 bar and above 99 C at boiling pressure; within 0.05 %. Vapour pressure: W. Wagner,
A. Pruss, International equations for the saturation properties of ordinary water substance, J. Phys. Chem.
Ref. Data 22 (1993) 783-787.

Glycol and water, 10 to 60 % of mass, from freezing to 100 C: own fits to the mixes of pure glycol after A.
Melinder, Properties of secondary working fluids for indirect systems (IIR, 2010), as a property library
computes them; within 0.5 %. Inhibited mixes are up to 1 % denser and 8 % more viscous. Vapour pressure:
that of water times its share of the molecules (Raoult); the glycol's own is left out.

The user's own coolant: the numbers of the job, the same at every temperature.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev

from morph.core.errors import FlowError
from morph.flow import fluid_constants as fit
from morph.settings.job import FluidKind, FluidSettings

ATMOSPHERE_PA = 101_325.0
KELVIN = 273.15

CRITICAL_K, CRITICAL_PA = 647.096, 22.064e6
SATURATION = (
    (-7.85951783, 1.0),
    (1.84408259, 1.5),
    (-11.7866497, 3.0),
    (22.6807411, 3.5),
    (-15.9618719, 4.0),
    (1.80122502, 7.5),
)
"""Factors and powers of Wagner and Pruss."""

WATER_G_MOL = 18.0153
GLYCOL_G_MOL = {FluidKind.ETHYLENE_GLYCOL: 62.068, FluidKind.PROPYLENE_GLYCOL: 76.095}

_MIX = {
    FluidKind.ETHYLENE_GLYCOL: (
        fit.ETHYLENE_DENSITY_KG_M3,
        fit.ETHYLENE_LOG_VISCOSITY_PA_S,
        fit.ETHYLENE_CONDUCTIVITY_W_MK,
        fit.ETHYLENE_HEAT_CAPACITY_J_KGK,
        fit.ETHYLENE_FREEZES_C,
    ),
    FluidKind.PROPYLENE_GLYCOL: (
        fit.PROPYLENE_DENSITY_KG_M3,
        fit.PROPYLENE_LOG_VISCOSITY_PA_S,
        fit.PROPYLENE_CONDUCTIVITY_W_MK,
        fit.PROPYLENE_HEAT_CAPACITY_J_KGK,
        fit.PROPYLENE_FREEZES_C,
    ),
}


@dataclass(frozen=True, slots=True)
class Fluid:
    """A coolant at one temperature.

    Args:
        name: what it is, for people.
        temperature_c: where the properties hold.
        density_kg_m3, viscosity_pa_s, conductivity_w_mk, heat_capacity_j_kgk: its properties.
        vapour_pa: pressure below which it boils; None: not known.
        source: where the properties come from.
    """

    name: str
    temperature_c: float
    density_kg_m3: float
    viscosity_pa_s: float
    conductivity_w_mk: float
    heat_capacity_j_kgk: float
    vapour_pa: float | None
    source: str


def make_fluid(settings: FluidSettings, temperature_c: float) -> Fluid:
    """Returns the coolant at a temperature.

    Args:
        settings: what flows.
        temperature_c: its temperature.

    Raises:
        FlowError: `coolant-freezes` at or below the freezing point, `coolant-too-hot` above the range of the data.
    """
    if settings.kind is FluidKind.WATER:
        return _water(temperature_c)
    if settings.kind is FluidKind.OWN:
        return _own(settings, temperature_c)
    return _mix(settings, temperature_c)


def water_vapour_pa(temperature_c: float) -> float:
    """Returns the vapour pressure of water in Pa, 0 to 370 C.

    >>> round(water_vapour_pa(100.0) / 1e5, 4)
    1.0142
    """
    kelvin = temperature_c + KELVIN
    left = 1.0 - kelvin / CRITICAL_K
    total = sum(factor * left**power for factor, power in SATURATION)
    return CRITICAL_PA * math.exp(CRITICAL_K / kelvin * total)


def _require_range(name: str, temperature_c: float, freezes_c: float | None, most_c: float | None) -> None:
    if freezes_c is not None and temperature_c <= freezes_c:
        raise FlowError(
            "coolant-freezes",
            expected=f"{name} above its freezing point of {freezes_c:.1f} C",
            found=f"{temperature_c:g} C",
            where="[coolant] inlet_c",
            do="Raise inlet_c, or use a mix with more glycol.",
        )
    if most_c is not None and temperature_c > most_c:
        raise FlowError(
            "coolant-too-hot",
            expected=f"{name} at no more than {most_c:g} C, the end of its data",
            found=f"{temperature_c:g} C",
            where="[coolant] inlet_c",
            do='Lower inlet_c, or give the properties yourself with fluid = "own".',
        )


def _unit(value: float, low_high: tuple[float, float]) -> float:
    low, high = low_high
    return 2.0 * (value - low) / (high - low) - 1.0


def _water(temperature_c: float) -> Fluid:
    _require_range("water", temperature_c, *fit.WATER_RANGE_C)
    x = _unit(temperature_c, fit.WATER_RANGE_C)
    series = (
        fit.WATER_DENSITY_KG_M3,
        fit.WATER_LOG_VISCOSITY_PA_S,
        fit.WATER_CONDUCTIVITY_W_MK,
        fit.WATER_HEAT_CAPACITY_J_KGK,
    )
    density, log_viscosity, conductivity, capacity = (float(chebyshev.chebval(x, row)) for row in series)
    return Fluid(
        "water",
        temperature_c,
        density,
        math.exp(log_viscosity),
        conductivity,
        capacity,
        water_vapour_pa(temperature_c),
        "IAPWS-IF97, R12-08, R15-11 (own fits within 0.05 %)",
    )


def _mix(settings: FluidSettings, temperature_c: float) -> Fluid:
    *tables, freezing = _MIX[settings.kind]
    percent = settings.glycol_percent
    y = _unit(percent, fit.MIX_RANGE_PERCENT)
    name = f"{percent:g} % {settings.kind.value.replace('-', ' ')} by mass in water"
    _require_range(name, temperature_c, float(chebyshev.chebval(y, freezing)), fit.MIX_RANGE_C[1])
    x = _unit(temperature_c, fit.MIX_RANGE_C)
    density, log_viscosity, conductivity, capacity = (
        float(chebyshev.chebval2d(x, y, np.array(table))) for table in tables
    )
    water, glycol = (100.0 - percent) / WATER_G_MOL, percent / GLYCOL_G_MOL[settings.kind]
    return Fluid(
        name,
        temperature_c,
        density,
        math.exp(log_viscosity),
        conductivity,
        capacity,
        water / (water + glycol) * water_vapour_pa(temperature_c),
        "Melinder 2010, pure glycol (own fits within 0.5 %)",
    )


def _own(settings: FluidSettings, temperature_c: float) -> Fluid:
    own = settings.own
    if own is None:
        raise ValueError("settings: expected the user's properties")
    _require_range("the coolant", temperature_c, own.freezes_c, own.boils_c)
    return Fluid(
        "own coolant",
        temperature_c,
        own.density_kg_m3,
        1e-3 * own.viscosity_mpa_s,
        own.conductivity_w_mk,
        own.heat_capacity_j_kgk,
        None,
        "the job's own numbers",
    )
