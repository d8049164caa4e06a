"""The metal between two channels on the written mesh, straight across at a given pair of places.

Both channels are cut square to their centreline; the smallest distance between the two outlines is the metal
there. It follows roofs, fillets and whatever else was written, and it cannot slide along the channels
into the crotch of a junction as the smallest gap between two patches of surface does.
"""

from __future__ import annotations

import numpy as np

from morph.check.channel_wall import ChannelWall
from morph.core.arrays import Floats
from morph.geometry.gap import Gap

FACING = 0.7
"""Of an outline the part within 45 degrees of the other channel is looked at (cosine)."""

PIECES = 4
"""Each straight piece of an outline is measured at its ends and this many places between."""


def measure_across(wall: ChannelWall, places_mm: Floats, tangents: Floats, middle_mm: Floats) -> Gap | None:
    """Returns the metal across between two channels, None when the written mesh has no wall there.

    Args:
        wall: the channel wall as written.
        places_mm: (2, 3) on either centreline.
        tangents: (2, 3) along them.
        middle_mm: (3,) in the metal between; an outline that passes it leaves no metal.
    """
    toward = places_mm[1] - places_mm[0]
    distance = float(np.linalg.norm(toward))
    if distance == 0.0:
        return None
    toward = toward / distance
    outlines = []
    for place, tangent, sign in zip(places_mm, tangents, (1.0, -1.0), strict=True):
        pieces = _outline(wall, place, tangent)
        offset = pieces - place
        length = np.linalg.norm(offset, axis=2)
        ahead = sign * (offset @ toward)
        facing = ((ahead >= FACING * length) & (length < distance)).any(axis=1)
        pieces = pieces[facing]
        beyond = sign * ((pieces - middle_mm) @ toward) > 0.0
        if (beyond[:, 0] != beyond[:, 1]).any():
            return Gap(0.0, _row(middle_mm), _row(middle_mm))
        outlines.append(pieces[~beyond[:, 0]])
    return _nearest(*outlines) if all(map(len, outlines)) else None


def _row(point: Floats) -> tuple[float, float, float]:
    x, y, z = point
    return (float(x), float(y), float(z))


def _outline(wall: ChannelWall, place: Floats, tangent: Floats) -> Floats:
    """Returns the straight pieces (k, 2, 3) in which the plane through `place` square to `tangent` cuts the wall."""
    vertices, triangles = wall.mesh.vertices_mm, wall.mesh.triangles
    # A vertex on the plane counts as above it, so that every cut triangle is cut through two edges.
    height = (vertices - place) @ tangent
    above = height >= 0.0
    n_above = above[triangles].sum(axis=1)
    cut = triangles[(n_above == 1) | (n_above == 2)]
    if not len(cut):
        return np.empty((0, 2, 3))
    up = above[cut]
    alone = np.where(up.sum(axis=1) == 1, up.argmax(axis=1), (~up).argmax(axis=1))
    rows = np.arange(len(cut))
    apex = cut[rows, alone]
    ends = []
    for step in (1, 2):
        other = cut[rows, (alone + step) % 3]
        share = height[apex] / (height[apex] - height[other])
        ends.append(vertices[apex] + share[:, None] * (vertices[other] - vertices[apex]))
    return np.stack(ends, axis=1)


def _nearest(one: Floats, two: Floats) -> Gap:
    """Returns the smallest distance between two sets of straight pieces (k, 2, 3) and (m, 2, 3)."""
    found = []
    for here, there, swap in ((one, two, False), (two, one, True)):
        share = np.linspace(0.0, 1.0, PIECES + 2)[:, None]
        points = (here[:, None, 0] + share * (here[:, None, 1] - here[:, None, 0])).reshape(-1, 3)
        along = there[:, 1] - there[:, 0]
        size = np.einsum("ij,ij->i", along, along)
        at = np.einsum("pij,ij->pi", points[:, None] - there[None, :, 0], along) / np.where(size > 0.0, size, 1.0)
        nearest = there[None, :, 0] + np.clip(at, 0.0, 1.0)[:, :, None] * along
        distance = np.linalg.norm(points[:, None] - nearest, axis=2)
        p, k = np.unravel_index(int(distance.argmin()), distance.shape)
        pair = (points[p], nearest[p, k])
        found.append(Gap(float(distance[p, k]), _row(pair[swap]), _row(pair[not swap])))
    return min(found, key=lambda gap: gap.distance_mm)
