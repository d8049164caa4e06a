"""Ceilings: channel wall that faces down flatter than the roof angle, and the widest piece of it.

A ceiling is flat where its angle from the build plate (0 = level) is below the roof angle. The angle
is taken per triangle corner from the smooth normal there (creases kept), so that the border of a
flat patch runs through triangles and not along their edges: on a level round bore of radius r the
cap below angle a is 2 r sin(a) wide. The unsupported span is the largest circle, seen along the
build direction, that fits inside a flat patch; it decides, the area only informs.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.check.centreline import Centrelines, Place
from morph.check.channel_wall import nearest_samples
from morph.check.machine import upright_frame
from morph.check.rows import judge_length, place
from morph.core.arrays import Floats, Ints
from morph.core.verdict import Outcome, Verdict
from morph.geometry.mesh import Mesh, triangle_normals
from morph.settings.profile import Profile

CREASE_DEG = 30.0
"""Neighbouring triangles that turn by more meet in a crease; their normals are not averaged."""

BORDER_STEP_MM = 0.1
"""Borders of flat patches are sampled at most this far apart."""

CIRCLES = 40
"""This many of the widest places are grown to their largest circle."""

GROW_STEPS = 40


@dataclass(frozen=True, slots=True)
class CeilingFinding:
    """Flat ceiling of a channel wall.

    Args:
        area_mm2: its area. share: of the whole channel wall.
        span_mm: diameter of the largest circle in it, seen along the build direction (0 for no flat ceiling).
        xyz_mm: the middle of that circle, None for no flat ceiling.
    """

    area_mm2: float
    share: float
    span_mm: float
    xyz_mm: Place | None


def ceiling_angles_deg(normals: Floats, direction: Floats) -> Floats:
    """Returns the angle (k,) of wall normals (k, 3) into the channel: 0 level ceiling, 90 upright, 180 floor."""
    return np.asarray(np.degrees(np.arccos(np.clip(-(normals @ direction), -1.0, 1.0))), dtype=np.float64)


def corner_normals(mesh: Mesh, normals: Floats, area_mm2: Floats, chosen: Ints) -> Floats:
    """Returns the smooth unit normals (k, 3, 3) at the corners of triangles `chosen (k,)`.

    At each corner the normals of the chosen triangles around the vertex that turn less than CREASE_DEG
    from the triangle's own are added, weighted by area.
    """
    from scipy.sparse import coo_array

    n, flat = len(chosen), mesh.triangles[chosen].reshape(-1)
    touching = coo_array((np.ones(3 * n, np.int8), (flat, np.repeat(np.arange(n), 3)))).tocsr()
    start, count = touching.indptr[flat], np.diff(touching.indptr)[flat]
    corner = np.repeat(np.arange(3 * n), count)
    within = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
    other = touching.indices[within + np.repeat(start, count)]
    mine, theirs = normals[chosen[corner // 3]], normals[chosen[other]]
    smooth = np.einsum("ij,ij->i", mine, theirs) > np.cos(np.radians(CREASE_DEG))
    weight = np.where(smooth, area_mm2[chosen[other]], 0.0)
    total = np.stack([np.bincount(corner, weight * theirs[:, axis], 3 * n) for axis in range(3)], axis=1)
    length = np.linalg.norm(total, axis=1)
    own = np.repeat(normals[chosen], 3, axis=0)
    total = np.where(length[:, None] > 0.0, total / np.where(length > 0.0, length, 1.0)[:, None], own)
    return np.asarray(total.reshape(n, 3, 3), dtype=np.float64)


def _candidates(angle_deg: Floats, roof_angle_deg: float) -> Ints:
    """Returns the triangles that are flat or may border a flat patch."""
    return np.flatnonzero(angle_deg < roof_angle_deg + CREASE_DEG)


def _level_lines(corner: Floats, over: Floats) -> tuple[Floats, Floats]:
    """Returns both ends (k, 3) of the lines inside triangles where the corner values `over (n, 3)` pass 0.

    Args:
        corner: (n, 3, 3) triangle corners.
        over: (n, 3) angle less roof angle; below 0 is flat.
    """
    flat = over < 0.0
    mixed = np.flatnonzero(flat.any(axis=1) & ~flat.all(axis=1))
    corner, over, flat = corner[mixed], over[mixed], flat[mixed]
    lone_is_flat = flat.sum(axis=1) == 1
    lone = np.argmax(flat == lone_is_flat[:, None], axis=1)
    rows = np.arange(len(mixed))
    ends = []
    for step in (1, 2):
        other = (lone + step) % 3
        a, b = over[rows, lone], over[rows, other]
        t = a / (a - b)
        ends.append(corner[rows, lone] + t[:, None] * (corner[rows, other] - corner[rows, lone]))
    return ends[0], ends[1]


def _rim_edges(mesh: Mesh, chosen: Ints, over: Floats) -> tuple[Floats, Floats]:
    """Returns both ends (k, 3) of triangle edges at which a flat patch stops: creases, rims, steep neighbours.

    An edge of a chosen triangle counts where both its corners are flat there, and it has no chosen
    neighbour across it for which both are flat too.
    """
    tri = mesh.triangles[chosen]
    n_vertices = len(mesh.vertices_mm)
    edge = np.concatenate([tri[:, [0, 1]], tri[:, [1, 2]], tri[:, [2, 0]]])
    flat = np.concatenate([(over[:, [i, (i + 1) % 3]] < 0.0).all(axis=1) for i in range(3)])
    edge = edge[flat]
    key = edge[:, 0] * n_vertices + edge[:, 1]
    twin = edge[:, 1] * n_vertices + edge[:, 0]
    lonely = edge[~np.isin(key, twin)]
    return mesh.vertices_mm[lonely[:, 0]], mesh.vertices_mm[lonely[:, 1]]


def _sampled(start: Floats, end: Floats) -> Floats:
    """Returns points (k, 3) on segments (n, 3) - (n, 3), at most BORDER_STEP_MM apart, ends included."""
    parts = np.maximum(1, np.ceil(np.linalg.norm(end - start, axis=1) / BORDER_STEP_MM).astype(np.int64))
    index = np.repeat(np.arange(len(parts)), parts + 1)
    step = np.arange(len(index)) - np.repeat(np.cumsum(parts + 1) - (parts + 1), parts + 1)
    share = (step / parts[index])[:, None]
    return np.asarray(start[index] * (1.0 - share) + end[index] * share, dtype=np.float64)


def _flat_area(corner: Floats, over: Floats) -> float:
    """Returns the area in mm2 of the flat parts of triangles (n, 3, 3), cut along their level lines."""
    area = 0.5 * np.linalg.norm(np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]), axis=1)
    flat = over < 0.0
    count = flat.sum(axis=1)
    lone = np.argmax(flat == (count == 1)[:, None], axis=1)
    rows = np.arange(len(over))
    a, b, c = over[rows, lone], over[rows, (lone + 1) % 3], over[rows, (lone + 2) % 3]
    mixed = (count == 1) | (count == 2)
    tip = np.where(mixed, a * a / np.where(mixed, (a - b) * (a - c), 1.0), 0.0)
    share = np.choose(count, [np.zeros(len(over)), tip, 1.0 - tip, np.ones(len(over))])
    return float((share * area).sum())


def _largest_circle(places: Floats, border: Floats) -> tuple[float, Floats]:
    """Returns diameter and middle of the largest circle clear of the border, in the plan.

    Args:
        places: (n, 3) points of flat patches, in the upright frame.
        border: (k, 3) points of their borders.

    The nearest border point of a place is asked in space, where the patch it belongs to is nearest;
    its distance is taken in the plan. The widest places are then grown against the border around them.
    """
    from scipy.spatial import cKDTree

    tree = cKDTree(border)
    _, near = tree.query(places)
    radius = np.linalg.norm(places[:, :2] - border[near, :2], axis=1)
    best, middle = -1.0, places[0]
    for index in np.argsort(-radius, kind="stable")[:CIRCLES]:
        around = border[tree.query_ball_point(places[index], 3.0 * radius[index] + 1.0)]
        grown, point = _grow(places[index], around[:, :2])
        if grown > best:
            best, middle = grown, point
    return 2.0 * best, middle


def _grow(start: Floats, border: Floats) -> tuple[float, Floats]:
    """Returns the radius and middle of the circle grown from `start (3,)` by moving away from what it touches."""
    from scipy.spatial import cKDTree

    tree = cKDTree(border)
    point, step = start.copy(), 0.5
    distance, near = tree.query(point[:2])
    best = float(distance)
    for _ in range(GROW_STEPS):
        away = point[:2] - border[int(near)]
        length = float(np.linalg.norm(away))
        if length == 0.0:
            break
        trial = point[:2] + away * (step * best / length)
        reach, other = tree.query(trial)
        if reach > best * (1.0 + 1e-6):
            point[:2], best, near = trial, float(reach), other
        else:
            step *= 0.5
    return best, point


def measure_ceiling(wall: Mesh, direction: Floats, roof_angle_deg: float) -> CeilingFinding:
    """Returns the flat ceiling of a channel wall.

    Args:
        wall: triangles facing into the channel.
        direction: (3,) unit, from the plate into the part.
        roof_angle_deg: flattest ceiling that prints without support, from the build plate.
    """
    normals, area_mm2 = triangle_normals(wall)
    total = max(float(area_mm2.sum()), 1e-12)
    chosen = _candidates(ceiling_angles_deg(normals, direction), roof_angle_deg)
    if len(chosen) == 0:
        return CeilingFinding(0.0, 0.0, 0.0, None)
    smooth = corner_normals(wall, normals, area_mm2, chosen)
    over = ceiling_angles_deg(smooth.reshape(-1, 3), direction).reshape(-1, 3) - roof_angle_deg
    corner = wall.vertices_mm[wall.triangles[chosen]]
    area = _flat_area(corner, over)
    flat = over < 0.0
    if not flat.any():
        return CeilingFinding(area, area / total, 0.0, None)
    frame = upright_frame(direction)
    lines, rims = _level_lines(corner, over), _rim_edges(wall, chosen, over)
    border = np.concatenate([_sampled(*lines), _sampled(*rims)]) @ frame.T
    whole = flat.all(axis=1)
    places = np.concatenate([corner[flat], corner[whole].mean(axis=1)]) @ frame.T
    span, middle = _largest_circle(places, border)
    return CeilingFinding(area, area / total, span, place(middle @ frame))


def check_ceiling(wall: Mesh, profile: Profile, direction: Floats, lines: Centrelines | None = None) -> list[Verdict]:
    """Returns the `ceiling` row (area, informs) and the `span` row (decides).

    Args:
        wall: channel wall as written, facing into the channel.
        profile: roof angle and free span.
        direction: (3,) unit build direction.
        lines: centrelines to name the branch by; None for a mesh without a plan.
    """
    roof, free, band = profile.roof_angle_deg, profile.free_span_mm, profile.bore_band_mm.value
    found = measure_ceiling(wall, direction, roof.value)
    ids: tuple[str, ...] = ()
    sheet = None
    if lines is not None and found.xyz_mm is not None:
        sample = int(nearest_samples(lines, np.array([found.xyz_mm]))[0])
        ids, sheet = (lines.branch_of(sample).id,), lines.sheet_of(sample)
    outcome = judge_length(found.span_mm, free.value, band, "most") if found.xyz_mm else Outcome.PASS
    at = f", in {ids[0]}" if ids else ""
    return [
        Verdict(
            "ceiling",
            Outcome.WATCH if outcome is not Outcome.PASS else Outcome.PASS,
            f"{found.area_mm2:.1f} mm2 of the channel wall ({100.0 * found.share:.1f} %) is ceiling flatter than "
            f"{roof.value:.0f} deg; what decides is its unsupported span.",
            value=found.area_mm2,
            unit="mm2",
            source=roof.source,
            branch_ids=ids,
            sheet_mm=sheet,
            xyz_mm=found.xyz_mm,
        ),
        Verdict(
            "span",
            outcome,
            f"The largest unsupported span is {found.span_mm:.2f} mm{at}; {free.value:.2f} mm print freely after a "
            f"band of {band:.2f} mm.",
            value=found.span_mm,
            unit="mm",
            limit=free.value,
            limit_is="most",
            band=band,
            source=free.source,
            branch_ids=ids,
            sheet_mm=sheet,
            xyz_mm=found.xyz_mm,
            hint="" if outcome is Outcome.PASS else "Lower the bore or turn the build direction.",
        ),
    ]
