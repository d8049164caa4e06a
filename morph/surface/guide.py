"""The guide: the part of a mesh that a free-form sheet is laid on, checked, and where its centre and its axes lie.

The mesh may be open or closed, noisy, or cut into slivers. It is welded, cropped to what the sheet can reach, small
holes are filled (and remembered), long edges split. Normals and curvature come from fits whose reach grows with
the noise found, so that neither facets nor scan noise pass for shape.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints, frozen_bools, frozen_floats
from morph.core.tolerance import WELD_MM
from morph.geometry.adjacency import border_loops, make_adjacency, vertex_normals
from morph.geometry.local_fit import LocalFit, fit_around
from morph.geometry.mesh import Mesh
from morph.geometry.repair import fill_hole, loop_length_mm, part_of, split_long_edges, weld
from morph.geometry.surface import (
    Places,
    SignedSurface,
    Surface,
    make_signed,
    make_surface,
    smooth_normals,
    turned_over,
)
from morph.settings.job import FreeformSettings
from morph.surface.freeform_error import fault, others_text, unit

LONGEST_EDGE_MM = (4.0, 8.0)
"""Edges longer than three typical shortest ones, but at least the first and at most the second, are split, so that
fits find points between the ends of a long thin triangle."""
REACH_EDGES = 3.0
"""Reach of the fits in typical edge lengths: about 28 vertices, a cubic."""
REACH_LONG_EDGES = 2.2
"""And at least this many long edges, so that thin triangles give enough rows of points across them."""
NOISY_REACH_EDGES = 4.3
"""Least reach on a noisy mesh: about 58 vertices, a quartic."""
CURVATURE_SHARE = 0.003
"""The reach grows until noise shifts curvature times depth, which is a strain of the sheet, by about this."""
SCATTER_TO_CURVATURE = 62.0
"""Standard error of a fitted quartic's curvature: this times noise / (reach^2 sqrt(points)) (own measurement)."""
CALM_MM = 0.003
"""Below this scatter the least reach serves."""
WIDENING = 1.2
"""Step by which the reach grows."""
BLUR = 1.0
"""The curvature of a tenth of the places may change by this many standard errors before a fit counts as too wide
(0.80 to 0.84 where noise alone changes it, 1.1 where the shape is blurred: own measurement)."""
LARGEST_REACH_SHARE = 0.2
"""Most of the sheet's shorter side that the reach may grow to."""
NOISIEST_MM = 0.25
"""More scatter than this is no surface a wall can be judged against (common practice, no source)."""
LARGEST_HOLE_SHARE = 0.15
"""A hole with a longer rim than this share of the sheet's outline is not filled."""
STEEPEST_UP = 0.98
"""Cosine between up and the normal above which up gives no direction on the face."""
LEAST_SIDE = 0.2
"""Least cosine between the normal and the way to the point in the metal that still tells the side."""
LEAST_METAL_MM = 0.1
"""A point in the metal nearer to the face than this may lie on either side of the real one."""
SAMPLES = 600
"""Vertices that tell the noise."""
FEWEST_TRIANGLES = 40
"""Fewer triangles under a sheet carry no fit."""


@dataclass(frozen=True, slots=True, eq=False)
class Guide:
    """What a sheet is laid on.

    Args:
        face: the surface, normals out of the metal.
        whole: the whole mesh (holes filled near the sheet), for distances; same side positive: into the metal.
        filled: (m,) the triangles of `face` that close a hole.
        first_filling: number of the first triangle of `whole` that closes a hole.
        fit: the fits at the vertices of `face`.
        reach_mm: their reach.
        noise_mm: scatter of the vertices.
        anchor: the sheet's centre on `face`.
        normal: (3,) out of the metal there. x: (3,) direction of sheet x, seen from the part. y: (3,) of sheet y.
        complete: False when the mesh goes on beyond `face`.
    """

    face: Surface
    whole: SignedSurface
    filled: Bools
    first_filling: int
    fit: LocalFit
    reach_mm: float
    noise_mm: float
    anchor: Places
    normal: Floats
    x: Floats
    y: Floats
    complete: bool

    def __post_init__(self) -> None:
        object.__setattr__(self, "filled", frozen_bools("filled", self.filled, (len(self.face.mesh.triangles),)))
        for name in ("normal", "x", "y"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (3,)))


def make_guide(
    mesh: Mesh,
    settings: FreeformSettings,
    size_mm: tuple[float, float],
    depth_mm: float,
    reach_share: float = 1.3,
) -> Guide:
    """Returns the guide of a sheet.

    Args:
        mesh: the part face, with or without the rest of the body, in mm.
        settings: the [carrier] table.
        size_mm: width and height of the sheet.
        depth_mm: depth of the centrelines.
        reach_share: how far from the anchor the mesh is kept, in half diagonals of the sheet.

    Raises:
        GeometryError: `surface-too-small`, `anchor-off-surface`, `surface-not-joined`, `surface-three-faces`,
            `surface-orientation-mixed`, `metal-side-unclear`, `surface-too-noisy`, `up-along-normal`.
    """
    full = make_surface(weld(mesh, WELD_MM)) if len(mesh.triangles) else None
    if full is None or not full.areas_mm2.sum() > 0.0:
        raise fault(
            "surface-too-small",
            expected="a surface of many triangles",
            found="none that has an area",
            do="Export the part face again; a sound mesh has thousands of triangles.",
        )
    whole = make_signed(full)
    at = _require_near(whole, np.asarray(settings.anchor_mm, dtype=np.float64), depth_mm)
    kept, complete = _crop(full, at, 0.5 * float(np.hypot(*size_mm)) * reach_share + depth_mm)
    _require_sound(full, kept, at, size_mm)
    if not _normals_leave_metal(whole, settings):
        whole = SignedSurface(turned_over(full), whole.tree)
    piece, vertices = part_of(whole.surface.mesh, kept)
    filled, whole = _without_holes(piece, vertices, whole, size_mm)
    face_mesh, source = split_long_edges(filled, _longest_edge_mm(filled))
    face = make_surface(face_mesh)
    fit, reach, noise = _fits(face, at.xyz_mm[0], size_mm, depth_mm)
    _, placed = make_signed(face).nearest(at.xyz_mm)
    normal, y = _axes(face, placed, reach, settings)
    return Guide(
        face=face,
        whole=whole,
        filled=source >= len(kept),
        first_filling=len(full.mesh.triangles),
        fit=fit,
        reach_mm=reach,
        noise_mm=noise,
        anchor=placed,
        normal=normal,
        x=np.cross(y, normal),
        y=y,
        complete=complete,
    )


def _require_near(whole: SignedSurface, anchor_mm: Floats, depth_mm: float) -> Places:
    distance, at = whole.nearest(anchor_mm[None])
    if distance[0] > 0.5 * depth_mm:
        raise fault(
            "anchor-off-surface",
            expected=f"an anchor within {0.5 * depth_mm:.3f} mm (half the depth) of the part face",
            found=f"{distance[0]:.3f} mm to its nearest point",
            do=f"Set anchor_mm to [{', '.join(f'{v:.3f}' for v in at.xyz_mm[0])}], the nearest "
            "point, if that is meant; else check that the file is in mm and in the part frame.",
            at_mm=anchor_mm,
        )
    return at


def _crop(full: Surface, at: Places, radius_mm: float) -> tuple[Ints, bool]:
    """Returns the triangles that hang together with the anchor's within a ball around it, and whether these are all."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    triangles, neighbour = full.mesh.triangles, full.adjacency.neighbour
    # a long triangle may pass through the ball with all its corners outside: its box tells
    corner = full.mesh.vertices_mm[triangles] - at.xyz_mm[0]
    gap = np.maximum(np.maximum(corner.min(axis=1), -corner.max(axis=1)), 0.0)
    inside = np.linalg.norm(gap, axis=1) <= radius_mm
    one, corner = np.nonzero((neighbour >= 0) & inside[:, None])
    two = neighbour[one, corner]
    both = inside[two]
    n = len(triangles)
    links = coo_array((np.ones(int(both.sum()), dtype=np.int8), (one[both], two[both])), shape=(n, n))
    _, label = connected_components(links, directed=False)
    kept = np.flatnonzero(inside & (label == label[at.triangle[0]]))
    return kept, bool(inside[neighbour[kept][neighbour[kept] >= 0]].all())


def _require_sound(full: Surface, kept: Ints, at: Places, size_mm: tuple[float, float]) -> None:
    """Raises unless the kept triangles are one sheet of consistently oriented triangles, joined at their edges."""
    points, place = full.mesh.vertices_mm, at.xyz_mm[0]
    used = np.zeros(len(points), dtype=np.bool_)
    used[full.mesh.triangles[kept]] = True
    reach = 0.5 * float(np.hypot(*size_mm))
    for code, edges, found, do in (
        (
            "surface-three-faces",
            full.adjacency.crowded,
            "an edge that more than two triangles share",
            "Remove inner walls and doubled faces, or export the outer skin of the part alone.",
        ),
        (
            "surface-orientation-mixed",
            full.adjacency.same_way,
            "neighbouring triangles that face opposite sides",
            "Let the CAD program or a mesh tool make the normals consistent, then export again.",
        ),
    ):
        middle = points[edges].mean(axis=1)
        distance = np.linalg.norm(middle - place, axis=1)
        wrong = used[edges].any(axis=1) & (distance <= reach)
        if wrong.any():
            first = int(np.flatnonzero(wrong)[distance[wrong].argmin()])
            raise fault(
                code,
                expected="every edge under the sheet between two triangles that face the same side",
                found=found + others_text(int(wrong.sum())),
                do=do,
                at_mm=middle[first],
            )
    own = float(full.areas_mm2[kept].sum())
    near = np.linalg.norm(points[full.mesh.triangles[:, 0]] - place, axis=1) <= reach
    around, sheet = float(full.areas_mm2[near].sum()), size_mm[0] * size_mm[1]
    if own < 0.05 * sheet and around > 5.0 * own:
        raise fault(
            "surface-not-joined",
            expected="triangles that share their corners",
            found=f"a piece of {len(kept)} {'triangle' if len(kept) == 1 else 'triangles'} ({own:.2f} mm2) around the "
            f"anchor with {around:.0f} mm2 of loose triangles beside it",
            do="Stitch the faces in the CAD program (gaps must be below 0.00001 mm), or export the part as one solid.",
            at_mm=place,
        )
    if own < 0.25 * sheet or len(kept) < FEWEST_TRIANGLES:
        raise fault(
            "surface-too-small",
            expected=f"a surface that holds a sheet of {sheet:.0f} mm2, in at least {FEWEST_TRIANGLES} triangles",
            found=f"{own:.1f} mm2 in {len(kept)} triangles around the anchor",
            do="Check that the file is in mm, that the anchor lies on the right face, and that the mesh is fine.",
            at_mm=place,
        )


def _normals_leave_metal(whole: SignedSurface, settings: FreeformSettings) -> bool:
    """Returns whether the normals point away from the metal, told by the point in the metal."""
    metal = np.asarray(settings.metal_at_mm, dtype=np.float64)
    distance, at = whole.nearest(metal[None])
    way = unit(metal - at.xyz_mm[0])
    normal = unit(whole.side_normals(at)[0])
    cosine = float(way @ normal)
    if distance[0] < LEAST_METAL_MM or abs(cosine) < LEAST_SIDE:
        raise fault(
            "metal-side-unclear",
            expected="a point in the metal clearly on one side of the part face",
            found=f"metal_at_mm {distance[0]:.3f} mm from the face, {np.degrees(np.arccos(min(abs(cosine), 1.0))):.0f} "
            "degrees off its normal",
            do="Give metal_at_mm below the sheet's centre, at about the depth of the channels.",
            at_mm=metal,
        )
    return cosine < 0.0


def _without_holes(
    piece: Mesh, vertices: Ints, whole: SignedSurface, size_mm: tuple[float, float]
) -> tuple[Mesh, SignedSurface]:
    """Returns the piece with its small holes filled (the filling last), and the whole mesh with the same filling."""
    open_at = np.zeros(len(whole.surface.mesh.vertices_mm), dtype=np.bool_)
    triangle, corner = np.nonzero(whole.surface.adjacency.neighbour < 0)
    for turn in (1, 2):
        open_at[whole.surface.mesh.triangles[triangle, (corner + turn) % 3]] = True
    real = open_at[vertices]
    loops = border_loops(piece.triangles, make_adjacency(piece.triangles))
    longest = LARGEST_HOLE_SHARE * 2.0 * sum(size_mm)
    holes = [loop for loop in loops if len(loop) > 2 and real[loop].all() and loop_length_mm(piece, loop) <= longest]
    if not holes:
        return piece, whole
    normals, filled = vertex_normals(piece), piece
    for loop in holes:
        filled = fill_hole(filled, loop, normals)
    added, _ = part_of(filled, np.arange(len(piece.triangles), len(filled.triangles)))
    old = whole.surface.mesh
    joined = Mesh(
        np.concatenate([old.vertices_mm, added.vertices_mm]),
        np.concatenate([old.triangles, added.triangles + len(old.vertices_mm)]),
    )
    return filled, make_signed(make_surface(weld(joined, WELD_MM)))


def _edge_lengths(mesh: Mesh) -> Floats:
    """Returns the lengths (m, 3) of the edges of every triangle in mm."""
    corner = mesh.vertices_mm[mesh.triangles]
    return np.asarray(np.linalg.norm(corner - np.roll(corner, 1, axis=1), axis=2), dtype=np.float64)


def _longest_edge_mm(mesh: Mesh) -> float:
    shortest = float(np.median(_edge_lengths(mesh).min(axis=1)))
    return float(np.clip(3.0 * shortest, *LONGEST_EDGE_MM))


def _fits(face: Surface, place: Floats, size_mm: tuple[float, float], depth_mm: float) -> tuple[LocalFit, float, float]:
    """Returns the fits at all vertices, their reach and the noise."""
    points = face.mesh.vertices_mm
    near = np.flatnonzero(np.linalg.norm(points - place, axis=1) <= 0.5 * float(np.hypot(*size_mm)))
    if len(near) < FEWEST_TRIANGLES // 2:
        near = np.arange(len(points))
    sample = near[:: max(len(near) // SAMPLES, 1)]
    around = np.zeros(len(points), dtype=np.bool_)
    around[near] = True
    areas = face.areas_mm2[around[face.mesh.triangles].all(axis=1)]
    edge = float(np.sqrt(2.0 * (areas if len(areas) else face.areas_mm2).mean()))
    long_edge = float(np.quantile(_edge_lengths(face.mesh), 0.9))
    reach = max(REACH_EDGES * edge, REACH_LONG_EDGES * long_edge)
    trial = fit_around(face, points[sample], face.vertex_normals[sample], reach)
    usable = trial.points > 0
    noise = float(np.median(trial.scatter_mm[usable])) if usable.any() else 0.0
    if noise > NOISIEST_MM:
        worst = int(np.where(usable, trial.scatter_mm, 0.0).argmax())
        raise fault(
            "surface-too-noisy",
            expected=f"points that scatter by at most {NOISIEST_MM:.2f} mm about a smooth surface",
            found=f"{noise:.3f} mm (median over {len(sample)} places)",
            do="Smooth or re-mesh the scan, or export the part face from CAD.",
            at_mm=points[sample[worst]],
        )
    if noise > CALM_MM:
        reach = _widened(face, sample, edge, noise, depth_mm, LARGEST_REACH_SHARE * min(size_mm))
    return fit_around(face, points, face.vertex_normals, reach), reach, noise


def _widened(
    face: Surface,
    sample: Ints,
    edge_mm: float,
    noise_mm: float,
    depth_mm: float,
    most_mm: float,
) -> float:
    """Returns the reach at which noise no longer matters, or the largest one at which fits still follow the shape.

    Where widening changes the curvature by more than the noise explains, the shape itself is being blurred.
    """
    points = face.mesh.vertices_mm[sample]
    reach_mm = NOISY_REACH_EDGES * edge_mm
    trial = fit_around(face, points, face.vertex_normals[sample], reach_mm)
    while True:
        error = SCATTER_TO_CURVATURE * noise_mm * edge_mm / (float(np.sqrt(np.pi)) * reach_mm**3)
        wider = WIDENING * reach_mm
        if error * depth_mm <= CURVATURE_SHARE or wider > most_mm:
            return reach_mm
        fit = fit_around(face, points, face.vertex_normals[sample], wider)
        usable = (fit.points > 0) & (trial.points > 0)
        change = np.abs(fit.curvature[usable, 0] - trial.curvature[usable, 0])
        if not usable.any() or float(np.quantile(change, 0.9)) > BLUR * error:
            return reach_mm
        reach_mm, trial = wider, fit


def _axes(face: Surface, placed: Places, reach_mm: float, settings: FreeformSettings) -> tuple[Floats, Floats]:
    """Returns the normal out of the metal at the anchor and the direction of sheet y, both (3,)."""
    normal = fit_around(face, placed.xyz_mm, smooth_normals(face, placed), reach_mm).normals[0]
    up = unit(settings.up)
    along = float(up @ normal)
    if not float(np.linalg.norm(up)) > 0.5 or abs(along) > STEEPEST_UP:
        raise fault(
            "up-along-normal",
            expected="a direction up that lies along the face at the anchor",
            found=f"up {np.degrees(np.arccos(min(abs(along), 1.0))):.1f} degrees from the normal "
            f"({normal[0]:.3f}, {normal[1]:.3f}, {normal[2]:.3f})",
            do="Give another up: its part along the face becomes sheet y.",
            at_mm=placed.xyz_mm[0],
        )
    return normal, unit(up - along * normal)
