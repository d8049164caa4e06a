"""From a mesh to a free-form carrier: guide, offset, laying, spline, and the tests that may refuse it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import GeometryError
from morph.core.progress import SILENT, Progress
from morph.geometry.adjacency import border_loops
from morph.geometry.local_fit import fit_around
from morph.geometry.mesh import Mesh
from morph.geometry.repair import loop_length_mm
from morph.geometry.surface import Places, Surface, make_signed, same_places, smooth_normals
from morph.settings.job import FreeformSettings, Least, SeenFrom, TrueAt
from morph.surface.freeform import FreeformCarrier
from morph.surface.freeform_check import Laid, LayReport, focal_fault, require_sound
from morph.surface.freeform_error import fault, others_text, sheet_text
from morph.surface.grid_spline import spline_through
from morph.surface.grow import LEVELS, LeavesSurface, lay_sheet
from morph.surface.guide import Guide, make_guide
from morph.surface.limits import require_positive
from morph.surface.offset import OffsetSurface, offset_surface
from morph.surface.relax import Heading, relax
from morph.surface.sheet_grid import SheetGrid, make_grid

REACHES = (1.3, 2.0, 3.5, 8.0)
"""How far from the anchor the mesh is kept, in half diagonals of the sheet, until the sheet fits."""
FINE_LEVELS = (0.12, 0.2, 0.28, 0.36, 0.44, 0.52, 0.6, 0.68, 0.76, 0.84, 0.92, 1.0)
"""Levels of the second try, when the usual ones ended in folds."""
WORST_POWER = 8.0
"""Power of the step that makes the worst length error least."""
WORST_ROUNDS, WORST_SETTLED = 60, 1e-4
FINE_ROUNDS = 20


@dataclass(frozen=True, slots=True)
class LaidSheet:
    """A sheet that was laid and passed: its carrier, and what was found on the way."""

    carrier: FreeformCarrier
    report: LayReport


def make_freeform(
    settings: FreeformSettings,
    mesh: Mesh,
    size_mm: tuple[float, float],
    seen_from: SeenFrom,
    depth_mm: float,
    progress: Progress = SILENT,
) -> LaidSheet:
    """Returns a sheet laid on a mesh.

    Args:
        settings: the [carrier] table.
        mesh: the part face in mm, with or without the rest of the body.
        size_mm: width and height of the sheet.
        seen_from: from which side the drawing reads.
        depth_mm: depth of the centrelines.
        progress: told how far the laying is.

    Raises:
        SettingError: `carrier-not-positive`.
        GeometryError: what make_guide raises; `sheet-larger-than-surface`, `surface-hole-under-sheet`,
            `sheet-not-laid`, and what require_sound raises.
    """
    require_positive(1.0, size_mm, depth_mm)
    grid = make_grid(size_mm)
    for share in REACHES:
        guide = make_guide(mesh, settings, size_mm, depth_mm, share)
        heading = Heading(guide.x if seen_from is SeenFrom.PART else -guide.x, guide.y)
        deep = offset_surface(guide, depth_mm)
        try:
            return _laid_soundly(guide, deep, grid, heading, settings, depth_mm, progress)
        except LeavesSurface as left:
            if guide.complete or share == REACHES[-1]:
                raise _leaving_fault(guide, deep, left, size_mm, depth_mm) from None
    raise AssertionError("the last reach returns or raises")


def _laid_soundly(
    guide: Guide,
    deep: OffsetSurface,
    grid: SheetGrid,
    heading: Heading,
    settings: FreeformSettings,
    depth_mm: float,
    progress: Progress,
) -> LaidSheet:
    """Returns the sheet; one that folds is tried in more levels, one that is off the surface on a finer grid."""
    try:
        laid = _lay(guide, deep, grid, heading, settings, depth_mm, LEVELS, progress)
        return LaidSheet(laid.carrier, require_sound(guide, deep, laid))
    except GeometryError as error:
        if error.code not in {"sheet-folds", "sheet-off-surface"}:
            raise
        first = error
    try:
        if first.code == "sheet-folds":
            laid = _lay(guide, deep, grid, heading, settings, depth_mm, FINE_LEVELS, progress)
        else:
            laid = _lay_finer(guide, deep, laid, heading, settings)
        return LaidSheet(laid.carrier, require_sound(guide, deep, laid))
    except (GeometryError, LeavesSurface):
        raise first from None


def _lay(
    guide: Guide,
    deep: OffsetSurface,
    grid: SheetGrid,
    heading: Heading,
    settings: FreeformSettings,
    depth_mm: float,
    levels: tuple[float, ...],
    progress: Progress,
) -> Laid:
    """Returns the sheet at rest, every node exactly at depth below the fitted face."""
    on = _lies_on(guide, deep, settings)
    centre = same_places(guide.face, on, guide.anchor)
    places = lay_sheet(on, grid, centre, heading, levels, progress)
    if settings.least is Least.WORST:
        places = relax(on, grid, places, heading, power=WORST_POWER, rounds=WORST_ROUNDS, settled=WORST_SETTLED)
    return _at_depth(guide, on, grid, places, heading, depth_mm)


def _lies_on(guide: Guide, deep: OffsetSurface, settings: FreeformSettings) -> Surface:
    """Returns the surface on which the sheet keeps its lengths."""
    return deep.surface if settings.true_at is TrueAt.DEPTH else offset_surface(guide, 0.0).surface


def _lay_finer(guide: Guide, deep: OffsetSurface, coarse: Laid, heading: Heading, settings: FreeformSettings) -> Laid:
    """Returns a sheet that was laid once, relaxed on a finer grid."""
    carrier, on = coarse.carrier, _lies_on(guide, deep, settings)
    fine = make_grid(carrier.size_mm, fine=True)
    lies_at = carrier.depth_mm if settings.true_at is TrueAt.DEPTH else 0.0
    start = carrier.point_mm(fine.flat_mm() - fine.flat_mm()[0], lies_at)
    _, places = make_signed(on).nearest(start)
    centre = same_places(guide.face, on, guide.anchor)
    triangle, xyz = places.triangle.copy(), places.xyz_mm.copy()
    triangle[fine.centre], xyz[fine.centre] = centre.triangle[0], centre.xyz_mm[0]
    power = WORST_POWER if settings.least is Least.WORST else 2.0
    places = relax(on, fine, Places(triangle, xyz), heading, power=power, rounds=FINE_ROUNDS, settled=WORST_SETTLED)
    return _at_depth(guide, on, fine, places, heading, carrier.depth_mm)


def _at_depth(guide: Guide, on: Surface, grid: SheetGrid, places: Places, heading: Heading, depth_mm: float) -> Laid:
    """Returns the sheet with every node carried back to the face and put exactly at depth below the fit there."""
    foot = same_places(on, guide.face, places)
    fit = fit_around(guide.face, foot.xyz_mm, smooth_normals(guide.face, foot), guide.reach_mm)
    points = fit.xyz_mm - depth_mm * fit.normals
    x, y = grid.x_mm() - grid.x_mm()[0], grid.y_mm() - grid.y_mm()[0]
    carrier = FreeformCarrier(
        spline=spline_through(x, y, points.reshape(grid.nx, grid.ny, 3)),
        face=guide.whole,
        size_mm=(float(x[-1]), float(y[-1])),
        depth_mm=depth_mm,
        turn=1.0 if float(np.cross(heading.x, heading.y) @ guide.normal) > 0.0 else -1.0,
        nodes_mm=grid.flat_mm() - grid.flat_mm()[0],
        first_filling=guide.first_filling,
    )
    return Laid(carrier, grid, foot, fit)


def _leaving_fault(
    guide: Guide, deep: OffsetSurface, left: LeavesSurface, size_mm: tuple[float, float], depth_mm: float
) -> GeometryError:
    """Returns why the sheet found no surface: a focus, a hole, or the end of the face."""
    focus = focal_fault(guide, deep, depth_mm)
    if focus is not None:
        return focus
    worst = int(left.left_mm.argmax())
    sheet = left.sheet_mm[worst] + 0.5 * np.asarray(size_mm)
    if left.lost:
        return fault(
            "sheet-not-laid",
            expected="a surface on which straight walks end",
            found=f"one that runs in circles at {sheet_text(sheet)}",
            do="Re-mesh the part face: its triangles there are too thin or folded.",
            at_mm=left.xyz_mm[worst],
        )
    loop, longest = _border_at(guide, left.xyz_mm[worst] if depth_mm == 0.0 else _on_face(guide, deep, left, worst))
    if not longest:
        return fault(
            "surface-hole-under-sheet",
            expected="a face without large holes under the sheet",
            found=f"a hole with a rim of {loop:.2f} mm at {sheet_text(sheet)}" + others_text(len(left.left_mm)),
            do="Close the hole in the file, move the anchor, or make the sheet smaller.",
            at_mm=left.xyz_mm[worst],
        )
    return fault(
        "sheet-larger-than-surface",
        expected=f"a face that holds the whole sheet of {size_mm[0]:.2f} x {size_mm[1]:.2f} mm at its depth",
        found=f"it ends {left.left_mm[worst]:.2f} mm before {sheet_text(sheet)}" + others_text(len(left.left_mm)),
        do="Make the sheet smaller, move anchor_mm, turn it with up, or give a file with more of the part face.",
        at_mm=left.xyz_mm[worst],
    )


def _on_face(guide: Guide, deep: OffsetSurface, left: LeavesSurface, worst: int) -> Floats:
    """Returns the point (3,) of the face above the place of the offset where a walk ended."""
    _, places = make_signed(deep.surface).nearest(left.xyz_mm[worst][None])
    return np.asarray(same_places(deep.surface, guide.face, places).xyz_mm[0], dtype=np.float64)


def _border_at(guide: Guide, xyz_mm: Floats) -> tuple[float, bool]:
    """Returns the length of the border nearest to a point of the face, and whether it is the longest one."""
    mesh = guide.face.mesh
    loops = border_loops(mesh.triangles, guide.face.adjacency)
    lengths = [loop_length_mm(mesh, loop) for loop in loops]
    gaps = [float(np.linalg.norm(mesh.vertices_mm[loop] - xyz_mm, axis=1).min()) for loop in loops]
    nearest = int(np.argmin(gaps))
    return lengths[nearest], nearest == int(np.argmax(lengths))
