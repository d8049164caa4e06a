"""What the layout stage dropped, offers, and did because the job accepts it, as rows of words."""

from __future__ import annotations

from typing import Any

from morph.layout.graph import Ahead, DropReason
from morph.report.texts import amount

Row = tuple[str, str, str]
AHEAD = {
    Ahead.GREY.value: "grey ahead",
    Ahead.SOLID.value: "solid metal ahead",
    Ahead.FRAME.value: "the frame ahead",
}
DONE = {"bridge": "built as accepted: suggestion", "trim": "taken off as accepted: dead end"}


def layout_rows(layout: dict[str, Any]) -> list[Row]:
    """Returns what, where and how large: accepted changes, wide regions, dead ends, suggestions, dropped pieces.

    Args:
        layout: the layout block of the summary.
    """
    rows = [
        (
            f"{DONE[item['what']]} {item['id']}",
            _at(item["sheet_mm"]),
            f"{amount(item['length_mm'], 'mm')} long, mean bore {amount(item['bore_mm'], 'mm')}",
        )
        for item in layout["accepted"]
    ]
    rows += [_wide(item) for item in layout["wide"]]
    rows += [_dead_end(item, "") for item in layout["dead_end_places"]]
    rows += [_dead_end(item, ", on a piece without a port") for item in layout["loose_dead_end_places"]]
    rows += [_suggestion(item) for item in layout["suggestions"]]
    rows += [
        (f"dropped {item['reason']}", _at(item["sheet_mm"]), amount(item["area_mm2"], "mm2"))
        for item in layout["dropped"]
        if item["reason"] != DropReason.TRIMMED.value or not layout["accepted"]
    ]
    return rows


def offers(layout: dict[str, Any]) -> tuple[str, str]:
    """Returns the first suggestion and the first dead end that a job could accept, by id; empty where there is none."""
    ends = [item["id"] for item in layout["dead_end_places"] if item["id"]]
    return next((item["id"] for item in layout["suggestions"]), ""), next(iter(ends), "")


def _at(place: Any) -> str:
    return "{:.1f}, {:.1f} mm".format(*(round(value, 1) + 0.0 for value in place))


def _wide(item: dict[str, Any]) -> Row:
    said = f"wide region {item['id']}: {item['said']}"
    if item["ways"] > 1 and item["lost_mm2"] > 0.0:
        said += f"; the part of it that is too short for that is capped, {item['lost_mm2']:.1f} mm2 are lost"
    return (
        said.replace(" %", "\u00a0%").replace("mm2", "mm²"),
        _at(item["sheet_mm"]),
        f"{amount(item['length_mm'], 'mm')} long, up to {amount(item['widest_mm'], 'mm')} wide, "
        f"{amount(item['area_mm2'], 'mm2')}",
    )


def _dead_end(item: dict[str, Any], more: str) -> Row:
    if item["id"] is None:
        return (
            f"dead end {item['node']} of {item['branch']}{more}",
            _at(item["sheet_mm"]),
            f"{amount(item['length_mm'], 'mm')} long",
        )
    words = f"dead end {item['id']} ({item['node']} of {item['branch']}{more}): {AHEAD[item['ahead']]}"
    if item["suggestion"]:
        words += f", {item['suggestion']} leads on to {item['onto']}"
    elif item["lowest_density_ratio"] is not None:
        words += f", density down to {item['lowest_density_ratio']:.2f} within a bore"
    return (
        words,
        _at(item["end_mm"]),
        f"{amount(item['length_mm'], 'mm')} long, bore {amount(item['bore_mm'], 'mm')} at its end",
    )


def _suggestion(item: dict[str, Any]) -> Row:
    likely = ", likely a blocked channel" if item["likely"] else ""
    wide = f", {amount(item['width_mm'], 'mm')} wide" if item["width_mm"] is not None else ""
    grey = f", {amount(item['grey_mm'], 'mm')} of it grey{wide}" if item["grey_mm"] > 0.0 else ""
    return (
        f"suggestion {item['id']}: {item['node']} to {item['onto']}{likely}",
        _at(item["middle_mm"] if item["grey_mm"] > 0.0 else item["sheet_mm"]),
        f"way of {amount(item['gap_mm'], 'mm')}{grey}, density down to {item['lowest_density_ratio']:.2f}",
    )
