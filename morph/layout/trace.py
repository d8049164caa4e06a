"""From a density at its level to a cleaned, centred web: the part of the layout stage that knows no ports' names.

Order: clean picture on a fine grid, frame runs carried on, walls, thinning, spurs, junctions, centring.
"""

from __future__ import annotations

from dataclasses import dataclass

from morph.core.arrays import Floats
from morph.core.progress import Progress
from morph.layout.centre import centre, resample
from morph.layout.density import Density
from morph.layout.ends import cut_at_frame, find_stubs, trim_tips
from morph.layout.frame import FrameRun, extend, find_mouths
from morph.layout.graph import Dropped, DropReason
from morph.layout.junctions import merge_aimed, place_junctions
from morph.layout.level import Picture, make_picture
from morph.layout.ports import keep_port_tips
from morph.layout.skeleton import make_web
from morph.layout.walls import Walls, find_walls
from morph.layout.web import Web, join_all, merge_near, prune
from morph.settings.job import PortSettings

STAGE = "layout"
N_STEPS = 6
SAMPLES_PER_WIDTH = 10.0
RETRIES = (1, 2, 3)
"""Refinements of the fine grid tried in turn while the graph's pieces or loops differ from the picture's."""


@dataclass(frozen=True, slots=True, eq=False)
class Traced:
    """A cleaned web with the picture it came from and what was pruned."""

    web: Web
    picture: Picture
    spurs: tuple[Dropped, ...]
    picture_betti: tuple[int, int]
    web_betti: tuple[int, int]


def trace_faithfully(
    density: Density, level: float, ports: tuple[PortSettings, ...], at_mm: Floats, progress: Progress
) -> Traced:
    """Returns the traced web; where its pieces or loops differ from the picture's, a finer grid is tried."""
    traced: Traced | None = None
    for more in RETRIES:
        traced = trace(density, level, ports, at_mm, more, progress)
        if traced.picture_betti == traced.web_betti:
            break
    assert traced is not None
    return traced


def trace(
    density: Density,
    level: float,
    ports: tuple[PortSettings, ...],
    at_mm: Floats,
    more: int,
    progress: Progress,
) -> Traced:
    """Returns the web of `density` at `level`, `more` times finer than its width asks; `at_mm (n, 2)` are the ports."""
    picture = make_picture(density, level, at_mm, more)
    progress.step(STAGE, 1, N_STEPS)
    mouths = find_mouths(picture, at_mm, density.size_mm)
    web, walls, spurs = _thin(picture, mouths, ports)
    stubs = find_stubs(web, density.size_mm, ports, picture.grid.pixel_mm)
    if stubs:
        mouths = tuple(mouth for number, mouth in enumerate(mouths) if number not in stubs)
        web, walls, spurs = _thin(picture, mouths, ports)
    pixel_mm = picture.grid.pixel_mm
    betti = web.betti()
    step_mm = max(pixel_mm, picture.width_mm / SAMPLES_PER_WIDTH)
    resample(web, step_mm)
    centre(web, walls, step_mm)
    merge_aimed(web)
    place_junctions(web)
    cut_at_frame(web, density.size_mm)
    trim_tips(web)
    progress.step(STAGE, 2, N_STEPS)
    dropped = tuple(
        Dropped(DropReason.SPUR, (float(place[0]), float(place[1])), length * width) for place, length, width in spurs
    )
    return Traced(web, picture, dropped, picture.betti, betti)


def _thin(
    picture: Picture, mouths: tuple[FrameRun, ...], ports: tuple[PortSettings, ...]
) -> tuple[Web, Walls, list[tuple[Floats, float, float]]]:
    """Returns the web of the picture without spurs and doubled junctions, the walls, and the spurs."""
    extended = extend(picture, mouths)
    walls = find_walls(extended, picture.level)
    web = make_web(extended, walls)
    keep_port_tips(web, ports)
    join_all(web)
    spurs = prune(web, picture.grid.pixel_mm)
    merge_near(web)
    spurs += prune(web, picture.grid.pixel_mm)
    join_all(web)
    return web, walls, spurs
