"""The drawing of the worst wall: metal hatched, channel empty, the wall dimensioned, and where it lies."""

from __future__ import annotations

import numpy as np

from morph.body.blank import Blank
from morph.core.arrays import Floats
from morph.core.verdict import Verdict
from morph.report.colour import OUTCOME_COLOUR, OUTCOME_SIGN, OUTCOME_WORD
from morph.report.cut import Loop, cut_mesh, rod_mesh
from morph.report.drawing import INK, PAPER, Drawing
from morph.report.section import CHANNEL, MERGE, WallSection

WINDOW_PX, STRIP_PX = 400.0, 92.0
METAL = "#c9d0d8"
HATCH = "#9aa5b1"
CHANNEL_LINE = "#0b5394"
STOCK_LINE = "#6b4c9a"
LINES = {"channel": (CHANNEL_LINE, ""), "stock": (STOCK_LINE, "7 4"), "hole": (INK, "6 3")}
LEAST_HALF_WINDOW_MM = 5.0
PLATE_REACHES_PX = (50.0, 70.0, 90.0, 110.0, 130.0, 150.0)
FINISHED_NEAR = 0.02


def _metal(drawing: Drawing, loops: tuple[Loop, ...], hatch: str) -> None:
    """Fills the metal: between the outlines, by the even-odd rule, so holes and channels stay empty."""
    data = "".join(drawing.path_data(loop.points_mm, closed=True) for loop in loops)
    drawing.shape(data, fill=METAL, fill_rule="evenodd")
    drawing.shape(data, fill=hatch, fill_rule="evenodd")


def _runs(loop: Loop, label: int) -> list[Floats]:
    """Returns the stretches (k, 2) of `loop` whose pieces carry `label`, in order along the loop."""
    mark = loop.label == label
    n = len(mark)
    if mark.all():
        return [np.vstack([loop.points_mm, loop.points_mm[:1]])]
    starts = np.flatnonzero(mark & ~np.roll(mark, 1))
    runs = []
    for start in starts.tolist():
        length = 1
        while mark[(start + length) % n]:
            length += 1
        runs.append(loop.points_mm[(start + np.arange(length + 1)) % n])
    return runs


def _outlines(drawing: Drawing, loops: tuple[Loop, ...], width_px: float) -> None:
    for label, colour, width in ((0, INK, width_px), (CHANNEL, CHANNEL_LINE, 1.6 * width_px)):
        data = "".join(drawing.path_data(run) for loop in loops for run in _runs(loop, label))
        if data:
            drawing.shape(data, fill="none", stroke=colour, stroke_width=f"{width:g}", stroke_linejoin="round")


def _finished_skin(section: WallSection, blank: Blank) -> list[Floats]:
    """Returns the finished faces under machining stock as polylines (k, 2): the printed skin moved in by the stock."""
    out = []
    for face in blank.faces:
        if face.stock_mm <= 0.0:
            continue
        for loop in section.loops:
            for run in _runs(loop, 0):
                space = section.plane.space_mm(run)
                depth = face.distance_mm(space)
                on = np.abs(depth + face.stock_mm) < FINISHED_NEAR
                moved = space + depth[:, None] * face.outward(space)
                if int(on.sum()) >= 2:
                    out.append(section.plane.flat_mm(moved[on]))
    return out


def _arrow(drawing: Drawing, tip: Floats, away: Floats, colour: str) -> None:
    """A slim arrow head with its tip at `tip` that comes from the direction `away`."""
    side = np.array([-away[1], away[0]])
    long, wide = drawing.mm(9.0), drawing.mm(3.2)
    head = np.array([tip, tip + long * away + wide * side, tip + long * away - wide * side])
    drawing.shape(drawing.path_data(head, closed=True), fill=colour)


def _dimension(drawing: Drawing, section: WallSection) -> None:
    """Draws the wall between two arrows from outside, and its value with sign and limit on a plate nearby.

    Channels that overlap have no wall: a ring marks the place.
    """
    colour = OUTCOME_COLOUR[section.verdict.outcome]
    if section.overlaps:
        x, y = drawing.xy((0.0, 0.0))
        drawing.raw(f'<circle cx="{x}" cy="{y}" r="11" fill="none" stroke="{colour}" stroke-width="2.6"/>')
        _plate(drawing, section, colour, np.zeros((1, 2)))
        return
    a, b = section.channel_side_mm, section.far_side_mm
    length = section.drawn_mm
    along = (b - a) / length if length > 0.0 else np.array([1.0, 0.0])
    drawing.line(tuple(a), tuple(b), colour, 2.6)
    for tip, away in ((a, -along), (b, along)):
        _arrow(drawing, tip, away, colour)
        drawing.line(tuple(tip), tuple(tip + drawing.mm(24.0) * away), colour, 1.3)
    tail = drawing.mm(24.0) * along
    _plate(drawing, section, colour, np.linspace(a - tail, b + tail, 40))


def _plate_words(verdict: Verdict) -> tuple[str, str]:
    """Returns the value with its sign, and what it is held against."""
    sign, value = OUTCOME_SIGN[verdict.outcome], verdict.value or 0.0
    if verdict.code == MERGE:
        words = f"overlap {-value:.2f} mm {sign}" if value <= 0.0 else f"{value:.2f} mm {sign}"
        return words, "the layout keeps them apart"
    limit = "" if verdict.limit is None else f"at least {verdict.limit:.2f} + {verdict.band:.2f} band"
    return f"{value:.2f} mm {sign}", limit


def _plate(drawing: Drawing, section: WallSection, colour: str, dimension_mm: Floats) -> None:
    """Writes value and limit on a plate where it hides least, tied to the middle of the wall by a thin line.

    Args:
        drawing: the window, with the wall's middle at its origin.
        section: the cut.
        colour: of the outcome.
        dimension_mm: (k, 2) points along the drawn dimension, which stays free.
    """
    value, limit = _plate_words(section.verdict)
    wide, high = max(11.6 * len(value), 6.4 * len(limit)) + 14.0, 42.0
    half = np.array([drawing.mm(0.5 * wide), drawing.mm(0.5 * high)])
    outline = np.concatenate([loop.points_mm for loop in section.loops])
    names = np.array([item.at_mm for item in (*section.named, *section.crossings)]).reshape(-1, 2)
    middle = _freest(drawing, half, dimension_mm, outline, names)
    if float(np.linalg.norm(middle)) > 0.0:
        drawing.line((0.0, 0.0), (float(middle[0]), float(middle[1])), colour, 1.0)
    x, y = drawing.xy((float(middle[0]), float(middle[1])))
    left, top = float(x) - 0.5 * wide, float(y) - 0.5 * high
    drawing.raw(
        f'<rect x="{left:.1f}" y="{top:.1f}" width="{wide:.1f}" height="{high:g}" rx="4" fill="{PAPER}" '
        f'stroke="{colour}" stroke-width="1.2"/>'
    )
    drawing.label((middle[0], middle[1] + drawing.mm(8.0)), value, size_px=18.0, colour=colour, bold=True)
    drawing.label((middle[0], middle[1] - drawing.mm(11.0)), limit, size_px=11.5)


def _freest(drawing: Drawing, half_mm: Floats, dimension_mm: Floats, outline_mm: Floats, names_mm: Floats) -> Floats:
    """Returns the middle (2,) of a plate of half sizes `half_mm (2,)` that hides least: never the dimension."""
    limit = 0.5 * (drawing.high_mm[0] - drawing.low_mm[0]) - half_mm - drawing.mm(6.0)
    best, found = np.inf, np.zeros(2)
    for reach_px in PLATE_REACHES_PX:
        for angle in np.radians(np.arange(0.0, 360.0, 15.0)):
            place = drawing.mm(reach_px) * np.array([np.cos(angle), np.sin(angle)])
            if (np.abs(place) > limit).any():
                continue

            def hidden(points: Floats, rim_px: float, place: Floats = place) -> int:
                return int((np.abs(points - place) < half_mm + drawing.mm(rim_px)).all(axis=1).sum())

            cost = 1e3 * hidden(dimension_mm, 8.0) + 20.0 * hidden(names_mm, 10.0) + hidden(outline_mm, 3.0)
            cost += 0.02 * reach_px
            if cost < best:
                best, found = cost, place
    return found


def _holes(drawing: Drawing, section: WallSection, blank: Blank, half_mm: float) -> bool:
    """Draws the holes that are made later, dashed and empty, with their names; returns whether any is in the window."""
    any_seen = False
    for hole in blank.holes:
        rod = rod_mesh(hole.start_mm, hole.axis, hole.length_mm, hole.diameter_mm)
        for loop in cut_mesh(rod, np.zeros(len(rod.triangles), dtype=np.int64), section.plane):
            data = drawing.path_data(loop.points_mm, closed=True)
            drawing.shape(data, fill=PAPER, stroke=INK, stroke_width="1.6", stroke_dasharray="6 3")
            seen = loop.points_mm[np.abs(loop.points_mm).max(axis=1) < half_mm]
            if len(seen):
                x, y = seen.mean(axis=0).tolist()
                drawing.label((x, y), hole.id, size_px=13.0, bold=True)
                any_seen = True
    return any_seen


def _channel_names(drawing: Drawing, section: WallSection, half_mm: float) -> None:
    """Names the channels in the window: first those the verdict names, then the others where their centrelines pass.

    Beside a junction several centrelines pass through one opening; it carries the name the verdict uses.
    """
    if section.overlaps:
        words = " and ".join(section.verdict.branch_ids[:2])
        drawing.label((0.0, -drawing.mm(24.0)), words, size_px=13.0, colour=CHANNEL_LINE, bold=True)
        return
    taken = [0.5 * (section.channel_side_mm + section.far_side_mm)]
    for crossing in (*section.named, *section.crossings):
        at = crossing.at_mm
        inside = bool(np.abs(at).max() < half_mm - drawing.mm(16.0))
        apart = drawing.mm(26.0) if crossing in section.named else max(drawing.mm(26.0), 0.6 * section.bore_mm)
        if inside and all(float(np.linalg.norm(at - other)) > apart for other in taken):
            taken.append(at)
            drawing.label((float(at[0]), float(at[1])), crossing.branch, size_px=13.0, colour=CHANNEL_LINE, bold=True)


def _bounds(loops: tuple[Loop, ...]) -> tuple[Floats, Floats]:
    points = np.concatenate([loop.points_mm for loop in loops])
    return points.min(axis=0), points.max(axis=0)


def _map_of_cut(section: WallSection, half_mm: float) -> str:
    """Returns a small drawing of the whole cut with the window marked."""
    low, high = _bounds(section.loops)
    middle, half = 0.5 * (low + high), 0.56 * float((high - low).max())
    title = "The whole cut, with the window above marked"
    small = Drawing(tuple(middle - half), tuple(middle + half), STRIP_PX, "section-map", title)
    data = "".join(small.path_data(loop.points_mm, closed=True) for loop in section.loops)
    small.shape(data, fill=METAL, fill_rule="evenodd", stroke=INK, stroke_width="0.6")
    frame = np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]) * half_mm
    colour = OUTCOME_COLOUR[section.verdict.outcome]
    small.shape(small.path_data(frame, closed=True), fill="none", stroke=colour, stroke_width="2")
    return small.svg()


def _legend(drawing: Drawing, section: WallSection, hatch: str, has_stock: bool, has_hole: bool) -> None:
    """Writes below the window what its lines and fills mean, beside the map of the whole cut."""
    view = "Build direction points up." if section.build_is_up else "Seen against the build direction."
    rows = [("metal", "metal, as written to insert.stl"), ("channel", "channel wall; the channel is empty")]
    rows += [("stock", "finished face, under machining stock")] if has_stock else []
    rows += [("hole", "hole, made later")] if has_hole else []
    x, y = STRIP_PX + 20.0, WINDOW_PX + 13.0
    for kind, words in rows:
        if kind == "metal":
            for fill in (METAL, hatch):
                drawing.raw(f'<rect x="{x:g}" y="{y - 7:g}" width="26" height="14" fill="{fill}" stroke="{INK}"/>')
        else:
            colour, dash = LINES[kind]
            dash = f' stroke-dasharray="{dash}"' if dash else ""
            drawing.raw(f'<path d="M{x:g} {y:g}h26" stroke="{colour}" stroke-width="2.4" fill="none"{dash}/>')
        drawing.raw(f'<text x="{x + 34:g}" y="{y:g}" dy="0.35em" font-size="12" fill="{INK}">{words}</text>')
        y += 18.0
    drawing.raw(f'<text x="{x:g}" y="{y:g}" dy="0.35em" font-size="12" fill="{INK}">{view}</text>')


def draw_section(section: WallSection, blank: Blank) -> str:
    """Returns the section as SVG: about two bores of surroundings around the wall, and a map of the whole cut.

    Args:
        section: the cut.
        blank: for finished faces under machining stock.
    """
    half = max(LEAST_HALF_WINDOW_MM, 0.5 * section.drawn_mm + 1.25 * section.bore_mm)
    below = 2.0 * half * STRIP_PX / WINDOW_PX
    verdict = section.verdict
    drawing = Drawing(
        (-half, -half - below),
        (half, half),
        WINDOW_PX,
        "section",
        "Section through the worst wall",
        f"{OUTCOME_WORD[verdict.outcome]}: {verdict.text}",
    )
    square = f'width="{WINDOW_PX:g}" height="{WINDOW_PX:g}"'
    drawing.define(f'<clipPath id="section-window"><rect {square}/></clipPath>')
    hatch = drawing.hatch("metal", HATCH, 9.0, 45.0, 0.5)
    drawing.raw('<g clip-path="url(#section-window)">')
    _metal(drawing, section.loops, hatch)
    _outlines(drawing, section.loops, 1.4)
    finished = _finished_skin(section, blank)
    for line in finished:
        data = drawing.path_data(line)
        drawing.shape(data, fill="none", stroke=STOCK_LINE, stroke_width="1.6", stroke_dasharray="7 4")
    has_hole = _holes(drawing, section, blank, half)
    _channel_names(drawing, section, half)
    _dimension(drawing, section)
    drawing.scale_bar((-half + drawing.mm(14.0), -half + drawing.mm(12.0)))
    drawing.raw(
        f'</g><rect x="0.5" y="0.5" width="{WINDOW_PX - 1:g}" height="{WINDOW_PX - 1:g}" fill="none" stroke="{HATCH}"/>'
    )
    drawing.raw(f'<g transform="translate(4 {WINDOW_PX + 2:g})">{_map_of_cut(section, half)}</g>')
    _legend(drawing, section, hatch, bool(finished), has_hole)
    return drawing.svg()
