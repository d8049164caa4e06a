"""``morph profiles [NAME]``: the process profiles shipped with morph, or one with every number and its source."""

from __future__ import annotations

import argparse
import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from morph.settings.profile import Profile, Sourced, SourcedRange

KEY_NUMBERS = (
    ("layer_um", "layer"),
    ("roof_angle_deg", "roof"),
    ("free_span_mm", "free span"),
    ("wall_mm", "wall"),
    ("smallest_bore_mm", "bore from"),
    ("largest_bore_mm", "to"),
    ("density_kg_m3", "density"),
    ("conductivity_heat_treated_w_mk", "conducts"),
)
"""The numbers of the list, and the word above each."""


def add_to(commands: Any) -> None:
    """Adds the command to the sub-parsers `commands`."""
    parser = commands.add_parser(
        "profiles",
        help="list the process profiles, or print one with its sources",
        description="Lists the process profiles shipped with morph with their key numbers; with NAME prints every "
        "number of one profile and where it comes from. Angles are from the horizontal build plate.",
        allow_abbrev=False,
    )
    parser.add_argument("name", nargs="?", metavar="NAME", help="a shipped profile, or the path of a .toml file")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.add_argument("--out", metavar="FILE", type=Path, help="write to a new file instead of stdout")
    parser.add_argument("--force", action="store_true", help="replace an existing file")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Prints or writes the list of profiles, or one profile.

    Raises:
        SettingError: no profile of that name (the nearest are named), or it is not a valid profile.
        InputError: the file cannot be read. ExportError: the result cannot be written.
    """
    from morph.core.files import write_file
    from morph.settings.profile import profile_names, read_profile

    names = profile_names() if arguments.name is None else (arguments.name,)
    profiles = [read_profile(name, Path()) for name in names]
    if arguments.json:
        text = json.dumps({profile.name: _plain(profile) for profile in profiles}, indent=1, sort_keys=True)
    else:
        text = _list_text(profiles) if arguments.name is None else _profile_text(profiles[0])
    if arguments.out is None:
        print(text)
    else:
        write_file(arguments.out, (text + "\n").encode("utf-8"), force=arguments.force)
    return 0


def _plain(profile: Profile) -> dict[str, Any]:
    import dataclasses

    return dataclasses.asdict(profile)


def _figure(number: Sourced | SourcedRange) -> str:
    from morph.settings.profile import Sourced

    if isinstance(number, Sourced):
        return f"{number.value:g} {number.unit}"
    span = f"{number.low:g}" if number.low == number.high else f"{number.low:g} to {number.high:g}"
    return f"{span} {number.unit}"


def _numbers(profile: Profile) -> list[tuple[str, Sourced | SourcedRange]]:
    """Returns every number of `profile` with its name; the axes of the machine as x, y and z."""
    import dataclasses

    found: list[tuple[str, Sourced | SourcedRange]] = []
    for item in dataclasses.fields(profile):
        value = getattr(profile, item.name)
        if isinstance(value, tuple):
            found += [(f"{item.name} {axis}", side) for axis, side in zip("xyz", value, strict=True)]
        elif not isinstance(value, str):
            found.append((item.name, value))
    return found


def _list_text(profiles: list[Profile]) -> str:
    rows = [["profile", *(word for _, word in KEY_NUMBERS), "machine", "material"]]
    for profile in profiles:
        machine = " x ".join(f"{side.value:g}" for side in profile.machine_mm) + " mm"
        key_numbers = (_figure(getattr(profile, key)) for key, _ in KEY_NUMBERS)
        rows.append([profile.name, *key_numbers, machine, profile.material])
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    lines = ["  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows]
    return "\n".join([*lines, "", "`morph profiles NAME` prints every number of one profile with its source."])


def _profile_text(profile: Profile) -> str:
    rows = [(name, _figure(number), number.source) for name, number in _numbers(profile)]
    name_width, figure_width = (max(len(row[k]) for row in rows) for k in (0, 1))
    lines = [f"{name:<{name_width}}  {figure:<{figure_width}}  {source}" for name, figure, source in rows]
    return "\n".join([f"{profile.name}: {profile.material}", *lines])
