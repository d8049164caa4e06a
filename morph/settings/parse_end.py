"""The end of a [[port]]: plain, a thread, or a face seal, each with the keys that belong to it."""

from __future__ import annotations

from morph.settings.job import EndSettings, FaceSealEnd, PlainEnd, ThreadEnd
from morph.settings.table import Table

LARGEST_END_MM = 500.0

_KEYS_OF_END: dict[str, tuple[str, ...]] = {
    "plain": (),
    "thread": ("thread", "thread_depth_mm", "run_out_mm", "drill_stock_mm", "land_mm"),
    "face-seal": ("groove_inner_mm", "groove_outer_mm", "groove_depth_mm", "land_mm"),
}
END_KEYS = ("end", *dict.fromkeys(key for keys in _KEYS_OF_END.values() for key in keys))


def parse_end(table: Table) -> EndSettings:
    """Returns how the end of a port is finished; plain when the table does not say.

    Raises:
        SettingError: a setting is missing, wrong, or belongs to another kind of end.
    """
    kind = table.word("end", list(_KEYS_OF_END)) if table.has("end") else "plain"
    table.not_used(set(END_KEYS) - {"end", *_KEYS_OF_END[kind]}, f'when end is "{kind}"')
    if kind == "thread":
        return _thread(table)
    return _face_seal(table) if kind == "face-seal" else PlainEnd()


def _thread(table: Table) -> ThreadEnd:
    return ThreadEnd(
        designation=table.text("thread"),
        thread_depth_mm=table.optional_number("thread_depth_mm", above=0.0, most=LARGEST_END_MM),
        run_out_mm=table.optional_number("run_out_mm", least=0.0, most=LARGEST_END_MM),
        drill_stock_mm=table.number("drill_stock_mm", 0.3, least=0.0, most=5.0),
        land_mm=table.optional_number("land_mm", above=0.0, most=LARGEST_END_MM),
    )


def _face_seal(table: Table) -> FaceSealEnd:
    inner, outer, depth, land = (table.number(key, above=0.0, most=LARGEST_END_MM) for key in _KEYS_OF_END["face-seal"])
    if not inner < outer:
        table.refuse(
            "setting-order",
            "groove_outer_mm",
            expected=f"more than groove_inner_mm = {inner:g} mm",
            do="Both are diameters of the groove's walls.",
        )
    if land < outer:
        table.refuse(
            "setting-order",
            "land_mm",
            expected=f"at least groove_outer_mm = {outer:g} mm",
            do="land_mm is the diameter of the flat face that groove and ring need.",
        )
    return FaceSealEnd(inner, outer, depth, land)
