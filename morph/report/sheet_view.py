"""The sheet seen from the part side: every channel as a band of its bore, coloured by a figure along it.

A drawing that reads from the metal side is mirrored here, and the caption says so; places are given
in the drawing's own coordinates all the same. Branches without through-flow are hatched and dashed,
ports have a shape per role: nothing is told by colour alone.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, field

import numpy as np

from morph.body.plan import ChannelPlan, PlanBranch
from morph.core.arrays import Floats, Ints
from morph.layout.graph import NodeKind
from morph.report.along import band_edges_mm, middle_index, sheet_branches, sheet_of
from morph.report.areas_view import HATCH, KEEP_OUT, draw_keep_outs
from morph.report.colour import COLOUR_STEPS, map_hex, round_scale
from morph.report.drawing import FAINT, INK, PAPER, Drawing, Point, number
from morph.report.label_places import LabelPlaces
from morph.report.legend import PORT_COLOUR, draw_keep_out_legend, draw_port, draw_sheet_legend
from morph.report.seam import clipped, copies_mm, on_sheet_mm
from morph.settings.job import KeepOutSettings, Role, SeenFrom

WIDTH_PX, LEGEND_PX, ARROW_EVERY_PX = 400.0, 92.0, 42.0
SHEET = "#f7f8fa"


@dataclass(frozen=True, slots=True, eq=False)
class SheetColours:
    """The figure a sheet picture is coloured by.

    Args:
        key: short name, unique on the page. words: the figure with its unit, as it stands at the scale.
        values: (k,) along each channel, by branch id. ends: of the colour scale.
    """

    key: str
    words: str
    values: dict[str, Floats]
    ends: tuple[float, float]

    def steps(self, branch: str) -> Ints:
        """Returns the steps (k,) of the colour map along a channel."""
        ratio = (self.values[branch] - self.ends[0]) / (self.ends[1] - self.ends[0])
        return np.clip(np.rint(ratio * (COLOUR_STEPS - 1)), 0, COLOUR_STEPS - 1).astype(np.int64)


@dataclass(frozen=True, slots=True, eq=False)
class SheetScene:
    """What a sheet picture shows.

    Args:
        plan: the channels. size_mm: of the sheet. seen_from: which way the drawing reads.
        colours: what the channels are coloured by.
        roles: role of each port by name.
        marked: branch id and place (x, y) that is ringed, or None. mark_words: what the ring means.
        turn_mm: width after which the sheet repeats, None on an open sheet.
        flow: by branch id, above 0 where coolant runs from its start to its end; empty: no arrows.
        keep_outs: of the job, drawn with their clearance.
    """

    plan: ChannelPlan
    size_mm: tuple[float, float]
    seen_from: SeenFrom
    colours: SheetColours
    roles: dict[str, Role]
    marked: tuple[str, tuple[float, float] | None] | None
    mark_words: str
    turn_mm: float | None = None
    flow: dict[str, float] = field(default_factory=dict)
    keep_outs: tuple[KeepOutSettings, ...] = ()

    @property
    def mirrored(self) -> bool:
        """Whether the part side shows the drawing mirrored."""
        return self.seen_from is SeenFrom.METAL

    def seen(self, sheet_mm: Floats) -> Floats:
        """Returns sheet points (k, 2) as seen from the part side."""
        points = np.array(sheet_mm, dtype=np.float64).reshape(-1, 2)
        if self.mirrored:
            points[:, 0] = self.size_mm[0] - points[:, 0]
        return points


def make_colours(key: str, words: str, values: dict[str, Floats], step: float) -> SheetColours:
    """Returns what a picture is coloured by; its scale ends on multiples of `step`."""
    shown = np.concatenate(list(values.values()))
    return SheetColours(key, words, values, round_scale(float(shown.min()), float(shown.max()), step))


def _band(drawing: Drawing, points: Floats, bore_mm: Floats, step: Ints) -> None:
    """Draws the band around `points` in one piece per run of equal colour step, with round ends."""
    left, right = band_edges_mm(points, bore_mm)
    colours = map_hex(np.arange(COLOUR_STEPS) / (COLOUR_STEPS - 1))
    for end in (0, -1):
        _disc(drawing, points[end], bore_mm[end], colours[int(step[end])], 0.0)
    of_piece = np.minimum(step[:-1], step[1:])
    cuts = [0, *(np.flatnonzero(np.diff(of_piece)) + 1).tolist(), len(of_piece)]
    for a, b in itertools.pairwise(cuts):
        outline = np.concatenate([left[a : b + 1], right[a : b + 1][::-1]])
        colour = colours[int(of_piece[a])]
        # a hairline in the same colour closes the seam between neighbouring pieces
        drawing.shape(drawing.path_data(outline, closed=True), fill=colour, stroke=colour, stroke_width="0.6")


def _disc(drawing: Drawing, at: Floats, width_mm: float, colour: str, rim_px: float) -> None:
    x, y = drawing.xy((float(at[0]), float(at[1])))
    radius = number(0.5 * float(width_mm) * drawing.px_per_mm + rim_px)
    drawing.raw(f'<circle cx="{x}" cy="{y}" r="{radius}" fill="{colour}"/>')


def _rim(drawing: Drawing, points: Floats, bore_mm: Floats) -> None:
    """Draws a dark edge around a band, below all bands, so that crossings and joints stay clean."""
    left, right = band_edges_mm(points, bore_mm)
    outline = drawing.path_data(np.concatenate([left, right[::-1]]), closed=True)
    drawing.shape(outline, fill=INK, stroke=INK, stroke_width="2")
    for end in (0, -1):
        _disc(drawing, points[end], bore_mm[end], INK, 1.0)


def _no_flow(drawing: Drawing, points: Floats, bore_mm: Floats, hatch: str) -> None:
    """Hatches a band and dashes its edge: no coolant passes through it."""
    left, right = band_edges_mm(points, bore_mm)
    outline = drawing.path_data(np.concatenate([left, right[::-1]]), closed=True)
    drawing.shape(outline, fill=hatch, stroke=PAPER, stroke_width="1.6", stroke_dasharray="4 3")


def _arrows(drawing: Drawing, points: Floats, bore_mm: Floats, flow: float) -> None:
    """Draws arrow heads along a band, the way its coolant runs; none where `flow` is 0."""
    if flow == 0.0 or len(points) < 3:
        return
    line = points if flow > 0.0 else points[::-1]
    width = bore_mm if flow > 0.0 else bore_mm[::-1]
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(line, axis=0), axis=1))])
    count = max(1, int(along[-1] / drawing.mm(ARROW_EVERY_PX)))
    for share in (np.arange(count) + 0.3) / count:
        at = int(np.searchsorted(along, share * along[-1]))
        at = min(max(at, 1), len(line) - 2)
        ahead = line[at + 1] - line[at - 1]
        ahead = ahead / max(float(np.linalg.norm(ahead)), 1e-9)
        half = min(0.32 * float(width[at]), drawing.mm(7.0))
        side = np.array([-ahead[1], ahead[0]])
        head = np.array([line[at] - half * (ahead - side), line[at] + half * ahead, line[at] - half * (ahead + side)])
        data = drawing.path_data(head, closed=False)
        for colour, stroke in ((INK, "4"), (PAPER, "2")):
            drawing.shape(data, fill="none", stroke=colour, stroke_width=stroke, stroke_linecap="round")


def draw_ports(drawing: Drawing, scene: SheetScene) -> None:
    """Draws the symbol and the name of every port on the sheet; names stay inside the drawing."""
    wide = drawing.high_mm[0] - drawing.low_mm[0]
    for node in scene.plan.nodes:
        if node.kind is not NodeKind.PORT or node.sheet_mm is None or node.port is None:
            continue
        x, y = on_sheet_mm(scene.seen(node.sheet_mm)[0], scene.turn_mm).tolist()
        role = scene.roles.get(node.port, Role.ACCESS)
        draw_port(drawing, (x, y), role)
        share = (x - drawing.low_mm[0]) / wide
        anchor = "start" if share < 0.2 else "end" if share > 0.8 else "middle"
        shift = drawing.mm(18.0) * (1.0 if y > 0.5 * scene.size_mm[1] else -1.0)
        words = f"{node.port} ({role.value})"
        drawing.label((x, y + shift), words, size_px=12.0, colour=PORT_COLOUR, anchor=anchor, bold=True)


def _names(drawing: Drawing, scene: SheetScene, branches: list[PlanBranch], kept_out: list[tuple[str, Floats]]) -> None:
    """Names keep-outs, branches without through-flow and the marked one; all branches where the flow is shown."""
    named = {b.id for b in branches if not b.through_flow or scene.flow}
    if scene.marked is not None:
        named.add(scene.marked[0])
    labels = LabelPlaces(drawing)
    labels.keep_below_clear(LEGEND_PX)
    for node in scene.plan.nodes:
        if node.kind is NodeKind.PORT and node.sheet_mm is not None:
            labels.keep_clear(on_sheet_mm(scene.seen(node.sheet_mm)[0], scene.turn_mm), 10.0)
    for name, at in kept_out:
        labels.write(on_sheet_mm(at, scene.turn_mm), name, KEEP_OUT, beside=False)
    for branch in branches:
        if branch.id in named:
            points = scene.seen(sheet_of(branch))
            labels.write(on_sheet_mm(points[middle_index(points)], scene.turn_mm), branch.id, INK, beside=False)


def _mark(drawing: Drawing, scene: SheetScene) -> None:
    """Rings the marked place."""
    if scene.marked is None or scene.marked[1] is None:
        return
    place = on_sheet_mm(scene.seen(np.array(scene.marked[1]))[0], scene.turn_mm)
    x, y = drawing.xy(tuple(place.tolist()))
    for colour, width in ((PAPER, "5.5"), (INK, "2.4")):
        drawing.raw(f'<circle cx="{x}" cy="{y}" r="12" fill="none" stroke="{colour}" stroke-width="{width}"/>')


def sheet_window(size_mm: tuple[float, float], square_px: float) -> tuple[Point, Point, float]:
    """Returns lower left and upper right corner and drawn width of a window with a margin for names.

    A sheet wider than high fills the width; a higher one is narrowed so that it stays `square_px` high.
    """
    margin = 0.085 * max(size_mm)
    low, high = (-margin, -margin), (size_mm[0] + margin, size_mm[1] + margin)
    tall = (high[1] - low[1]) / (high[0] - low[0])
    if tall > 1.0:
        extra = 0.5 * ((high[1] - low[1]) - (high[0] - low[0]))
        low, high = (low[0] - extra, low[1]), (high[0] + extra, high[1])
    return low, high, square_px


def draw_sheet(scene: SheetScene) -> str:
    """Returns the sheet from the part side as SVG, with its legend in mm below it."""
    low, high, width_px = sheet_window(scene.size_mm, WIDTH_PX)
    below = (high[0] - low[0]) * LEGEND_PX / width_px
    title = f"The sheet seen from the part side, coloured by {scene.colours.words}"
    drawing = Drawing((low[0], low[1] - below), high, width_px, scene.colours.key, title)
    width, height = scene.size_mm
    frame = np.array([[0, 0], [width, 0], [width, height], [0, height]], dtype=float)
    drawing.shape(drawing.path_data(frame, closed=True), fill=SHEET, stroke=FAINT, stroke_width="1")
    kept_out = draw_keep_outs(drawing, scene.keep_outs, scene.size_mm, scene.turn_mm, scene.seen)
    hatch = drawing.hatch("no-flow", INK, 6.0, 45.0, 0.6)
    branches = sheet_branches(scene.plan)
    copies = [
        (branch, points) for branch in branches for points in copies_mm(scene.seen(sheet_of(branch)), scene.turn_mm)
    ]
    with clipped(drawing, scene.size_mm, scene.turn_mm):
        for branch, points in copies:
            _rim(drawing, points, branch.bore_mm)
        for branch, points in copies:
            _band(drawing, points, branch.bore_mm, scene.colours.steps(branch.id))
        for branch, points in copies:
            if not branch.through_flow:
                _no_flow(drawing, points, branch.bore_mm, hatch)
        for branch, points in copies:
            _arrows(drawing, points, branch.bore_mm, scene.flow.get(branch.id, 0.0))
    _mark(drawing, scene)
    draw_ports(drawing, scene)
    _names(drawing, scene, branches, kept_out)
    mark = scene.mark_words if scene.marked is not None and scene.marked[1] is not None else ""
    draw_sheet_legend(drawing, scene.colours.words, scene.colours.ends, hatch, LEGEND_PX, mark)
    if kept_out:
        draw_keep_out_legend(drawing, LEGEND_PX, f"url(#{drawing.ident}-{HATCH})")
    return drawing.svg()
