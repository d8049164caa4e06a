"""Smooth paths through corner points: straight legs joined by arcs of one radius, many at a time.

A corner of turn phi is replaced by an arc of radius r that leaves both legs at r tan(phi / 2) from
the corner, so a path is a chain line, arc, line, arc, ... line. Turns above 135 degrees are refused
(the tangent length grows without bound; a U-turn is two corners).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Bools, Floats, Ints, unit_rows

SHARPEST_TURN_RAD = np.radians(135.0)
LEG_SLACK_MM = 1e-9
ON_LINE, ON_ARC = 16, 6
"""Rough points on each line and inside each arc."""


@dataclass(frozen=True, slots=True, eq=False)
class Paths:
    """Paths (n,) over the same number of vertices.

    Args:
        vertices: (n, m, 3) start, corners, end.
        radius: (n,) of every arc of a path.
        turn_rad: (n, m - 2) at each corner. pieces: (n, 2 m - 3) lengths line, arc, ..., line.
        valid: (n,) every line is long enough and no turn too sharp.
    """

    vertices: Floats
    radius: Floats
    turn_rad: Floats
    pieces: Floats
    valid: Bools

    def only(self, keep: Bools | Ints) -> Paths:
        """Returns the paths `keep` (a mask (n,) or numbers)."""
        return Paths(self.vertices[keep], self.radius[keep], self.turn_rad[keep], self.pieces[keep], self.valid[keep])

    def lengths(self) -> Floats:
        """Returns the length (n,) of each path."""
        return np.asarray(self.pieces.sum(axis=1), dtype=np.float64)


def turn_between_rad(a: Floats, b: Floats) -> Floats:
    """Returns the angle between vectors (..., 3) by atan2, exact also for small and straight angles."""
    (x, y, z), (u, v, w) = np.moveaxis(a, -1, 0), np.moveaxis(b, -1, 0)
    across = np.sqrt((y * w - z * v) ** 2 + (z * u - x * w) ** 2 + (x * v - y * u) ** 2)
    return np.asarray(np.arctan2(across, x * u + y * v + z * w), dtype=np.float64)


def make_paths(vertices: Floats, radius: Floats) -> Paths:
    """Returns the paths over `vertices (n, m, 3)` with arcs of `radius (n,)`."""
    legs = np.diff(vertices, axis=1)
    size = np.linalg.norm(legs, axis=2)
    turn = turn_between_rad(legs[:, :-1], legs[:, 1:])
    cut = radius[:, None] * np.tan(0.5 * np.minimum(turn, SHARPEST_TURN_RAD))
    lines = size.copy()
    lines[:, :-1] -= cut
    lines[:, 1:] -= cut
    n, corners = turn.shape
    pieces = np.empty((n, 2 * corners + 1))
    pieces[:, 0::2] = np.maximum(lines, 0.0)
    pieces[:, 1::2] = radius[:, None] * turn
    valid = (lines >= -LEG_SLACK_MM).all(axis=1) & (turn <= SHARPEST_TURN_RAD).all(axis=1)
    return Paths(vertices, radius, turn, pieces, valid)


def sample_paths(paths: Paths, count: int) -> tuple[Floats, Floats]:
    """Returns `count` points per path (n, count, 3), evenly along it, and their arc lengths (n, count)."""
    arc = paths.lengths()[:, None] * np.linspace(0.0, 1.0, count)
    along = unit_rows(np.diff(paths.vertices, axis=1))
    cut = paths.radius[:, None] * np.tan(0.5 * np.minimum(paths.turn_rad, SHARPEST_TURN_RAD))
    begins = np.cumsum(paths.pieces, axis=1) - paths.pieces
    result = np.empty((*arc.shape, 3))
    for piece in range(paths.pieces.shape[1]):
        local = arc - begins[:, piece][:, None]
        corner = (piece + 1) // 2
        if piece % 2 == 0:
            start = paths.vertices[:, corner]
            if corner > 0:
                start = start + cut[:, corner - 1][:, None] * along[:, corner]
            point = start[:, None, :] + local[..., None] * along[:, corner][:, None, :]
        else:
            point = _arc_points(paths, corner, along, cut[:, corner - 1], local)
        result = np.where((local >= -1e-12)[..., None], point, result)
    result[:, 0] = paths.vertices[:, 0]
    result[:, -1] = paths.vertices[:, -1]
    return result, arc


def rough_points(paths: Paths) -> Floats:
    """Returns a few points (n, k, 3) on every line and arc of each path, in order: cheap, not even in spacing."""
    along = unit_rows(np.diff(paths.vertices, axis=1))
    cut = paths.radius[:, None] * np.tan(0.5 * np.minimum(paths.turn_rad, SHARPEST_TURN_RAD))
    parts = []
    for piece in range(paths.pieces.shape[1]):
        corner = (piece + 1) // 2
        share = np.linspace(0.0, 1.0, ON_ARC + 2)[1:-1] if piece % 2 else np.linspace(0.0, 1.0, ON_LINE)
        local = paths.pieces[:, piece][:, None] * share
        if piece % 2:
            parts.append(_arc_points(paths, corner, along, cut[:, corner - 1], local))
            continue
        start = paths.vertices[:, corner]
        if corner > 0:
            start = start + cut[:, corner - 1][:, None] * along[:, corner]
        parts.append(start[:, None, :] + local[..., None] * along[:, corner][:, None, :])
    return np.concatenate(parts, axis=1)


def _arc_points(paths: Paths, corner: int, along: Floats, cut: Floats, local: Floats) -> Floats:
    into, out = along[:, corner - 1][:, None, :], along[:, corner][:, None, :]
    turn = paths.turn_rad[:, corner - 1][:, None, None]
    radius = paths.radius[:, None, None]
    sine = np.sin(turn)
    inward = np.where(sine > 1e-9, (out - np.cos(turn) * into) / np.where(sine > 1e-9, sine, 1.0), 0.0)
    angle = local[..., None] / radius
    start = paths.vertices[:, corner][:, None, :] - cut[:, None, None] * into
    return np.asarray(start + radius * (np.sin(angle) * into + (1.0 - np.cos(angle)) * inward), dtype=np.float64)


def start_corner(start: Floats, heading: Floats, target: Floats, radius: Floats, extra: Floats) -> Floats:
    """Returns the first corner (n, 3) on the ray from `start (3,)` along unit `heading (3,)` toward `target (n, 3)`.

    The corner lies `extra (n,)` plus the arc's tangent length from the start; the turn depends on where
    the corner is, so the length is found by repeated substitution (it settles to 1e-6 in a few rounds
    where the target is not closer than the arc allows; elsewhere the path turns out invalid).
    """
    reach = extra.copy()
    for _ in range(12):
        corner = start + reach[:, None] * heading
        turn = turn_between_rad(np.broadcast_to(heading, target.shape), target - corner)
        reach = extra + radius * np.tan(0.5 * np.minimum(turn, SHARPEST_TURN_RAD)) + 1e-4
    return np.asarray(start + reach[:, None] * heading, dtype=np.float64)


def least_bend_radius_mm(points_mm: Floats) -> Floats:
    """Returns the least radius (n,) of circles through consecutive samples of polylines (n, k, 3); inf if straight."""
    a, b = np.diff(points_mm[:, :-1], axis=1), np.diff(points_mm[:, 1:], axis=1)
    across = np.linalg.norm(points_mm[:, 2:] - points_mm[:, :-2], axis=2)
    area = np.linalg.norm(np.cross(a, b), axis=2)
    product = np.linalg.norm(a, axis=2) * np.linalg.norm(b, axis=2) * across
    radius = np.where(area > 1e-12 * np.maximum(product, 1e-300), product / np.maximum(2.0 * area, 1e-300), np.inf)
    return np.asarray(radius.min(axis=1), dtype=np.float64)
