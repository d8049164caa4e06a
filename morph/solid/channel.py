"""The channels as one closed solid: swept, extracted, simplified, tested for crossings, trimmed.

Where a channel runs alone its wall is swept ring by ring (stretch.py), elsewhere it is extracted from the field, and
both are joined (stitch.py); the field makes all of it where that does not work out.
The extracted surface gets its creases (crease.py) and is simplified once by edge collapses that move it by at
most SIMPLIFY_MM. Where that makes triangles pass through each other it is left alone; if it still does, or pinches
a neck, the tolerance is lowered; as a last resort the creases are given up and vertices of crossing triangles
return to the middle of their cells.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.blank import Blank
from morph.body.plan import ChannelPlan
from morph.core.arrays import Bools, Floats, Ints
from morph.core.errors import GeometryError
from morph.core.progress import SILENT, Progress
from morph.core.tolerance import SIMPLIFY_MM
from morph.geometry.crossings import Crossings, measure_crossings, measure_crossings_of
from morph.geometry.mesh import Mesh
from morph.solid.blank import blank_body
from morph.solid.body import arrays_of, body_of, require_valid
from morph.solid.crease import sharpen
from morph.solid.extract import any_corner, extract_surface
from morph.solid.field import SampledField, list_pieces, sample_field
from morph.solid.result import ChannelSolid
from morph.solid.simplify import simplify
from morph.solid.stitch import stitch
from morph.solid.stretch import find_stretches
from morph.solid.sweep import Sweep, make_sweep
from morph.solid.tidy import is_closed, make_file_mesh, require_closed, round_to_file, tidy_mesh

WHAT = "the channel solid"

MOST_TAKE_BACKS = 4

MOST_FITS = 3
"""Times the field's part is joined to the rings, each time without the stretches that did not fit."""

MOST_ROUNDS = 4
"""Times the surface is simplified anew, each time leaving more of it alone."""

TOLERANCES_MM = (SIMPLIFY_MM, 0.25 * SIMPLIFY_MM, 0.0)


def make_channel_solid(plan: ChannelPlan, blank: Blank, h_mm: float, progress: Progress = SILENT) -> ChannelSolid:
    """Returns the channels of `plan` swept past their exits, and trimmed at the finished faces of `blank`.

    Args:
        plan: all branches and leads with their bores.
        blank: the finished body; its stock plays no part here.
        h_mm: field resolution, from `choose_h_mm`.
        progress: told between slabs of work; may raise Cancelled.

    Raises:
        GeometryError: ``solid-not-closed``, ``solid-self-crosses`` or ``solid-empty``.
    """
    sweep = make_sweep(plan)
    made = _stitched_wall(plan, sweep, h_mm, progress) or _field_wall(sweep, h_mm, progress)
    return ChannelSolid(
        swept=made.mesh,
        trimmed=_trimmed(made.mesh, blank, progress),
        h_mm=h_mm,
        crossings=made.found.pairs,
        triangles_before=made.triangles_before,
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Wall:
    """The simplified wall, its crossings, and how many triangles it had before."""

    mesh: Mesh
    found: Crossings
    triangles_before: int


def _stitched_wall(plan: ChannelPlan, sweep: Sweep, h_mm: float, progress: Progress) -> _Wall | None:
    """Returns the wall made of rings where a channel runs alone, and from the field elsewhere.

    Stretches whose rings do not fit the rim of the field's part are left to the field; None where none is left, or
    where the result is not sound.
    """
    lists = list_pieces(sweep, h_mm, progress)
    stretches = find_stretches(plan, sweep, lists, h_mm, progress)
    for _ in range(MOST_FITS):
        if not len(stretches.sides):
            return None
        field = sample_field(sweep, h_mm, progress, lists, stretches.end, stretches.field_planes(h_mm))
        surface = extract_surface(field, progress)
        closed = stitch(*sharpen(field, surface, progress), surface.end, stretches)
        if not isinstance(closed, set):
            mesh, found = _sound_mesh(*closed, progress)
            return None if mesh is None else _Wall(mesh, found, len(closed[1]))
        stretches = stretches.without(closed)
        lists = list_pieces(sweep, h_mm, progress)
    return None


def _field_wall(sweep: Sweep, h_mm: float, progress: Progress) -> _Wall:
    """Returns the wall as the field has it everywhere, its creases given up where nothing else helps."""
    field = sample_field(sweep, h_mm, progress)
    surface = extract_surface(field, progress)
    vertices, triangles = sharpen(field, surface, progress)
    mesh, found = _sound_mesh(vertices, triangles, _none(vertices), progress)
    if mesh is None:
        vertices, triangles = round_to_file(surface.vertices), surface.triangles
        vertices = _untangled(field, vertices, triangles, progress)
        mesh, found = _sound_mesh(vertices, triangles, _none(vertices), progress)
    if mesh is None:
        mesh, found = _simplified(vertices, triangles, _none(vertices), 0.0, progress)
        require_closed(mesh, WHAT)
        require_uncrossed(mesh, found)
    return _Wall(mesh, found, len(triangles))


def _none(vertices: Floats) -> Bools:
    return np.zeros(len(vertices), np.bool_)


def require_uncrossed(mesh: Mesh, found: Crossings) -> None:
    """Raises ``solid-self-crosses`` with the place of the first crossing when any was found."""
    if not found.pairs:
        return
    x, y, z = mesh.vertices_mm[mesh.triangles[found.crossed]][0].mean(axis=0)
    raise GeometryError(
        "solid-self-crosses",
        expected="a channel wall that nowhere passes through itself",
        found=f"{found.pairs} crossing pairs of triangles",
        where=f"the channel solid, first at ({x:.2f}, {y:.2f}, {z:.2f}) mm",
        do="Set another [quality] h_mm (some hundredths of a mm away); if it stays, report the job.",
    )


def _sound_mesh(vertices: Floats, triangles: Ints, keep: Bools, progress: Progress) -> tuple[Mesh | None, Crossings]:
    """Returns the surface simplified with the largest tolerance that leaves it sound, None if none does.

    Vertices marked in `keep (n,)` stay.
    """
    euler = len(vertices) - len(triangles) // 2
    for tolerance in TOLERANCES_MM:
        swept, found = _simplified(vertices, triangles, keep, tolerance, progress)
        if _is_sound(swept, found, euler):
            return swept, found
    return None, found


def _is_sound(mesh: Mesh, found: Crossings, euler: int) -> bool:
    """Returns whether a simplified mesh is closed, crosses nowhere and kept its Euler number (bodies and loops)."""
    return found.pairs == 0 and is_closed(mesh) and len(mesh.vertices_mm) - len(mesh.triangles) // 2 == euler


def _simplified(
    vertices: Floats, triangles: Ints, keep: Bools, tolerance_mm: float, progress: Progress
) -> tuple[Mesh, Crossings]:
    """Returns the surface moved by at most `tolerance_mm` with fewer triangles, and its crossings.

    Where triangles cross afterwards the surface is left as it was there, and the rest simplified anew. Triangles that
    come out as they were, and crossed none, are not tested again.
    """
    keep = keep.copy()
    before, crossed = np.full(triangles.shape, -1), np.zeros(len(triangles), np.bool_)
    for turn in range(MOST_ROUNDS):
        now = simplify(vertices, triangles, keep, tolerance_mm, progress)
        rows = np.flatnonzero(now[:, 0] >= 0)
        left = now[rows]
        if turn == 0:
            found = measure_crossings(Mesh(vertices, left), progress)
        else:
            anew = crossed[rows] | (left != before[rows]).any(axis=1)
            found = measure_crossings_of(Mesh(vertices, left), anew, progress)
        if not found.pairs or tolerance_mm <= 0.0:
            break
        before, crossed = now, np.zeros(len(triangles), np.bool_)
        crossed[rows[found.crossed]] = True
        keep |= _inside_boxes(vertices, vertices[left[found.crossed]])
    mesh, _ = tidy_mesh(vertices, left, np.zeros(len(left), np.int64))
    if len(mesh.triangles) == len(left) and not found.pairs:
        return mesh, Crossings(0, np.zeros(len(left), np.bool_))
    return mesh, measure_crossings(mesh, progress)


def _inside_boxes(points: Floats, corners: Floats) -> Bools:
    """Returns which points (n, 3) lie in the box of one of the triangles (k, 3, 3), grown by its own longest side."""
    low, high = corners.min(axis=1), corners.max(axis=1)
    margin = (high - low).max(axis=1, keepdims=True)
    low, high = low - margin, high + margin
    inside = np.zeros(len(points), np.bool_)
    for one, two in zip(low, high, strict=True):
        near = np.flatnonzero((points[:, 0] >= one[0]) & (points[:, 0] <= two[0]))
        inside[near[((points[near] >= one) & (points[near] <= two)).all(axis=1)]] = True
    return inside


def _untangled(field: SampledField, vertices: Floats, triangles: Ints, progress: Progress) -> Floats:
    """Returns the vertices (n, 3) with those of crossing triangles moved back to the middle of their cells.

    Each round also takes the next ring of triangles, at most MOST_TAKE_BACKS rounds.
    """
    middle: Floats | None = None
    for _ in range(MOST_TAKE_BACKS):
        crossed: Bools = measure_crossings(Mesh(vertices, triangles), progress).crossed
        if not crossed.any():
            break
        if middle is None:
            middle = round_to_file(extract_surface(field, progress, steps=0).vertices)
        bad = np.zeros(len(vertices), np.bool_)
        bad[triangles[crossed]] = True
        bad[triangles[any_corner(bad, triangles)]] = True
        vertices = np.where(bad[:, None], middle, vertices)
    return vertices


def _trimmed(swept: Mesh, blank: Blank, progress: Progress) -> Mesh:
    """Returns the part of the swept channels inside the finished blank.

    The library gets the mesh anew, the same as for the insert, so that trimmed channels and insert fit without a gap.
    """
    progress.step("solid: trim", 0, 1)
    what = "the channels inside the blank"
    body = body_of(swept, WHAT)[0] ^ blank_body(blank, printed=False)
    require_valid(body, what)
    vertices, triangles, _ = arrays_of(body)
    mesh, _ = make_file_mesh(vertices, triangles, np.zeros(len(triangles), np.int64), what)
    progress.step("solid: trim", 1, 1)
    return mesh
