"""The tests a laid sheet must pass, and the report of what was measured.

Four refusals, none implied by another: cells that fold over, distant cells that overlap, points that are not at
their depth below the real face, and an offset that turned inside out (depth beyond the focus). Distances are
measured from the points to the triangles of the user's mesh, not to the fitted surface the sheet was laid on.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, frozen_floats
from morph.core.errors import GeometryError
from morph.core.verdict import Notice
from morph.geometry.local_fit import LocalFit
from morph.geometry.surface import Places
from morph.layout.graph import ChannelGraph
from morph.surface.freeform import FreeformCarrier
from morph.surface.freeform_error import fault, others_text, place_text, sheet_text
from morph.surface.guide import CALM_MM, Guide
from morph.surface.offset import OffsetSurface
from morph.surface.sheet_grid import SheetGrid

OFF_MM = 0.05
"""A point farther off its depth than this (plus what noise does) is refused."""
CLOSE_MM = 0.006
"""A point farther off its depth than this is told."""
FACET_TIMES = 5.0
"""The middle of a facet lies up to about this many times the median gap of facets from the surface they stand for."""
COARSE_MM = 0.04
"""A larger median gap of facets is no surface a wall can be judged against (common practice, no source)."""
MOST_BLUR_MM = 0.15
"""Noise and facets together excuse no more than this (common practice, no source)."""
NOISE_TIMES = 5.0
"""Nearest points of a noisy mesh lie up to about this many times its scatter from its mean surface."""
SHARP_DEG = 30.0
"""Triangles that turn by more than this (plus what noise does) meet in an edge, not in a rounding."""
NEAR_CELLS, FAR_CELLS = 0.6, 5.0
"""Nodes nearer than the first in space, farther apart than the second on the sheet, overlap."""


@dataclass(frozen=True, slots=True, eq=False)
class LayReport:
    """What was found while a sheet was laid.

    Args:
        noise_mm: scatter of the vertices about smooth fits.
        reach_mm: radius of these fits.
        focal_depth_mm: least depth of a focus under the sheet, infinite where nothing is convex.
        focal_at_mm: (3,) the place on the face.
        depth_error_mm: (k,) measured distance from the face less the depth, at `sampled_mm`.
        sampled_mm: (k, 2) sheet places.
        notices: what the user must know.
    """

    noise_mm: float
    reach_mm: float
    focal_depth_mm: float
    focal_at_mm: Floats
    depth_error_mm: Floats
    sampled_mm: Floats
    notices: tuple[Notice, ...] = ()

    def __post_init__(self) -> None:
        object.__setattr__(self, "focal_at_mm", frozen_floats("focal_at_mm", self.focal_at_mm, (3,)))
        object.__setattr__(self, "sampled_mm", frozen_floats("sampled_mm", self.sampled_mm, (None, 2)))
        error = frozen_floats("depth_error_mm", self.depth_error_mm, (len(self.sampled_mm),))
        object.__setattr__(self, "depth_error_mm", error)


@dataclass(frozen=True, slots=True, eq=False)
class Laid:
    """A sheet at rest: its carrier, its grid, the places of its nodes on the guide's face and the fits there."""

    carrier: FreeformCarrier
    grid: SheetGrid
    foot: Places
    fit: LocalFit


def require_sound(guide: Guide, deep: OffsetSurface, laid: Laid) -> LayReport:
    """Returns the report of a laid sheet.

    Raises:
        GeometryError: `depth-past-focus`, `surface-edge-under-sheet`, `depth-meets-other-face`,
            `sheet-off-surface`, `sheet-folds`, `sheet-meets-itself`.
    """
    carrier, depth_mm = laid.carrier, laid.carrier.depth_mm
    _require_before_focus(guide, deep, laid)
    sampled = _samples(laid.grid)
    points = carrier.point_mm(sampled, depth_mm)
    known = ~carrier.over_filling(sampled)
    error = np.where(known, carrier.face.inside_mm(points) - depth_mm, 0.0)
    limit = OFF_MM + min(NOISE_TIMES * guide.noise_mm + FACET_TIMES * _facet_mm(laid), MOST_BLUR_MM)
    off = np.abs(error) > limit
    if off.any():
        _raise_off(guide, laid, sampled, points, error, limit)
    _require_unfolded(laid, sampled)
    _require_spline_before_focus(guide, laid, sampled)
    _require_single(laid)
    curvature, places = _curved_places(guide, laid)
    worst = int(curvature.argmax())
    return LayReport(
        noise_mm=guide.noise_mm,
        reach_mm=guide.reach_mm,
        focal_depth_mm=1.0 / float(curvature[worst]) if curvature[worst] > 0.0 else float("inf"),
        focal_at_mm=places[worst],
        depth_error_mm=error[known],
        sampled_mm=sampled[known],
        notices=_notices(guide, carrier, sampled, error),
    )


def _facet_mm(laid: Laid) -> float:
    """Returns the median gap in mm between the facets and the fitted surface under the sheet.

    Raises:
        GeometryError: `surface-too-coarse`.
    """
    gap = np.linalg.norm(laid.fit.xyz_mm - laid.foot.xyz_mm, axis=1)
    facet = float(np.median(gap))
    if facet > COARSE_MM:
        worst = int(gap.argmax())
        raise fault(
            "surface-too-coarse",
            expected=f"triangles within {COARSE_MM:.2f} mm (median) of the smooth face they stand for",
            found=f"{facet:.3f} mm, {gap[worst]:.3f} mm at the worst node",
            do="Export the part face again with a chord tolerance of 0.01 mm or less.",
            at_mm=laid.foot.xyz_mm[worst],
        )
    return facet


def _samples(grid: SheetGrid) -> Floats:
    """Returns the nodes and the middles of edges and cells as sheet places (k, 2)."""
    x = np.linspace(0.0, (grid.nx - 1) * grid.dx_mm, 2 * grid.nx - 1)
    y = np.linspace(0.0, (grid.ny - 1) * grid.dy_mm, 2 * grid.ny - 1)
    return np.column_stack([np.repeat(x, len(y)), np.tile(y, len(x))])


def _curved_places(guide: Guide, laid: Laid) -> tuple[Floats, Floats]:
    """Returns the largest principal curvatures (k,) under the sheet and their places (k, 3) on the face.

    At the nodes; on a calm mesh at its vertices as well, between which the nodes may miss a tight place.
    """
    curvature, places = laid.fit.curvature[:, 0], laid.fit.xyz_mm
    if guide.noise_mm > CALM_MM:
        return curvature, places
    fitted = np.flatnonzero(guide.fit.points > 0)
    under = fitted[_under_sheet(laid, guide.fit.xyz_mm[fitted])]
    return (
        np.concatenate([curvature, guide.fit.curvature[under, 0]]),
        np.concatenate([places, guide.fit.xyz_mm[under]]),
    )


def _focal_error(curvature: float, depth_mm: float, at_mm: Floats, count: int, edge: bool) -> GeometryError:
    if edge:
        return fault(
            "surface-edge-under-sheet",
            expected="a rounded face under the sheet",
            found="a sharp edge across it" + others_text(count),
            do="Round the edge by more than the channel depth, or keep the sheet on one side of it.",
            at_mm=at_mm,
        )
    radius = 1.0 / max(curvature, 1e-9)
    found = f"a convex radius of {radius:.3f} mm" if curvature * depth_mm >= 1.0 else "an offset that turns inside out"
    return fault(
        "depth-past-focus",
        expected=f"a face that is nowhere rounder than the depth of {depth_mm:.3f} mm under the sheet",
        found=found + others_text(count),
        do=f"Lower the depth below {min(radius, depth_mm):.3f} mm, or move or shrink the sheet away from that place.",
        at_mm=at_mm,
    )


def focal_fault(guide: Guide, deep: OffsetSurface, depth_mm: float) -> GeometryError | None:
    """Returns `depth-past-focus` for the place nearest to the anchor where the offset fails, None if nowhere."""
    bad = deep.focal >= 1.0
    bad[guide.face.mesh.triangles[deep.turned].ravel()] = True
    if not bad.any():
        return None
    points = guide.face.mesh.vertices_mm
    gap = np.where(bad, np.linalg.norm(points - guide.anchor.xyz_mm[0], axis=1), np.inf)
    first = int(gap.argmin())
    edge = _near_edge(guide, points[first])
    return _focal_error(float(guide.fit.curvature[first, 0]), depth_mm, points[first], int(bad.sum()), edge)


def _require_before_focus(guide: Guide, deep: OffsetSurface, laid: Laid) -> None:
    """Raises when the offset turned inside out under the sheet, by its triangles or by the curvature at the nodes."""
    depth_mm = laid.carrier.depth_mm
    curvature, places = _curved_places(guide, laid)
    focal = curvature * depth_mm
    bad = focal >= 1.0
    if bad.any():
        worst = int(focal.argmax())
        at = places[worst]
        raise _focal_error(float(focal[worst]) / depth_mm, depth_mm, at, int(bad.sum()), _near_edge(guide, at))
    turned = np.flatnonzero(deep.turned)
    if len(turned) == 0:
        return
    middle = guide.face.mesh.vertices_mm[guide.face.mesh.triangles[turned]].mean(axis=1)
    under = _under_sheet(laid, middle)
    if under.any():
        worst = int(np.flatnonzero(under)[0])
        at = middle[worst]
        largest = float(guide.fit.curvature[guide.face.mesh.triangles[turned[worst]], 0].max())
        raise _focal_error(largest, depth_mm, at, int(under.sum()), _near_edge(guide, at))


def _require_spline_before_focus(guide: Guide, laid: Laid, sampled: Floats) -> None:
    """Raises where the laid spline itself, between the nodes, lies past a focus: I - d S must keep the plane's side."""
    carrier = laid.carrier
    shrink = np.eye(2) - carrier.depth_mm * carrier.shape_operator(sampled)
    upright = np.minimum(np.linalg.det(shrink), np.trace(shrink, axis1=1, axis2=2))
    bad = ~(upright > 0.0)
    if bad.any():
        worst = int(np.where(bad, upright, np.inf).argmin())
        at = carrier.point_mm(sampled[worst : worst + 1], 0.0)[0]
        raise _focal_error(0.0, carrier.depth_mm, at, int(bad.sum()), _near_edge(guide, at))


def _under_sheet(laid: Laid, xyz_mm: Floats) -> Bools:
    """Returns which points (k, 3) of the face lie under a node of the sheet, within a cell of it."""
    from scipy.spatial import KDTree

    feet = laid.fit.xyz_mm.reshape(laid.grid.nx, laid.grid.ny, 3)
    cell = max(
        float(np.linalg.norm(np.diff(feet, axis=0), axis=2).max()),
        float(np.linalg.norm(np.diff(feet, axis=1), axis=2).max()),
    )
    return np.asarray(KDTree(laid.fit.xyz_mm).query(xyz_mm)[0] <= 0.75 * cell, dtype=np.bool_)


def _sharp_edges(guide: Guide) -> Floats:
    """Returns the middles (k, 3) of the edges at which the face turns sharply."""
    face = guide.face
    one, corner = np.nonzero(face.adjacency.neighbour >= 0)
    two = face.adjacency.neighbour[one, corner]
    ends = np.stack([face.mesh.triangles[one, (corner + turn) % 3] for turn in (1, 2)], axis=1)
    length = np.linalg.norm(face.mesh.vertices_mm[ends[:, 0]] - face.mesh.vertices_mm[ends[:, 1]], axis=1)
    height = 2.0 * np.minimum(face.areas_mm2[one], face.areas_mm2[two]) / np.maximum(length, 1e-12)
    least = np.radians(SHARP_DEG) + 2.0 * NOISE_TIMES * guide.noise_mm / np.maximum(height, 1e-12)
    cosine = np.clip((face.normals[one] * face.normals[two]).sum(axis=1), -1.0, 1.0)
    sharp = (one < two) & (np.arccos(cosine) > least) & (height > 0.02 * length)
    return np.asarray(face.mesh.vertices_mm[ends[sharp]].mean(axis=1), dtype=np.float64)


def _near_edge(guide: Guide, at_mm: Floats) -> bool:
    """Returns whether a sharp edge of the face lies within the reach of the fits."""
    edges = _sharp_edges(guide)
    return bool(len(edges)) and float(np.linalg.norm(edges - at_mm, axis=1).min()) <= guide.reach_mm


def _raise_off(guide: Guide, laid: Laid, sampled: Floats, points: Floats, error: Floats, limit: float) -> None:
    """Raises the reason why points are not at their depth: an edge, another face nearer, or the surface itself."""
    carrier, depth_mm = laid.carrier, laid.carrier.depth_mm
    worst, off = int(np.abs(error).argmax()), np.abs(error) > limit
    face_at = carrier.point_mm(sampled[worst : worst + 1], 0.0)[0]
    _, places = carrier.face.nearest(points[worst : worst + 1])
    facing = float(carrier.face.side_normals(places)[0] @ carrier.into_metal(sampled[worst : worst + 1])[0])
    if facing > 0.0:
        raise fault(
            "depth-meets-other-face",
            expected=f"metal deeper than {depth_mm:.3f} mm, with no other face of the body nearer to the channels",
            found=f"another face {depth_mm + error[worst]:.3f} mm from the centreline at {sheet_text(sampled[worst])}"
            + others_text(int(off.sum())),
            do="Lower the depth, or move the sheet away from the thin place.",
            at_mm=face_at,
        )
    if _near_edge(guide, face_at):
        raise _focal_error(0.0, depth_mm, face_at, int(off.sum()), edge=True)
    raise fault(
        "sheet-off-surface",
        expected=f"every point within {limit:.3f} mm of its depth below the face",
        found=f"{error[worst]:+.3f} mm off the depth of {depth_mm:.3f} mm at {sheet_text(sampled[worst])}"
        + others_text(int(off.sum())),
        do="Export the face with finer triangles, or move or shrink the sheet away from that place.",
        at_mm=face_at,
    )


def _require_unfolded(laid: Laid, sampled: Floats) -> None:
    """Raises `sheet-folds` where d/dx x d/dy at depth points to the wrong side of the face's own normals."""
    from scipy.interpolate import RegularGridInterpolator

    carrier, grid = laid.carrier, laid.grid
    x, y = grid.x_mm() - grid.x_mm()[0], grid.y_mm() - grid.y_mm()[0]
    own = RegularGridInterpolator((x, y), laid.fit.normals.reshape(grid.nx, grid.ny, 3))
    normals = own(np.minimum(sampled, [x[-1], y[-1]]))
    slope = carrier.jacobian(sampled, carrier.depth_mm)
    upright = carrier.turn * (np.cross(slope[:, :, 0], slope[:, :, 1]) * normals).sum(axis=1)
    folded = ~(upright > 0.0)
    if folded.any():
        worst = int(np.where(folded, upright, np.inf).argmin())
        raise fault(
            "sheet-folds",
            expected="a sheet that lies flat on the surface everywhere",
            found=f"a fold at {sheet_text(sampled[worst])}" + others_text(int(folded.sum())),
            do="Make the sheet smaller, move it to a calmer part of the face, or turn it with up.",
            at_mm=carrier.point_mm(sampled[worst : worst + 1], 0.0)[0],
        )


def _require_single(laid: Laid) -> None:
    """Raises `sheet-meets-itself` where two distant nodes of the sheet lie on the same place of the surface."""
    from scipy.spatial import KDTree

    grid = laid.grid
    cell = min(grid.dx_mm, grid.dy_mm)
    nodes = laid.carrier.nodes_mm
    points = laid.carrier.point_mm(nodes, laid.carrier.depth_mm)
    pairs = KDTree(points).query_pairs(NEAR_CELLS * cell, output_type="ndarray")
    apart = np.linalg.norm(nodes[pairs[:, 0]] - nodes[pairs[:, 1]], axis=1) > FAR_CELLS * cell
    facing = (laid.fit.normals[pairs[:, 0]] * laid.fit.normals[pairs[:, 1]]).sum(axis=1) > 0.0
    pairs = pairs[apart & facing]
    if len(pairs):
        first = pairs[np.lexsort((pairs[:, 1], pairs[:, 0]))[0]]
        raise fault(
            "sheet-meets-itself",
            expected="a sheet whose ends stay apart on the surface",
            found=f"{sheet_text(nodes[first[0]])} and ({nodes[first[1], 0]:.2f}, {nodes[first[1], 1]:.2f}) mm "
            "on the same place" + others_text(len(pairs)),
            do="Make the sheet narrower than one turn around the body, or turn it with up.",
            at_mm=points[first[0]],
        )


def _notices(guide: Guide, carrier: FreeformCarrier, sampled: Floats, error: Floats) -> tuple[Notice, ...]:
    worst = int(np.abs(error).argmax())
    notices = []
    if abs(float(error[worst])) > CLOSE_MM:
        place = sampled[worst]
        at = carrier.point_mm(sampled[worst : worst + 1], 0.0)[0]
        why = f"scatter of the points {guide.noise_mm:.3f} mm" if guide.noise_mm > CLOSE_MM else "flat triangles"
        notices.append(
            Notice(
                "face-depth-coarse",
                f"The depth to the part face as given is off by up to {abs(float(error[worst])):.3f} mm ({why}), "
                f"worst at {place_text(at)}.",
                sheet_mm=(float(place[0]), float(place[1])),
            )
        )
    return tuple(notices)


def require_no_channel_over_hole(graph: ChannelGraph, carrier: FreeformCarrier) -> None:
    """Raises `channel-over-hole` when a channel of `graph` passes over a hole of the part face.

    The sheet may cover holes of the file; metal for a channel is only known where the face is.
    """
    for branch in graph.branches:
        over = carrier.over_filling(branch.sheet_mm)
        if over.any():
            first = int(np.flatnonzero(over)[0])
            raise fault(
                "channel-over-hole",
                expected="channels only where the file has a part face",
                found=f"channel {branch.id} over a hole at {sheet_text(branch.sheet_mm[first])}",
                do="Move the anchor or the sheet, change the layout there, or close the hole in the file.",
                at_mm=carrier.point_mm(branch.sheet_mm[first : first + 1], 0.0)[0],
            )
