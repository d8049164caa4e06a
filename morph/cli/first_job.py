"""A first job for an image: sheet, ports and carrier guessed from what the density shows.

The sheet is scaled so that the mean channel is a usual bore wide, the ports are the channels that the
frame cuts, the depth holds that bore with its wall, and the carrier is wide enough that the sheet
takes half a turn at depth. Every guess says EDIT in its line, and the lines are listed.
"""

from __future__ import annotations

import json
import math
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from morph.core.errors import MorphError
from morph.layout.density import Density, make_density
from morph.layout.extract import find_graph, graph_pieces
from morph.layout.level import find_level, make_picture
from morph.layout.ports import PortCandidate, list_candidates
from morph.read.image import read_image
from morph.settings.job import CoolantEnd, LayoutSettings, PortSettings, Role

USUAL_BORE_MM = 5.0
"""Bore of a channel behind a wall of about 2 mm of plastic, 4 to 8 mm (common practice, no source)."""

SMALLEST_SHEET_MM, LARGEST_SHEET_MM = 20.0, 160.0
BORE_RANGE_MM = (3.5, 8.0)
"""The smallest bore of process and service, 3 mm, still clears its limit by a tenth after the band of 0.15 mm; the
largest is that of the process (common practice, no source)."""
TURN_RATIO = 0.5
EDIT = "EDIT"


@dataclass(frozen=True, slots=True)
class FirstJob:
    """A job file's text, the ports it declares, and (line number, reason) of each line to look at."""

    text: str
    ports: tuple[PortSettings, ...]
    edits: tuple[tuple[int, str], ...]


@dataclass(frozen=True, slots=True)
class _Guess:
    """What was read from the image: settings, ports with their seen widths, other contacts, the usual width."""

    layout: LayoutSettings
    ports: tuple[PortSettings, ...]
    seen: tuple[PortCandidate, ...]
    others: tuple[PortCandidate, ...]
    width_mm: float
    size_is_guess: bool
    trouble: str


def make_first_job(image: Path, relative: str, name: str, size_mm: tuple[float, float] | None) -> FirstJob:
    """Returns a first job for `image`.

    Args:
        image: the density image.
        relative: its path as the job file is to name it.
        name: the job's name.
        size_mm: width and height of the sheet; None guesses them from the mean channel width.

    Raises:
        InputError: the image is not a density, or shows no channel at half level.
        SettingError: `size_mm` does not fit the image's aspect.
    """
    raw = read_image(image, size_mm)
    rows, columns = raw.value.shape
    channel = CoolantEnd.LOW if float(np.mean(raw.value > 0.5)) > 0.5 else CoolantEnd.HIGH
    layout = LayoutSettings(image, size_mm or (float(columns), float(rows)), channel=channel)
    if raw.states:
        layout = replace(layout, rows=None, samples=None)
    if size_mm is None:
        layout = replace(layout, size_mm=_guess_size_mm(make_density(layout), layout))
    guess = _look(make_density(layout), layout, size_is_guess=size_mm is None)
    text = _job_text(guess, relative, name)
    edits = [(i, line.split(EDIT + ": ", 1)[1]) for i, line in enumerate(text.splitlines(), 1) if EDIT + ": " in line]
    return FirstJob(text, guess.ports, tuple(edits))


def _reading_lines(layout: LayoutSettings) -> list[str]:
    """Returns the lines that say how the array lies; a format that says so itself needs none."""
    if layout.rows is None:
        return ["# rows and samples: as the file says itself"]
    return [
        'rows = "top-down"  # "bottom-up" when the first row of the array is the bottom of the drawing',
        'samples = "cells"  # "nodes" when the values stand for grid nodes',
    ]


def _guess_size_mm(density: Density, layout: LayoutSettings) -> tuple[float, float]:
    """Returns the sheet on which the mean channel of a picture in pixels is a usual bore wide."""
    width_px = make_picture(density, find_level(density, layout), np.empty((0, 2))).width_mm
    columns, rows = density.size_mm
    pitch = USUAL_BORE_MM / width_px
    pitch = min(max(pitch, SMALLEST_SHEET_MM / min(columns, rows)), LARGEST_SHEET_MM / max(columns, rows))
    return round(columns * pitch, 1), round(rows * pitch, 1)


def _look(density: Density, layout: LayoutSettings, *, size_is_guess: bool) -> _Guess:
    level = find_level(density, layout)
    picture = make_picture(density, level, np.empty((0, 2)))
    candidates = list_candidates(picture, density.size_mm)
    cut = tuple(item for item in candidates if item.kind.value == "cut by frame")
    seen = cut if len(cut) >= 2 else candidates
    others = tuple(item for item in candidates if item not in seen)
    ports, trouble = _with_roles(density, layout, seen)
    kept = tuple(item for item in seen if any(port.at_mm == _rounded(item, density.size_mm) for port in ports))
    left_out = tuple(item for item in seen if item not in kept)
    return _Guess(layout, ports, kept, others + left_out, picture.width_mm, size_is_guess, trouble)


def _rounded(candidate: PortCandidate, size_mm: tuple[float, float]) -> tuple[float, float]:
    x, y = (min(round(at, 2), size) for at, size in zip(candidate.sheet_mm, size_mm, strict=True))
    return x, y


def _with_roles(
    density: Density, layout: LayoutSettings, seen: tuple[PortCandidate, ...]
) -> tuple[tuple[PortSettings, ...], str]:
    """Returns ports at the candidates: on every connected piece the first lets coolant in, the others out.

    A piece with one candidate cannot carry a flow, and its candidate is left out. The second value is the
    sentence of what the layout stage objects to, "" when nothing.
    """
    ports = tuple(
        PortSettings(f"port-{i}", Role.OUT, _rounded(item, density.size_mm)) for i, item in enumerate(seen, 1)
    )
    if len(ports) < 2:
        return ports, "a second port is missing: the frame cuts fewer than two channels"
    try:
        pieces = [names for names in graph_pieces(find_graph(density, layout, ports)) if len(names) > 1]
    except MorphError as error:
        return (replace(ports[0], role=Role.IN), *ports[1:]), str(error)
    first = {min(names, key=_number) for names in pieces}
    named = {name for names in pieces for name in names}
    chosen = [replace(p, role=Role.IN) if p.name in first else p for p in ports if p.name in named]
    return _named(chosen), "" if chosen else "no two ports lie on one connected channel"


def _number(name: str) -> int:
    return int(name.rsplit("-", 1)[1])


def _named(ports: list[PortSettings]) -> tuple[PortSettings, ...]:
    """Returns the ports called feed, feed-2, ... and return, return-2, ... in their order."""
    count = {Role.IN: 0, Role.OUT: 0}
    named = []
    for port in ports:
        count[port.role] += 1
        word = "feed" if port.role is Role.IN else "return"
        named.append(replace(port, name=word if count[port.role] == 1 else f"{word}-{count[port.role]}"))
    return tuple(named)


def _job_text(guess: _Guess, relative: str, name: str) -> str:
    width_mm, height_mm = guess.layout.size_mm
    bore_mm = min(max(guess.width_mm, BORE_RANGE_MM[0]), BORE_RANGE_MM[1])
    depth_mm = float(math.ceil(1.5 * bore_mm + 1.0))
    at_depth_mm = max(width_mm / (2.0 * math.pi * TURN_RATIO), 12.0)
    radius_mm = float(math.ceil(at_depth_mm + depth_mm))
    low = guess.layout.channel is CoolantEnd.LOW
    size_note = f"{EDIT}: a guess that makes the mean channel {guess.width_mm:.1f} mm wide; give the real size"
    if not guess.size_is_guess:
        size_note = f"the mean channel is {guess.width_mm:.1f} mm wide"
    channel_note = f"{EDIT}: low is a guess, because most of the image is high" if low else "high density is coolant"
    lines = [
        "# A first job. Lengths are mm. Lines marked EDIT are guesses; `morph build` says what it makes of them.",
        f"name = {_quoted(name)}",
        "",
        "[layout]",
        f"image = {_quoted(relative)}  # relative to this file",
        f"size_mm = [{width_mm:g}, {height_mm:g}]  # width, height of the whole image; {size_note}",
        *_reading_lines(guess.layout),
        'seen_from = "part"  # the drawing reads right from the part side; "metal" from the other',
        f'channel = "{guess.layout.channel.value}"  # {channel_note}',
        'level = "half"  # coolant ends at density 0.5; "keep-area" or a number instead',
        "",
        "# Ports: where the frame cuts a channel, on the sheet: x right, y up from its lower left corner.",
        *_port_lines(guess),
        "",
        "[carrier]",
        'kind = "cylinder"  # axis z; the middle of the sheet lies at +x, z = 0',
        f"radius_mm = {radius_mm:g}  # {EDIT}: a guess, the sheet takes half a turn; give the part face's radius",
        f'metal = "toward-axis"  # {EDIT}: a guess, a core; "away-from-axis" for a jacket or a cavity',
        f"depth_mm = {depth_mm:g}  # face to channel centreline; holds bores up to {2.0 * depth_mm / 3.0:.1f} mm",
        "",
        "[section]",
        'shape = "auto"  # round where a round ceiling prints freely, else roofed; or round, roofed, arched',
        f"bore_range_mm = [{BORE_RANGE_MM[0]:g}, {BORE_RANGE_MM[1]:g}]  # the drawing's own bores, kept within this",
        "",
        "[print]",
        'process = "steel-40um"  # a shipped profile, or the path of your own',
        "build_direction = [0, 0, 1]  # from the plate into the part",
        "",
        "[blank]",
        "margin_mm = [15.0, 10.0]  # metal below and above the sheet",
        'part_faces = ["carrier"]  # faces that touch the part; add "top" when the tip does',
        'port_faces = ["foot"]  # faces where ports may come out',
    ]
    return "\n".join(lines) + "\n"


def _port_lines(guess: _Guess) -> list[str]:
    lines: list[str] = []
    if guess.trouble:
        lines.append(f"# {EDIT}: {' '.join(guess.trouble.split())}")
    for port, item in zip(guess.ports, guess.seen, strict=True):
        lines += [
            "[[port]]",
            f"name = {_quoted(port.name)}",
            f'role = "{port.role.value}"  # {EDIT}: a guess; in, out or access',
            f"at_mm = [{port.at_mm[0]:g}, {port.at_mm[1]:g}]  # {item.side.value} side, {item.width_mm:.1f} mm wide",
            "",
        ]
    lines += [f"# seen and not declared: {item.sentence()}" for item in guess.others]
    if lines and not lines[-1]:
        lines.pop()
    return lines


def _quoted(text: str) -> str:
    """Returns `text` as a TOML string; JSON's escapes are also TOML's."""
    return json.dumps(text, ensure_ascii=False)
