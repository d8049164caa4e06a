"""The layout stage: from a density and its ports to the channel graph.

Order: level, clean picture on a fine grid, frame runs carried on, walls, thinning, spurs, junctions,
centring, ports, pieces, smooth centrelines, ids. Everything left out is listed; everything odd is a notice.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from morph.core.errors import GeometryError
from morph.core.pieces import Pieces
from morph.core.progress import SILENT, Progress
from morph.core.verdict import Notice
from morph.layout import notices as say
from morph.layout.accept import accept
from morph.layout.assemble import Parts, assemble
from morph.layout.bridges import suggest_bridges
from morph.layout.dead_ends import find_end_walls
from morph.layout.density import Density
from morph.layout.graph import ChannelGraph
from morph.layout.joined import find_joined_graph
from morph.layout.level import count_at_levels, find_level, measure_area_ratio, smoothed
from morph.layout.mirror import symmetrised
from morph.layout.ports import attach_ports, list_candidates, require_ports
from morph.layout.trace import N_STEPS, STAGE, trace_faithfully
from morph.layout.web import join_all
from morph.settings.job import AcceptSettings, LayoutSettings, PortSettings, Role, Seam

CROP_SLACK_PIXELS = 0.51
"""A port may lie this far off a sheet whose crop was rounded to pixels."""


def make_graph(
    density: Density,
    settings: LayoutSettings,
    ports: tuple[PortSettings, ...],
    progress: Progress = SILENT,
    accepts: tuple[AcceptSettings, ...] = (),
    least_bore_mm: float = 0.0,
) -> ChannelGraph:
    """Returns the channel graph of `density` with the declared `ports` on it, every piece a circuit.

    Args:
        density: canonical density.
        settings: the [layout] table.
        ports: declared ports, places in sheet mm.
        progress: told after each step; may cancel.
        accepts: suggestions to be carried out.
        least_bore_mm: least bore of an accepted bridge.

    Raises:
        InputError: nothing or everything is coolant at the level.
        SettingError: a port is missing, doubled or off the sheet; a level cannot keep the area; something accepted
            is not offered.
        GeometryError: a port is off every channel, two share an end, or a piece has no way in or out.
    """
    graph = find_graph(density, settings, ports, progress)
    if accepts:
        graph = symmetrised(accept(graph, accepts, least_bore_mm), settings.mirror_at)
    require_circuits(graph, ports)
    return graph


def find_graph(
    density: Density, settings: LayoutSettings, ports: tuple[PortSettings, ...], progress: Progress = SILENT
) -> ChannelGraph:
    """Returns the same as make_graph, but also when a piece has ports and no way in or out.

    For showing a layout before its suggested bridges are settled.
    """
    require_ports(ports, density.size_mm, CROP_SLACK_PIXELS * max(density.pitch_mm) if settings.crop_mm else 0.0)
    find = find_joined_graph if density.seam is Seam.JOINED else _find_open_graph
    graph = find(density, settings, ports, progress)
    return symmetrised(replace(graph, notices=density.notices + graph.notices), settings.mirror_at)


def _find_open_graph(
    density: Density, settings: LayoutSettings, ports: tuple[PortSettings, ...], progress: Progress
) -> ChannelGraph:
    level = find_level(density, settings)
    at_mm = np.array([port.at_mm for port in ports])
    traced = trace_faithfully(density, level, ports, at_mm, progress)
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
        ends=find_end_walls(web, picture.field, picture.grid, level),
    )
    graph = assemble(web, parts, suggestions)
    progress.step(STAGE, N_STEPS, N_STEPS)
    return graph


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
    number = {node.id: k for k, node in enumerate(graph.nodes)}
    pieces = Pieces(len(number))
    for branch in graph.branches:
        pieces.join(number[branch.start], number[branch.end])
    names: dict[int, list[str]] = {}
    for k, node in enumerate(graph.nodes):
        names.setdefault(pieces.root(k), [])
        if node.port is not None:
            names[pieces.root(k)].append(node.port)
    return list(names.values())
