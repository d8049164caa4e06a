"""The [coolant] table of a job: what flows, how it is driven, and what the bores are changed for."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

from morph.settings.job import Balance, CoolantSettings, FluidKind, FluidSettings, OwnFluid, Supply
from morph.settings.table import Table, nearest

LARGEST_FLOW_L_MIN = 10_000.0
LARGEST_DROP_BAR = 200.0
LOWEST_C, HIGHEST_C = -100.0, 400.0
LEAST_GLYCOL_PERCENT, MOST_GLYCOL_PERCENT = 10.0, 60.0
LEAST_HOSE_BORE_MM, LARGEST_HOSE_BORE_MM, LARGEST_HOSE_MM = 1.0, 200.0, 100_000.0
LARGEST_ROUGHNESS_UM = 2000.0

_DRIVES = ("flow_l_min", "drop_bar", "pump")
_OWN = {
    "density_kg_m3": (100.0, 5000.0, "kg/m3"),
    "viscosity_mpa_s": (0.05, 10_000.0, "mPa s"),
    "conductivity_w_mk": (0.01, 100.0, "W/mK"),
    "heat_capacity_j_kgk": (100.0, 10_000.0, "J/kgK"),
}
_OWN_LIMITS = ("freezes_c", "boils_c")
_KEYS = (
    "fluid",
    "inlet_c",
    *_DRIVES,
    "supply",
    "balance",
    "reversible",
    "flux",
    "check_3d",
    "hose_mm",
    "pressure_bar",
    "roughness_um",
    *_OWN,
    *_OWN_LIMITS,
)
_GLYCOL = re.compile(r"(ethylene-glycol|propylene-glycol)-(\d{1,2})")
_EXAMPLES = ("water", "ethylene-glycol-30", "propylene-glycol-30", "own")


def parse_coolant(values: Any, file: str, folder: Path) -> CoolantSettings:
    """Returns the [coolant] settings.

    Args:
        values: the parsed table.
        file: base name of the job file, for messages.
        folder: the job file's folder; paths of a pump curve or a flux image are relative to it.

    Raises:
        SettingError: a setting is missing, unknown, wrong, or in conflict with another; `coolant-drive` unless
            exactly one of flow_l_min, drop_bar and pump is given; `fluid-unknown`.
    """
    table = Table(values, file, "[coolant]", _KEYS)
    _require_one_drive(table)
    balance = table.choice("balance", Balance, Balance.NONE)
    if balance is not Balance.BY_HEAT:
        table.not_used(["flux"], f'when balance is "{balance.value}"')
    return CoolantSettings(
        fluid=_fluid(table),
        inlet_c=table.number("inlet_c", 20.0, least=LOWEST_C, most=HIGHEST_C, unit="C"),
        flow_l_min=table.optional_number("flow_l_min", above=0.0, most=LARGEST_FLOW_L_MIN, unit="L/min"),
        drop_bar=table.optional_number("drop_bar", above=0.0, most=LARGEST_DROP_BAR, unit="bar"),
        pump=folder / table.text("pump") if table.has("pump") else None,
        supply=table.choice("supply", Supply, Supply.SHARED),
        balance=balance,
        reversible=_switch(table, "reversible"),
        flux=folder / table.text("flux") if table.has("flux") else None,
        check_3d=_switch(table, "check_3d"),
        hose_mm=_hose_mm(table),
        pressure_bar=table.optional_number("pressure_bar", above=-1.0, most=LARGEST_DROP_BAR, unit="bar"),
        roughness_um=table.optional_number("roughness_um", least=0.0, most=LARGEST_ROUGHNESS_UM, unit="um"),
    )


def _require_one_drive(table: Table) -> None:
    given = [key for key in _DRIVES if table.has(key)]
    if len(given) != 1:
        table.refuse(
            "coolant-drive",
            given[1] if given else "",
            expected="exactly one of " + ", ".join(_DRIVES),
            found=" and ".join(given) if given else "none of them",
            do="Say what drives the coolant once: the whole flow, the pressure drop, or the pump's curve.",
        )


def _fluid(table: Table) -> FluidSettings:
    name = table.text("fluid") if table.has("fluid") else FluidKind.WATER.value
    own = (*_OWN, *_OWN_LIMITS)
    if name == FluidKind.OWN.value:
        return FluidSettings(FluidKind.OWN, own=_own_fluid(table))
    table.not_used(own, f'unless fluid is "{FluidKind.OWN.value}"')
    if name == FluidKind.WATER.value:
        return FluidSettings(FluidKind.WATER)
    match = _GLYCOL.fullmatch(name)
    if match is None:
        table.refuse(
            "fluid-unknown",
            "fluid",
            expected='"water", "ethylene-glycol-N" or "propylene-glycol-N" with N per cent of mass, or "own"',
            do=f'{nearest(name, _EXAMPLES)} An oil is "own" with its density, viscosity and thermal properties.',
        )
    percent = float(match[2])
    if not LEAST_GLYCOL_PERCENT <= percent <= MOST_GLYCOL_PERCENT:
        table.refuse(
            "setting-range",
            "fluid",
            expected=f"{LEAST_GLYCOL_PERCENT:g} to {MOST_GLYCOL_PERCENT:g} per cent of glycol by mass",
            do='Give a mix in that range, or use "own" with its properties.',
        )
    return FluidSettings(FluidKind(match[1]), percent)


def _own_fluid(table: Table) -> OwnFluid:
    numbers = {key: table.number(key, least=low, most=high, unit=unit) for key, (low, high, unit) in _OWN.items()}
    freezes_c, boils_c = (table.optional_number(key, least=LOWEST_C, most=HIGHEST_C, unit="C") for key in _OWN_LIMITS)
    if freezes_c is not None and boils_c is not None and freezes_c >= boils_c:
        table.refuse(
            "setting-order", "freezes_c", expected=f"less than boils_c = {boils_c:g} C", do="Exchange the two."
        )
    return OwnFluid(**numbers, freezes_c=freezes_c, boils_c=boils_c)


def _switch(table: Table, key: str) -> bool:
    value = table.raw(key) if table.has(key) else False
    if not isinstance(value, bool):
        table.refuse("setting-type", key, expected="true or false", do="Write true or false without quotes.")
    return value


def _hose_mm(table: Table) -> tuple[float, float] | None:
    if not table.has("hose_mm"):
        return None
    bore, length = table.numbers("hose_mm", 2, above=0.0, most=LARGEST_HOSE_MM)
    if not LEAST_HOSE_BORE_MM <= bore <= LARGEST_HOSE_BORE_MM or bore > length:
        table.refuse(
            "setting-order",
            "hose_mm",
            expected=f"first the bore, {LEAST_HOSE_BORE_MM:g} to {LARGEST_HOSE_BORE_MM:g} mm and less than the length",
            do="Write hose_mm = [bore, length], such as [10, 3000].",
        )
    return bore, length
