"""Openings of an insert: closed rims between channel wall and outer skin, found on the mesh itself."""

from __future__ import annotations

import math

import numpy as np

from morph.body.blank import Blank
from morph.core.arrays import Floats, Ints
from morph.geometry.mesh import Mesh
from morph.solid.result import Opening


def find_openings(mesh: Mesh, channel_triangle: Ints, blank: Blank) -> tuple[Opening, ...]:
    """Returns one Opening per closed rim between channel and skin triangles, sorted by place (x, y, z).

    Args:
        mesh: the insert, closed.
        channel_triangle: (m,) 1 for channel wall, 0 for skin.
        blank: its faces name the place; the rim lies on them with their stock.
    """
    openings = [_opening(mesh.vertices_mm[loop], blank) for loop in rim_loops(mesh, channel_triangle)]
    return tuple(sorted(openings, key=lambda opening: tuple(opening.centre_mm.tolist())))


def rim_loops(mesh: Mesh, channel_triangle: Ints) -> list[list[int]]:
    """Returns the vertex loops of all rims, each starting at its lowest vertex, channel wall on its left.

    At a vertex where several rims touch, a rim goes on along the fan of channel triangles it came from, so that
    touching rims stay apart.
    """
    channel = channel_triangle == 1
    n = len(mesh.vertices_mm)
    triangles = mesh.triangles
    start = np.concatenate([triangles[:, 0], triangles[:, 1], triangles[:, 2]])
    end = np.concatenate([triangles[:, 1], triangles[:, 2], triangles[:, 0]])
    owner = np.tile(np.arange(len(triangles)), 3)
    near = _near_rim(mesh, channel)
    chosen = near[owner]
    start, end, owner = start[chosen], end[chosen], owner[chosen]
    triangle_of = dict(zip((start * n + end).tolist(), owner.tolist(), strict=True))
    # an edge whose other triangle is not listed has an end off the rim
    behind = {key: triangle_of.get((key % n) * n + key // n, row) for key, row in triangle_of.items()}
    rim = sorted(key for key, row in triangle_of.items() if channel[row] and not channel[behind[key]])
    waiting = dict.fromkeys(rim)
    loops = []
    while waiting:
        first = next(iter(waiting))
        loop, key = [], first
        while key in waiting:
            del waiting[key]
            loop.append(key // n)
            key = _next_on_rim(key, n, triangle_of, triangles, channel)
        loops.append(loop)
    return loops


def _near_rim(mesh: Mesh, channel: np.ndarray) -> np.ndarray:
    """Returns (m,) true for the triangles that touch a vertex of both kinds of triangle."""
    of_channel, of_skin = np.zeros(len(mesh.vertices_mm), np.bool_), np.zeros(len(mesh.vertices_mm), np.bool_)
    of_channel[mesh.triangles[channel]] = True
    of_skin[mesh.triangles[~channel]] = True
    both = of_channel & of_skin
    return np.asarray(both[mesh.triangles].any(axis=1))


def _next_on_rim(key: int, n: int, triangle_of: dict[int, int], triangles: Ints, channel: np.ndarray) -> int:
    """Returns the rim edge that follows `key`, turning about its end through the channel triangles."""
    pivot = key % n
    row = triangle_of[key]
    while True:
        corners = triangles[row].tolist()
        after = corners[(corners.index(pivot) + 1) % 3]
        behind = triangle_of[after * n + pivot]
        if not channel[behind]:
            return int(pivot * n + after)
        row = behind


def _opening(loop_mm: Floats, blank: Blank) -> Opening:
    """Returns the opening of a rim (k, 3): vector area and area centroid from the fan about its mean point."""
    middle = loop_mm.mean(axis=0)
    one, two = loop_mm - middle, np.roll(loop_mm, -1, axis=0) - middle
    slices = 0.5 * np.cross(one, two)
    total = slices.sum(axis=0)
    area = float(np.sqrt((total**2).sum()))
    centre = middle
    if area > 0.0:
        share = (slices * (total / area)).sum(axis=1) / area
        centre = middle + (share[:, None] * (one + two) / 3.0).sum(axis=0)
    return Opening(loop_mm, centre, 2.0 * math.sqrt(area / math.pi), _face_of(loop_mm, blank))


def _face_of(loop_mm: Floats, blank: Blank) -> str:
    """Returns the name of the face whose printed surface lies nearest to the rim on average."""
    away = [float(np.abs(face.distance_mm(loop_mm) + face.stock_mm).mean()) for face in blank.faces]
    return blank.faces[int(np.argmin(away))].name
