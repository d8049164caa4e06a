"""Process profiles: what one printing process can do, each number with its source.

A profile is a TOML file, shipped under ``settings/profiles/`` or given by path. The angle
convention is from the horizontal build plate (0 = flat ceiling, 90 = vertical).
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from importlib import resources
from pathlib import Path
from typing import Any

from morph.core.errors import SettingError
from morph.settings.table import Table, nearest, show
from morph.settings.toml_file import parse_toml, read_bounded


@dataclass(frozen=True, slots=True)
class Sourced:
    """A number with its unit and where it comes from."""

    value: float
    unit: str
    source: str


@dataclass(frozen=True, slots=True)
class SourcedRange:
    """A quantity that is known as a range only, with its unit and where it comes from; `low` may equal `high`."""

    low: float
    high: float
    unit: str
    source: str

    @property
    def middle(self) -> float:
        """The middle of the range, for a figure that needs one number."""
        return 0.5 * (self.low + self.high)


@dataclass(frozen=True, slots=True)
class Profile:
    """One printing process with one material.

    Args:
        name: the name a job gives in [print] process.
        material: alloy in trade terms.
        layer_um: layer thickness.
        roof_angle_deg: flattest ceiling that prints without support.
        free_span_mm: widest flat ceiling that prints without support.
        wall_mm: thinnest wall that prints.
        smallest_bore_mm: smallest channel that stays open. largest_bore_mm: largest round bore allowed.
        powder_ball_mm: smallest passage through which powder leaves.
        position_band_mm: how far a printed wall may lie from its nominal place.
        bore_band_mm: how far a printed bore may differ from nominal.
        bend_radius_bores: least centreline bend radius in bores.
        machine_mm: build volume x, y, z, each Sourced.
        density_kg_m3: of the printed, heat-treated alloy.
        conductivity_as_printed_w_mk: thermal conductivity before heat treatment, 20 C.
        conductivity_heat_treated_w_mk: after the heat treatment that `material` names, 20 C.
        roughness_ra_um: arithmetic roughness of faces as built.
    """

    name: str
    material: str
    layer_um: Sourced
    roof_angle_deg: Sourced
    free_span_mm: Sourced
    wall_mm: Sourced
    smallest_bore_mm: Sourced
    largest_bore_mm: Sourced
    powder_ball_mm: Sourced
    position_band_mm: Sourced
    bore_band_mm: Sourced
    bend_radius_bores: Sourced
    machine_mm: tuple[Sourced, Sourced, Sourced]
    density_kg_m3: Sourced
    conductivity_as_printed_w_mk: SourcedRange
    conductivity_heat_treated_w_mk: SourcedRange
    roughness_ra_um: SourcedRange


@dataclass(frozen=True, slots=True)
class _Limits:
    """The unit a profile must state for a number, and the range that makes sense for it."""

    unit: str
    above: float | None
    most: float


_LIMITS = {
    "layer_um": _Limits("um", 0.0, 500.0),
    "roof_angle_deg": _Limits("deg", 0.0, 89.0),
    "free_span_mm": _Limits("mm", 0.0, 100.0),
    "wall_mm": _Limits("mm", 0.0, 50.0),
    "smallest_bore_mm": _Limits("mm", 0.0, 50.0),
    "largest_bore_mm": _Limits("mm", 0.0, 100.0),
    "powder_ball_mm": _Limits("mm", 0.0, 50.0),
    "position_band_mm": _Limits("mm", None, 5.0),
    "bore_band_mm": _Limits("mm", None, 5.0),
    "bend_radius_bores": _Limits("bores", None, 20.0),
    "machine_mm": _Limits("mm", 0.0, 5000.0),
    "density_kg_m3": _Limits("kg/m3", 500.0, 25000.0),
}

_RANGE_LIMITS = {
    "conductivity_as_printed_w_mk": _Limits("W/mK", 0.0, 1000.0),
    "conductivity_heat_treated_w_mk": _Limits("W/mK", 0.0, 1000.0),
    "roughness_ra_um": _Limits("um", None, 500.0),
}


def profile_names() -> tuple[str, ...]:
    """Returns the names of the profiles shipped with morph, sorted."""
    folder = resources.files("morph.settings") / "profiles"
    return tuple(sorted(entry.name[:-5] for entry in folder.iterdir() if entry.name.endswith(".toml")))


def read_profile(name_or_path: str, relative_to: Path) -> Profile:
    """Returns the process profile of a shipped name, or of a file when the text ends in ``.toml``.

    Args:
        name_or_path: a name out of `profile_names()`, or a path.
        relative_to: folder that a relative path starts from.

    Raises:
        SettingError: no profile of that name; or the profile lacks a number, has an unknown one, or one
            without unit and source or out of range.
        InputError: the file cannot be read.
    """
    if name_or_path.endswith(".toml"):
        path = relative_to / name_or_path
        return _make_profile(read_bounded(path, "a process profile (TOML)", "profile"), path.name)
    if name_or_path not in profile_names():
        raise SettingError(
            "profile-unknown",
            expected="the name of a shipped process profile, or the path of a .toml file",
            found=show(name_or_path),
            where="process profile",
            do=nearest(name_or_path, profile_names()),
        )
    file = f"{name_or_path}.toml"
    return _make_profile((resources.files("morph.settings") / "profiles" / file).read_bytes(), file)


def _make_profile(content: bytes, file: str) -> Profile:
    table = Table(parse_toml(content, file), file, "", [item.name for item in dataclasses.fields(Profile)])
    numbers = {
        key: _sourced(table.require(key), file, f"[{key}]", limits)
        for key, limits in _LIMITS.items()
        if key != "machine_mm"
    }
    ranges = {key: _range(table.require(key), file, f"[{key}]", limits) for key, limits in _RANGE_LIMITS.items()}
    axes = table.tables("machine_mm", 3)
    if len(axes) != 3:
        table.refuse(
            "setting-type",
            "machine_mm",
            expected="three tables: x, y and z of the build volume",
            found=f"{len(axes)} of them",
            do="Write [[machine_mm]] three times.",
        )
    sides = [
        _sourced(axis, file, f"[[machine_mm]] {index}", _LIMITS["machine_mm"]) for index, axis in enumerate(axes, 1)
    ]
    profile = Profile(
        name=table.text("name"),
        material=table.text("material"),
        machine_mm=(sides[0], sides[1], sides[2]),
        conductivity_as_printed_w_mk=ranges["conductivity_as_printed_w_mk"],
        conductivity_heat_treated_w_mk=ranges["conductivity_heat_treated_w_mk"],
        roughness_ra_um=ranges["roughness_ra_um"],
        **numbers,
    )
    if profile.smallest_bore_mm.value > profile.largest_bore_mm.value:
        table.refuse(
            "setting-order",
            "smallest_bore_mm",
            expected=f"at most largest_bore_mm = {profile.largest_bore_mm.value:g} mm",
            found=f"{profile.smallest_bore_mm.value:g} mm",
            do="Exchange them or correct one.",
        )
    return profile


def _sourced(values: Any, file: str, label: str, limits: _Limits) -> Sourced:
    table = Table(values, file, label, ("value", "unit", "source"))
    least = 0.0 if limits.above is None else None
    value = table.number("value", above=limits.above, least=least, most=limits.most, unit=limits.unit)
    return Sourced(value, table.word("unit", [limits.unit]), table.text("source"))


def _range(values: Any, file: str, label: str, limits: _Limits) -> SourcedRange:
    """Returns a range given as `low` and `high`, or as one `value`."""
    table = Table(values, file, label, ("value", "low", "high", "unit", "source"))
    least = 0.0 if limits.above is None else None
    if table.has("value"):
        table.not_used(["low", "high"], "beside value")
    keys = ("value", "value") if table.has("value") else ("low", "high")
    low, high = (table.number(key, above=limits.above, least=least, most=limits.most, unit=limits.unit) for key in keys)
    if low > high:
        table.refuse("setting-order", "low", expected="at most high", do="Write the lower number first.")
    return SourcedRange(low, high, table.word("unit", [limits.unit]), table.text("source"))
