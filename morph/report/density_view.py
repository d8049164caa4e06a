"""The density as it was read, with the channel graph over it: nodes N, branches B, dead ends, dropped pieces."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from morph.core.arrays import Floats
from morph.layout.density import Density
from morph.layout.graph import ChannelGraph, NodeKind
from morph.layout.wide import WideRegion
from morph.report.along import middle_index
from morph.report.areas_view import KEEP_OUT, WIDE, draw_keep_outs, draw_wide
from morph.report.drawing import FAINT, INK, PAPER, Drawing, number
from morph.report.label_places import LabelPlaces
from morph.report.legend import PORT_COLOUR
from morph.report.png import png_address
from morph.report.seam import clipped, copies_mm, on_sheet_mm
from morph.settings.job import KeepOutSettings, Samples

WIDTH_PX, HEIGHT_PX = 820.0, 720.0
LARGEST_PX = 1024
LINE, DEAD, DROPPED = "#d1480f", "#a4161a", "#6b4c9a"
DARKEST = 190
"""Coolant is drawn in this much grey of 255, so that lines and names read on top of it."""


def density_picture(density: Density) -> NDArray[np.uint8]:
    """Returns the density as grey levels (rows, columns), top row first, coolant dark; large ones as block means."""
    value = density.value
    block = math.ceil(max(value.shape) / LARGEST_PX)
    if block > 1:
        rows, columns = (n // block * block for n in value.shape)
        value = value[:rows, :columns].reshape(rows // block, block, columns // block, block).mean(axis=(1, 3))
    return np.rint(255.0 - DARKEST * np.clip(value[::-1], 0.0, 1.0)).astype(np.uint8)


def _size(drawing: Drawing, width_mm: float, height_mm: float) -> str:
    return f'width="{number(width_mm * drawing.px_per_mm)}" height="{number(height_mm * drawing.px_per_mm)}"'


def _picture(drawing: Drawing, density: Density) -> None:
    """Places the picture on the sheet; a value at a grid node reaches half a cell beyond the sheet and is clipped."""
    (width, height), (rows, columns) = density.size_mm, density.value.shape
    over = (0.0, 0.0)
    if density.samples is Samples.NODES:
        over = (0.5 * width / (columns - 1), 0.5 * height / (rows - 1))
    x, y = drawing.xy((-over[0], height + over[1]))
    size = _size(drawing, width + 2.0 * over[0], height + 2.0 * over[1])
    left, top = drawing.xy((0.0, height))
    inside = _size(drawing, width, height)
    drawing.define(f'<clipPath id="{drawing.ident}-sheet"><rect x="{left}" y="{top}" {inside}/></clipPath>')
    drawing.raw(
        f'<image x="{x}" y="{y}" {size} preserveAspectRatio="none" clip-path="url(#{drawing.ident}-sheet)" '
        f'href="{png_address(density_picture(density))}"/>'
    )
    drawing.raw(f'<rect x="{left}" y="{top}" {inside} fill="none" stroke="{FAINT}"/>')


def _node(drawing: Drawing, at: Floats, kind: NodeKind) -> str:
    """Draws the sign of a node and returns its colour."""
    x, y = drawing.xy((float(at[0]), float(at[1])))
    colour = {NodeKind.PORT: PORT_COLOUR, NodeKind.DEAD_END: DEAD}.get(kind, INK)
    if kind is NodeKind.DEAD_END:
        drawing.raw(f'<path d="M{x} {y}m-5 -5l10 10m0 -10l-10 10" stroke="{colour}" stroke-width="2.4"/>')
    else:
        drawing.raw(f'<circle cx="{x}" cy="{y}" r="4.5" fill="{colour}" stroke="{PAPER}" stroke-width="1.4"/>')
    return colour


def _branches(drawing: Drawing, graph: ChannelGraph) -> None:
    """Draws the centrelines: those built as lines, those of pieces without a port thin and dashed."""
    with clipped(drawing, graph.size_mm, graph.turn_mm):
        for branch in graph.loose_branches:
            for points in copies_mm(branch.sheet_mm, graph.turn_mm):
                data = drawing.path_data(points)
                drawing.shape(data, fill="none", stroke=PAPER, stroke_width="3.5")
                drawing.shape(data, fill="none", stroke=DROPPED, stroke_width="1.6", stroke_dasharray="6 3")
        for branch in graph.branches:
            for points in copies_mm(branch.sheet_mm, graph.turn_mm):
                data = drawing.path_data(points)
                drawing.shape(data, fill="none", stroke=PAPER, stroke_width="4.5", stroke_linecap="round")
                drawing.shape(data, fill="none", stroke=LINE, stroke_width="2.2", stroke_linecap="round")


def _offers(drawing: Drawing, graph: ChannelGraph) -> None:
    """Draws what was dropped and the suggestions that were not built."""
    for item in graph.dropped:
        x, y = drawing.xy(item.sheet_mm)
        drawing.raw(
            f'<circle cx="{x}" cy="{y}" r="7" fill="none" stroke="{DROPPED}" stroke-width="2" stroke-dasharray="3 2"/>'
        )
    with clipped(drawing, graph.size_mm, graph.turn_mm):
        for bridge in graph.bridges:
            for points in copies_mm(bridge.path_mm, graph.turn_mm):
                data = drawing.path_data(points)
                drawing.shape(data, fill="none", stroke=PAPER, stroke_width="4.5")
                drawing.shape(data, fill="none", stroke=DROPPED, stroke_width="2.6", stroke_dasharray="2 3")


Named = list[tuple[str, Floats]]


def _names(drawing: Drawing, graph: ChannelGraph, keep_outs: Named, wide: tuple[WideRegion, ...]) -> None:
    """Draws the nodes and writes every name where it covers nothing."""
    labels, (width, height) = LabelPlaces(drawing), graph.size_mm
    dead = {end.node: end.id for end in graph.dead_ends}
    loose = tuple(node for node in graph.loose_nodes if node.id in dead)
    nodes = [(node, on_sheet_mm(node.sheet_mm, graph.turn_mm)) for node in graph.nodes + loose]
    for _, at in nodes:
        labels.keep_clear(at, 5.0)
    low = drawing.low_mm[1] + 0.3 * abs(drawing.low_mm[1]) + drawing.mm(6.0)
    for share in np.linspace(0.0, 0.25, 12).tolist():  # the scale bar
        labels.keep_clear(np.array([share * width, low]), 13.0)
    for name, at in keep_outs:
        labels.write(on_sheet_mm(at, graph.turn_mm), name, KEEP_OUT, beside=False)
    for region in wide:
        at = np.array([float(np.median(region.outline_mm[:, 0])), float(region.outline_mm[:, 1].max())])
        labels.write(on_sheet_mm(np.minimum(at, [width, height]), graph.turn_mm), region.id, WIDE, beside=True)
    for bridge in graph.bridges:
        middle = bridge.path_mm[middle_index(bridge.path_mm)]
        labels.write(on_sheet_mm(middle, graph.turn_mm), bridge.id, DROPPED, beside=True)
    for node, at in nodes:
        name = f"{node.id} = {dead[node.id]}" if node.id in dead else node.id
        labels.write(at, name, _node(drawing, at, node.kind), beside=True)
    for branch in graph.branches:
        middle = on_sheet_mm(branch.sheet_mm[middle_index(branch.sheet_mm)], graph.turn_mm)
        labels.write(middle, branch.id, LINE, beside=False)


def draw_density(
    density: Density,
    graph: ChannelGraph,
    keep_outs: tuple[KeepOutSettings, ...] = (),
    wide: tuple[WideRegion, ...] = (),
) -> str:
    """Returns the density with nodes, branches and dropped pieces as SVG, the way the drawing reads.

    Args:
        density: as read.
        graph: found in it.
        keep_outs: of the job, drawn with their clearance.
        wide: regions wider than the largest legal bore, outlined.
    """
    width, height = graph.size_mm
    margin = 0.05 * max(width, height)
    low, high = (-margin, -margin), (width + margin, height + margin)
    across = min(WIDTH_PX, HEIGHT_PX * (high[0] - low[0]) / (high[1] - low[1]))
    drawing = Drawing(low, high, across, "density", "The density as read, with the channel graph over it")
    _picture(drawing, density)
    named = draw_keep_outs(drawing, keep_outs, graph.size_mm, graph.turn_mm)
    draw_wide(drawing, wide, graph.size_mm, graph.turn_mm)
    _branches(drawing, graph)
    _offers(drawing, graph)
    _names(drawing, graph, named, wide)
    drawing.scale_bar((0.0, -0.7 * margin), 0.2)
    return drawing.svg()


def density_caption(graph: ChannelGraph, keep_outs: bool, wide: bool) -> str:
    """Returns what the signs of the picture mean, those that it shows."""
    signs = ["Dark is coolant", "N: nodes", "B: branches"]
    signs += ["cross: dead end (D)"] if graph.dead_ends or any(n.kind is NodeKind.DEAD_END for n in graph.nodes) else []
    signs += ["dashed ring: dropped piece"] if graph.dropped else []
    signs += ["thin dashed line: piece without a port, not built"] if graph.loose_branches else []
    signs += ["dotted line (G): suggestion that was not built"] if graph.bridges else []
    signs += ["hatched: keep-out, dashed around it: its clearance"] if keep_outs else []
    signs += ["blue outline (W): wider than the largest legal bore"] if wide else []
    return "; ".join(signs) + "."
