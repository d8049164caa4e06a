"""Front, side and top view of the channels in the insert: the still pictures that also print."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from morph.body.plan import ChannelPlan, PlanBranch
from morph.core.arrays import Floats
from morph.geometry.mesh import Mesh
from morph.report.drawing import FAINT, INK, Drawing
from morph.report.legend import draw_port

WIDTH_PX, HEIGHT_PX = 260.0, 300.0
CHANNEL, IDLE, BODY = "#5b8fc7", "#c9c9c9", "#eef1f4"


@dataclass(frozen=True, slots=True)
class View:
    """A direction of view: its name, and the part axes drawn to the right and upwards with their signs."""

    name: str
    right: tuple[int, float]
    up: tuple[int, float]
    words: str


VIEWS = (
    View("front", (0, 1.0), (2, 1.0), "Front: x right, z up"),
    View("side", (1, 1.0), (2, 1.0), "Side: y right, z up"),
    View("top", (0, 1.0), (1, 1.0), "Top: x right, y up"),
)


def flat_mm(view: View, xyz_mm: Floats) -> Floats:
    """Returns points (k, 3) as seen in `view`, (k, 2)."""
    (a, sign_a), (b, sign_b) = view.right, view.up
    return np.column_stack([sign_a * xyz_mm[:, a], sign_b * xyz_mm[:, b]])


def outline_mm(points_mm: Floats) -> Floats:
    """Returns the convex outline (k, 2) of points (n, 2), counter-clockwise."""
    from scipy.spatial import ConvexHull

    return np.asarray(points_mm[ConvexHull(points_mm).vertices], dtype=np.float64)


def silhouette_mm(view: View, branches: Sequence[PlanBranch]) -> list[list[Floats]]:
    """Returns the united shadow of `branches` in `view`: per island its outline (k, 2) and then its holes.

    Each branch is a chain of balls; its shadow is the union of the hulls of neighbouring discs, taken about half a
    bore apart, which is nearer than the line is wide.
    """
    import shapely

    hulls = []
    for branch in branches:
        points = flat_mm(view, branch.xyz_mm)
        spacing = branch.length_mm / max(1, len(points) - 1)
        step = max(1, int(0.5 * float(branch.bore_mm.min()) / max(spacing, 1e-9)))
        kept = np.unique(np.append(np.arange(0, len(points), step), len(points) - 1))
        discs = shapely.buffer(shapely.points(points[kept]), 0.5 * branch.bore_mm[kept], quad_segs=6)
        pairs = shapely.multipolygons(np.column_stack([discs[:-1], discs[1:]]))
        hulls.append(shapely.convex_hull(pairs))
    if not hulls:
        return []
    shadow = shapely.union_all(np.concatenate(hulls))
    islands = sorted(shapely.get_parts(shadow), key=lambda part: part.bounds)
    return [
        [np.asarray(ring.coords, dtype=np.float64)[:-1] for ring in (part.exterior, *part.interiors)]
        for part in islands
    ]


def draw_view(view: View, plan: ChannelPlan, insert: Mesh) -> str:
    """Returns one view as SVG: the outline of the insert, the shadow of its channels, exits and size."""
    body = outline_mm(flat_mm(view, insert.vertices_mm))
    low, high = body.min(axis=0), body.max(axis=0)
    size, middle = high - low, 0.5 * (low + high)
    half = (
        0.5
        * np.array([WIDTH_PX, HEIGHT_PX])
        * max(float(size[0]) / (WIDTH_PX - 40.0), float(size[1]) / (HEIGHT_PX - 60.0))
    )
    drawing = Drawing(tuple(middle - half), tuple(middle + half), WIDTH_PX, f"view-{view.name}", view.words)
    drawing.shape(drawing.path_data(body, closed=True), fill=BODY, stroke=FAINT, stroke_width="1.2")
    idle = [branch for branch in plan.branches if not branch.through_flow]
    flowing = [branch for branch in plan.branches if branch.through_flow]
    for branches, style in ((idle, {"fill": IDLE, "stroke_dasharray": "4 3"}), (flowing, {"fill": CHANNEL})):
        for rings in silhouette_mm(view, branches):
            data = " ".join(drawing.path_data(ring, closed=True) for ring in rings)
            drawing.shape(data, stroke=INK, stroke_width="0.8", fill_opacity="0.75", fill_rule="evenodd", **style)
    for exit_ in plan.exits:
        x, y = flat_mm(view, exit_.xyz_mm[None, :])[0].tolist()
        draw_port(drawing, (x, y), exit_.role)
    drawing.label(
        (float(middle[0]), float(low[1]) - drawing.mm(22.0)),
        f"{size[0]:.1f} mm wide, {size[1]:.1f} mm high",
        size_px=12.0,
    )
    return drawing.svg()
