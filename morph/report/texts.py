"""Numbers, places and settings as words on the page; each with its unit."""

from __future__ import annotations

from typing import Any

from morph.body.finish import ThreadHole
from morph.body.plan import Exit
from morph.core.verdict import Outcome, Verdict
from morph.settings.job import FaceSealEnd

DECIMALS = {"mm": 2, "mm2": 1, "mm3": 0, "deg": 1, "count": 0, "ratio": 3, "bores": 3, "bar": 3, "m/s": 2, "L/min": 2}
UNIT_WORDS = {"mm2": "mm²", "mm3": "mm³", "deg": "°", "count": "", "ratio": ""}
LIMIT_WORDS = {"least": "≥", "most": "≤", "equal": "="}

CAUTIONS = (
    (
        "Hot coolant under pressure.",
        "A channel that opens while the press runs sprays hot water or oil. Test every circuit with cold water above "
        "its working pressure, away from people, before it meets a press; repeat after every rework.",
    ),
    (
        "Cracked tools.",
        "Thin walls between coolant and a moulded face carry pressure and heat in turns, and crack from inside, "
        "where nobody sees it. The limits here are settings, most of them common practice; they are no proof of "
        "strength or of life under load.",
    ),
    (
        "Metal powder.",
        "Powder left in a channel blocks it, sinters in heat treatment, and is a danger to breathe and to burn. Empty, "
        "rinse and inspect every branch before heat treatment, with the protection that the powder's safety data "
        "sheet asks for.",
    ),
    (
        "What this report is not.",
        "It states geometry and simple rules. Local codes for pressure equipment and machines, and the judgement of a "
        "licensed engineer, come before it.",
    ),
)


def amount(value: float | None, unit: str) -> str:
    """Returns a figure with its unit.

    >>> amount(3.14159, "mm"), amount(2.0, "count"), amount(None, "mm")
    ('3.14 mm', '2', '')
    """
    if value is None:
        return ""
    text = f"{value:,.{DECIMALS.get(unit, 3)}f}".replace(",", "\u202f")
    word = UNIT_WORDS.get(unit, unit)
    return text + ("" if word == "" else word if word == "°" else f" {word}")


def limit_words(verdict: Verdict) -> str:
    """Returns the limit of a verdict with its direction and unit; empty without one."""
    if verdict.limit is None:
        return ""
    return f"{LIMIT_WORDS.get(verdict.limit_is, '')} {amount(verdict.limit, verdict.unit)}"


def place_words(sheet_mm: tuple[float, float] | None, xyz_mm: tuple[float, float, float] | None) -> list[str]:
    """Returns where something is, on the sheet and in the part, one line each."""
    lines = []
    if sheet_mm is not None:
        lines.append("sheet " + ", ".join(f"{round(value, 1) + 0.0:.1f}" for value in sheet_mm) + " mm")
    if xyz_mm is not None:
        lines.append("part " + ", ".join(f"{round(value, 1) + 0.0:.1f}" for value in xyz_mm) + " mm")
    return lines


def drill_words(exit_: Exit, straight_mm: float) -> str:
    """Returns how deep a drill goes, or may follow a plain bore, from the finished face; empty for a seal groove.

    Args:
        exit_: the exit.
        straight_mm: how far its lead keeps straight behind the face.
    """
    detail = exit_.finish.detail
    if isinstance(detail, ThreadHole):
        return f"{amount(detail.drill_depth_mm, 'mm')}, drill {amount(detail.thread.drill_mm, 'mm')}"
    if isinstance(detail, FaceSealEnd):
        return ""
    return f"{amount(straight_mm, 'mm')} straight"


def end_words(exit_: Exit) -> str:
    """Returns how an exit is finished, with what the shop needs to machine it."""
    detail, land = exit_.finish.detail, amount(exit_.finish.land_mm, "mm")
    if isinstance(detail, ThreadHole):
        return (
            f"thread {detail.thread.designation}: pilot as printed {amount(exit_.bore_mm, 'mm')}, drill "
            f"{amount(detail.thread.drill_mm, 'mm')} to {amount(detail.drill_depth_mm, 'mm')}, thread "
            f"{amount(detail.thread_depth_mm, 'mm')} deep, flat land {land}"
        )
    if isinstance(detail, FaceSealEnd):
        return (
            f"face seal: groove {amount(detail.groove_inner_mm, 'mm')} to {amount(detail.groove_outer_mm, 'mm')}, "
            f"{amount(detail.groove_depth_mm, 'mm')} deep, flat land {land}; machined later, sizes as given, not "
            "checked against a standard"
        )
    return "plain, as printed"


def profile_rows(profile: dict[str, Any]) -> list[tuple[str, str, str]]:
    """Returns the process profile as rows of name, value with unit, and source."""
    rows = []
    for name, item in profile.items():
        items = item if isinstance(item, list) else [item]
        for index, one in enumerate(items):
            if isinstance(one, dict):
                label = f"{name}[{index + 1}]" if len(items) > 1 else name
                figure = f"{one['value']:g}" if "value" in one else f"{one['low']:g} to {one['high']:g}"
                rows.append((label, f"{figure} {one['unit']}", one["source"]))
    return rows


def outcome_class(outcome: Outcome) -> str:
    """Returns the outcome as a style class."""
    return outcome.value.replace(" ", "-")
