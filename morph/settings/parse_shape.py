"""The [section], [blank] and [[hole]] tables of a job: the shapes the channels live in."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from morph.read.mesh_file import LengthUnit
from morph.settings.job import (
    BlankSettings,
    BoxBlankSettings,
    CarrierBlankSettings,
    CylinderBlankSettings,
    FlangeSettings,
    HoleSettings,
    MeshBlankSettings,
    SectionSettings,
    SectionShape,
)
from morph.settings.parse_carrier import LARGEST_RADIUS_MM
from morph.settings.parse_layout import FARTHEST_MM, LONGEST_NAME_BYTES, direction
from morph.settings.table import Table

LARGEST_BORE_MM = 100.0
LARGEST_WALL_MM = 500.0
MOST_HOLES = 500
FACES = (
    *("carrier", "foot", "top", "back", "outer", "inner", "flange", "rim", "side"),
    *("-x", "+x", "-y", "+y", "-z", "+z"),
)
"""Every name a face of some blank can have; which of them this job's blank has is settled when it is made."""

_SECTION_KEYS = ("shape", "bore_scale", "bore_range_mm", "blend_mm")
_BLANK_OF_KIND = {
    "carrier": ("margin_mm", "thickness_mm"),
    "cylinder": ("radius_mm", "z_mm"),
    "box": ("min_mm", "max_mm"),
    "mesh": ("file", "unit"),
}
_NO_FLANGE = {
    "box": "A flange is a disc about a round core; make the box itself larger at its foot.",
    "mesh": "Draw the flange into the mesh itself: the blank is taken as it lies.",
}


def parse_section(values: Any, file: str) -> SectionSettings:
    """Returns the [section] settings.

    Raises:
        SettingError: a setting is unknown or wrong.
    """
    table = Table(values, file, "[section]", _SECTION_KEYS)
    bore_range_mm = None
    if table.has("bore_range_mm"):
        bore_range_mm = ordered_pair(table, "bore_range_mm", above=0.0, most=LARGEST_BORE_MM, equal=True)
    return SectionSettings(
        shape=table.choice("shape", SectionShape, SectionSettings().shape),
        bore_scale=table.number("bore_scale", 1.0, above=0.0, most=10.0, unit=""),
        bore_range_mm=bore_range_mm,
        blend_mm=table.number("blend_mm", 0.6, least=0.0, most=10.0),
    )


def parse_blank(values: Any, file: str, folder: Path) -> BlankSettings:
    """Returns the [blank] settings.

    Args:
        values: the parsed table.
        file: base name of the job file, for messages.
        folder: of the job file; a mesh file is relative to it.

    Raises:
        SettingError: a setting is unknown, wrong, belongs to another kind of blank, or is not available yet.
    """
    own = [key for keys in _BLANK_OF_KIND.values() for key in keys]
    table = Table(values, file, "[blank]", ["kind", "part_faces", "port_faces", "stock_mm", "flange", *own])
    kind = "carrier"
    if table.has("kind"):
        kind = table.word("kind", list(_BLANK_OF_KIND))
    table.not_used(set(own) - set(_BLANK_OF_KIND[kind]), f'when kind is "{kind}"')
    if kind in _NO_FLANGE and table.has("flange"):
        table.refuse("setting-conflict", "flange", expected=f'no flange when kind is "{kind}"', do=_NO_FLANGE[kind])
    part_faces = table.names("part_faces", FACES) if table.has("part_faces") else ("carrier",)
    port_faces = table.names("port_faces", FACES) if table.has("port_faces") else ("foot",)
    if "carrier" not in part_faces:
        table.refuse(
            "part-faces-carrier",
            "part_faces",
            expected='"carrier" among them',
            do="The carrier always shapes the part.",
        )
    shared = sorted(set(part_faces) & set(port_faces))
    if shared:
        table.refuse(
            "face-part-and-port",
            "port_faces",
            expected="no face that shapes the part",
            found=", ".join(shared),
            do="A port in a part face would leak into the part; remove the face from one of the two lists.",
        )
    shape = _mesh_shape(table, folder) if kind == "mesh" else _blank_shape(table, kind)
    return BlankSettings(shape, part_faces, port_faces, _stock(table, file), _flange(table, file))


def _mesh_shape(table: Table, folder: Path) -> MeshBlankSettings:
    name = table.text("file")
    if any(len(part.encode("utf-8", "replace")) > LONGEST_NAME_BYTES for part in Path(name).parts):
        table.refuse(
            "setting-text",
            "file",
            expected=f"a file name of at most {LONGEST_NAME_BYTES} bytes",
            do="Give the file a shorter name.",
        )
    return MeshBlankSettings(folder / name, table.choice("unit", LengthUnit) if table.has("unit") else None)


def _blank_shape(table: Table, kind: str) -> CarrierBlankSettings | CylinderBlankSettings | BoxBlankSettings:
    if kind == "cylinder":
        radius_mm = table.number("radius_mm", above=0.0, most=LARGEST_RADIUS_MM)
        return CylinderBlankSettings(radius_mm, ordered_pair(table, "z_mm", least=-FARTHEST_MM, most=FARTHEST_MM))
    if kind == "box":
        low = table.numbers("min_mm", 3, least=-FARTHEST_MM, most=FARTHEST_MM)
        high = table.numbers("max_mm", 3, least=-FARTHEST_MM, most=FARTHEST_MM)
        for axis, (lower, upper) in zip("xyz", zip(low, high, strict=True), strict=True):
            if not lower < upper:
                table.refuse(
                    "setting-order",
                    "max_mm",
                    expected=f"{axis} above min_mm's {lower:g} mm",
                    found=f"{axis} = {upper:g} mm",
                    do="min_mm is the lowest corner of the box, max_mm the highest.",
                )
        return BoxBlankSettings((low[0], low[1], low[2]), (high[0], high[1], high[2]))
    margin = table.numbers("margin_mm", 2, least=0.0, most=FARTHEST_MM) if table.has("margin_mm") else (10.0, 10.0)
    thickness_mm = table.optional_number("thickness_mm", above=0.0, most=LARGEST_RADIUS_MM)
    return CarrierBlankSettings((margin[0], margin[1]), thickness_mm)


def _stock(table: Table, file: str) -> tuple[tuple[str, float], ...]:
    if not table.has("stock_mm"):
        return ()
    stock = Table(table.raw("stock_mm"), file, "[blank] stock_mm", FACES)
    return tuple(
        (face, stock.number(face, least=0.0, most=LARGEST_WALL_MM)) for face in sorted(FACES) if stock.has(face)
    )


def _flange(table: Table, file: str) -> FlangeSettings | None:
    if not table.has("flange"):
        return None
    flange = Table(table.raw("flange"), file, "[blank] flange", ("radius_mm", "height_mm"))
    return FlangeSettings(
        flange.number("radius_mm", above=0.0, most=LARGEST_RADIUS_MM),
        flange.number("height_mm", above=0.0, most=FARTHEST_MM),
    )


def parse_holes(values: list[Any], file: str) -> tuple[HoleSettings, ...]:
    """Returns the [[hole]] settings in the order of the file.

    Raises:
        SettingError: a setting is missing, unknown or wrong.
    """
    holes = []
    for index, item in enumerate(values, 1):
        table = Table(item, file, f"[[hole]] {index}", ("at_mm", "axis", "diameter_mm", "wall_mm", "depth_mm"))
        at = table.numbers("at_mm", 3, least=-FARTHEST_MM, most=FARTHEST_MM)
        holes.append(
            HoleSettings(
                at_mm=(at[0], at[1], at[2]),
                axis=direction(table, "axis"),
                diameter_mm=table.number("diameter_mm", above=0.0, most=LARGEST_RADIUS_MM),
                wall_mm=table.optional_number("wall_mm", least=0.0, most=LARGEST_WALL_MM),
                depth_mm=table.optional_number("depth_mm", above=0.0, most=FARTHEST_MM),
            )
        )
    return tuple(holes)


def ordered_pair(
    table: Table,
    key: str,
    *,
    above: float | None = None,
    least: float | None = None,
    most: float | None = None,
    equal: bool = False,
) -> tuple[float, float]:
    """Returns a required list of two lengths in mm, the lower first; `equal` allows two of the same.

    Raises:
        SettingError: missing, wrong, or in the wrong order.
    """
    low, high = table.numbers(key, 2, above=above, least=least, most=most)
    if low > high or (low == high and not equal):
        table.refuse("setting-order", key, expected="the lower number first", do="Exchange the two numbers.")
    return low, high
