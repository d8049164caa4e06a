"""The layout stage: from a density and its ports to the channel graph.

Order: level, clean picture on a fine grid, frame runs carried on, walls, thinning, spurs, junctions,
centring, ports, pieces, smooth centrelines, ids. Everything left out is listed; everything odd is a notice.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import GeometryError
from morph.core.progress import SILENT, Progress
from morph.core.verdict import Notice
from morph.layout import notices as say
from morph.layout.assemble import Parts, assemble
from morph.layout.bridges import suggest_bridges
from morph.layout.centre import centre, resample
from morph.layout.density import Density
from morph.layout.ends import cut_at_frame, find_stubs, trim_tips
from morph.layout.frame import FrameRun, extend, find_mouths
from morph.layout.graph import ChannelGraph, Dropped, DropReason
from morph.layout.junctions import merge_aimed, place_junctions
from morph.layout.level import Picture, count_at_levels, find_level, make_picture, measure_area_ratio, smoothed
from morph.layout.ports import attach_ports, keep_port_tips, list_candidates, require_ports
from morph.layout.skeleton import make_web
from morph.layout.walls import Walls, find_walls
from morph.layout.web import Web, join_all, merge_near, prune
from morph.settings.job import LayoutSettings, PortSettings, Role

STAGE = "layout"
N_STEPS = 6
SAMPLES_PER_WIDTH = 10.0
RETRIES = (1, 2, 3)
"""Refinements of the fine grid tried in turn while the graph's pieces or loops differ from the picture's."""


@dataclass(frozen=True, slots=True, eq=False)
class _Traced:
    """A cleaned web with the picture it came from and what was pruned."""

    web: Web
    picture: Picture
    spurs: tuple[Dropped, ...]
    picture_betti: tuple[int, int]
    web_betti: tuple[int, int]


def make_graph(
    density: Density, settings: LayoutSettings, ports: tuple[PortSettings, ...], progress: Progress = SILENT
) -> ChannelGraph:
    """Returns the channel graph of `density` with the declared `ports` on it, every piece a circuit.

    Args:
        density: canonical density.
        settings: the [layout] table.
        ports: declared ports, places in sheet mm.
        progress: told after each step; may cancel.

    Raises:
        InputError: nothing or everything is coolant at the level.
        SettingError: a port is missing, doubled or off the sheet; a level cannot keep the area.
        GeometryError: a port is off every channel, two share an end, or a piece has no way in or out.
    """
    graph = find_graph(density, settings, ports, progress)
    require_circuits(graph, ports)
    return graph


def find_graph(
    density: Density, settings: LayoutSettings, ports: tuple[PortSettings, ...], progress: Progress = SILENT
) -> ChannelGraph:
    """Returns the same as make_graph, but also when a piece has ports and no way in or out.

    For showing a layout before its suggested bridges are settled.
    """
    require_ports(ports, density.size_mm)
    level = find_level(density, settings)
    at_mm = np.array([port.at_mm for port in ports])
    traced = _trace_faithfully(density, level, ports, at_mm, progress)
    web, picture = traced.web, traced.picture
    attach_ports(web, ports, list_candidates(picture, density.size_mm), density.size_mm)
    join_all(web)
    progress.step(STAGE, 3, N_STEPS)
    levels = count_at_levels(density, picture)
    suggestions = suggest_bridges(web, smoothed(density.value), density, picture)
    progress.step(STAGE, 4, N_STEPS)
    found: list[Notice] = []
    if traced.picture_betti != traced.web_betti:
        found.append(say.topology_differs(traced.picture_betti, traced.web_betti))
    found += say.level_decides(levels, level)
    parts = Parts(
        density.size_mm,
        level,
        measure_area_ratio(picture, density.samples),
        picture.dropped + traced.spurs,
        levels,
        tuple(found),
        picture.grid.pixel_mm,
    )
    graph = assemble(web, parts, suggestions)
    progress.step(STAGE, N_STEPS, N_STEPS)
    return graph


def _trace_faithfully(
    density: Density, level: float, ports: tuple[PortSettings, ...], at_mm: Floats, progress: Progress
) -> _Traced:
    """Returns the traced web; where its pieces or loops differ from the picture's, a finer grid is tried."""
    traced: _Traced | None = None
    for more in RETRIES:
        traced = _trace(density, level, ports, at_mm, more, progress)
        if traced.picture_betti == traced.web_betti:
            break
    assert traced is not None
    return traced


def _trace(
    density: Density,
    level: float,
    ports: tuple[PortSettings, ...],
    at_mm: Floats,
    more: int,
    progress: Progress,
) -> _Traced:
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
    return _Traced(web, picture, dropped, picture.betti, betti)


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


def require_circuits(graph: ChannelGraph, ports: tuple[PortSettings, ...]) -> None:
    """Raises unless every connected piece of `graph` has a port in and a port out (access does not count).

    Raises:
        GeometryError: `no-piece-with-port` or `piece-without-in-or-out`.
    """
    role = {port.name: port.role for port in ports}
    for names in graph_pieces(graph):
        roles = {role[name] for name in names if name in role}
        missing = [wanted.value for wanted in (Role.IN, Role.OUT) if wanted not in roles]
        if missing:
            likely = [bridge for bridge in graph.bridges if bridge.likely]
            hint = "".join(
                f" Suggestion {bridge.id} from [{bridge.path_mm[0, 0]:.1f}, {bridge.path_mm[0, 1]:.1f}] mm may join it."
                for bridge in likely[:3]
            )
            raise GeometryError(
                "piece-without-in-or-out",
                expected="a port in and a port out on every connected piece",
                found=f"a piece with only {', '.join(f'{name} ({role[name].value})' for name in names)}",
                where="layout",
                do=f"Declare a port {' and a port '.join(missing)} on it, or lower the level so that it joins the rest."
                + hint,
            )


def graph_pieces(graph: ChannelGraph) -> list[list[str]]:
    """Returns the port names on each connected piece of `graph`, pieces by their first node."""
    piece = {node.id: node.id for node in graph.nodes}

    def root(key: str) -> str:
        while piece[key] != key:
            key = piece[key]
        return key

    for branch in graph.branches:
        piece[root(branch.start)] = root(branch.end)
    names: dict[str, list[str]] = {}
    for node in graph.nodes:
        names.setdefault(root(node.id), [])
        if node.port is not None:
            names[root(node.id)].append(node.port)
    return list(names.values())
