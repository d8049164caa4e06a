"""Fits the polynomials of morph/flow/fluid_constants.py anew and prints that file.

Needs iapws (IAPWS-IF97 with the viscosity and conductivity of R12-08 and R15-11) and CoolProp (incompressible mixes
MEG and MPG after A. Melinder). Run: python tests/flow/remake_fluid_constants.py > morph/flow/fluid_constants.py
"""

import numpy as np
from numpy.polynomial import chebyshev

WATER_C, MIX_C, MIX_PERCENT = (0.0, 180.0), (-50.0, 100.0), (10.0, 60.0)
WATER_DEGREE, MIX_DEGREE = 8, (7, 4)
NAMES = ("density_kg_m3", "log_viscosity_pa_s", "conductivity_w_mk", "heat_capacity_j_kgk")

HEAD = '''"""Polynomials of coolant properties: own fits, see `fluid.py` for what was fitted and how well.

Chebyshev series on the whole range of temperature, and of glycol content, scaled to -1..1. Rows of a mix go by the
degree in temperature, columns by the degree in per cent of mass.
"""

from __future__ import annotations

'''


def unit(value, low_high):
    low, high = low_high
    return 2.0 * (np.asarray(value) - low) / (high - low) - 1.0


def water_values(temperature_c):
    """Rows of the four properties of the liquid at 1 bar, or just above boiling pressure."""
    from iapws import IAPWS97

    rows = []
    for t in temperature_c:
        pressure = 0.1
        if t > 99.0:
            pressure = 1.0001 * IAPWS97(T=t + 273.15, x=0).P
        w = IAPWS97(T=max(t, 1e-4) + 273.15, P=max(pressure, 0.1))
        rows.append([w.rho, np.log(w.mu), w.k, 1e3 * w.cp])
    return np.array(rows)


def mix_values(name, percent, temperature_c):
    """Rows of the four properties of a mix, and its freezing point in C."""
    import CoolProp.CoolProp as cp

    state = cp.AbstractState("INCOMP", name)
    state.set_mass_fractions([0.01 * percent])
    freezes = state.keyed_output(cp.iT_freeze) - 273.15
    rows = []
    for t in temperature_c:
        if t < freezes + 0.1:
            continue
        state.update(cp.PT_INPUTS, 2e5, t + 273.15)
        rows.append([t, state.rhomass(), np.log(state.viscosity()), state.conductivity(), state.cpmass()])
    return np.array(rows), freezes


def water_fit():
    t = 90.0 - 90.0 * np.cos(np.pi * (np.arange(91) + 0.5) / 91)
    return chebyshev.chebfit(unit(t, WATER_C), water_values(t), WATER_DEGREE).T


def mix_fit(name):
    x, y, values, contents, freezing = [], [], [], [], []
    for percent in np.linspace(*MIX_PERCENT, 26):
        rows, freezes = mix_values(name, percent, np.linspace(*MIX_C, 76))
        x.append(unit(rows[:, 0], MIX_C))
        y.append(np.full(len(rows), unit(percent, MIX_PERCENT)))
        values.append(rows[:, 1:])
        contents.append(unit(percent, MIX_PERCENT))
        freezing.append(freezes)
    base = chebyshev.chebvander2d(np.concatenate(x), np.concatenate(y), MIX_DEGREE)
    found = np.linalg.lstsq(base, np.concatenate(values), rcond=1e-12)[0]
    shape = (MIX_DEGREE[0] + 1, MIX_DEGREE[1] + 1)
    return [column.reshape(shape) for column in found.T], chebyshev.chebfit(contents, freezing, 5)


def text(array):
    return "(" + ", ".join(text(a) if np.ndim(a) else f"{float(a):.9g}" for a in array) + ")"


if __name__ == "__main__":
    out = HEAD
    out += f"WATER_RANGE_C = {WATER_C}\nMIX_RANGE_C, MIX_RANGE_PERCENT = {MIX_C}, {MIX_PERCENT}\n\n"
    for name, row in zip(NAMES, water_fit(), strict=True):
        out += f"WATER_{name.upper()} = {text(row)}\n"
    for prefix, fluid in (("ETHYLENE", "MEG"), ("PROPYLENE", "MPG")):
        tables, freezing = mix_fit(fluid)
        out += "\n"
        for name, table in zip(NAMES, tables, strict=True):
            out += f"{prefix}_{name.upper()} = {text(table)}\n"
        out += f"{prefix}_FREEZES_C = {text(freezing)}\n"
    print(out, end="")
