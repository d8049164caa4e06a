"""How much room a lead of one bore has: exact at any place, and tabulated on a coarse grid for the search.

The spare at a place is the distance to a neighbour less what a channel of that bore must keep from it:
reach (with its roof), wall and band; below 0 the channel does not fit there. Faces, holes and the laid
channels have a spare each. Channels near the port along the way count only once the lead has run on
(neighbour.py: a pair is a wall when the way between them is WALL_WAY times the distance to keep).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.body.blank import AnyFace
from morph.body.face import FaceRole
from morph.body.hole import Hole
from morph.body.lead_check import Surroundings
from morph.body.lead_spare import face_spare_mm, hole_spare_mm
from morph.body.neighbour import WALL_WAY, distance_to_strand_mm, way_from_node_mm
from morph.body.section import reach_mm
from morph.core.arrays import Floats, Ints, unit_rows

MOST_NODES = 120_000
"""The step of the grid is widened until it has no more nodes than this."""

STEP_BORES, LEAST_STEP_MM = 0.45, 1.2
"""Step of the grid in bores, and the finest step."""

OUTSIDE_MM = -1e3
"""Spare read outside the grid."""

NEAREST_SAMPLES = 6
"""Samples of channels looked at around a place."""


@dataclass(frozen=True, slots=True, eq=False)
class LeadField:
    """What a lead of `bore_mm` must keep clear of.

    Args:
        around: blank, limits, laid channels and the port's node.
        bore_mm: of the lead.
        far: scipy's cKDTree over the channel samples that always count, or None. far_at: (n,) their numbers.
        near_at: (m,) samples near the port along the way. near_way_mm: (m,) way of the lead from which each counts.
    """

    around: Surroundings
    bore_mm: float
    far: Any
    far_at: Ints
    near_at: Ints
    near_way_mm: Floats

    def face_spare(self, face: AnyFace, xyz_mm: Floats) -> Floats:
        """Returns the spare (k,) to `face` at points (k, 3)."""
        return face_spare_mm(face, xyz_mm, np.full(len(xyz_mm), self.bore_mm), self.around.limits)

    def hole_spare(self, hole: Hole, xyz_mm: Floats) -> Floats:
        """Returns the spare (k,) to `hole` at points (k, 3)."""
        return hole_spare_mm(hole, xyz_mm, np.full(len(xyz_mm), self.bore_mm), self.around.limits)

    def rows(self, xyz_mm: Floats, open_face: str = "") -> tuple[Floats, tuple[str, ...]]:
        """Returns the spare (rows, k) to each neighbour but `open_face`, with their names; last to the channels."""
        blank = self.around.blank
        faces = [face for face in blank.faces if face.name != open_face]
        table = [self.face_spare(face, xyz_mm) for face in faces]
        table += [self.hole_spare(hole, xyz_mm) for hole in blank.holes]
        names = [f"face:{face.name}" for face in faces] + [f"hole:{hole.id}" for hole in blank.holes]
        return np.array([*table, self.channel_spare(xyz_mm)[0]]), (*names, "branch")

    def spare(self, xyz_mm: Floats, way_mm: Floats) -> Floats:
        """Returns the least spare (k,) at points (k, 3), reached `way_mm (k,)` after the port."""
        least = np.minimum(self.rows(xyz_mm)[0].min(axis=0), self.near_spare(xyz_mm, way_mm))
        return np.asarray(least, dtype=np.float64)

    def inner_spare(self, xyz_mm: Floats, way_mm: Floats) -> Floats:
        """Returns the least spare (k,) as `spare`, port faces aside."""
        blank = self.around.blank
        rows = [self.face_spare(face, xyz_mm) for face in blank.faces if face.role is not FaceRole.PORT]
        rows += [self.hole_spare(hole, xyz_mm) for hole in blank.holes]
        rows += [self.channel_spare(xyz_mm)[0], self.near_spare(xyz_mm, way_mm)]
        return np.asarray(np.min(rows, axis=0), dtype=np.float64)

    def channel_spare(self, xyz_mm: Floats) -> tuple[Floats, Ints]:
        """Returns the spare (k,) to the channels that always count, inf where none is near, and the sample (k,)."""
        n = len(xyz_mm)
        least, which = np.full(n, np.inf), np.zeros(n, dtype=np.int64)
        if self.far is None:
            return least, which
        count = min(NEAREST_SAMPLES, len(self.far_at))
        distance, found = self.far.query(xyz_mm, k=[*range(1, count + 1)], distance_upper_bound=self.reach_mm() + 4.0)
        for column in range(count):
            here = np.flatnonzero(np.isfinite(distance[:, column]))
            at = self.far_at[found[here, column]]
            spare = self._to_samples(xyz_mm[here], at)
            better = spare < least[here]
            least[here[better]], which[here[better]] = spare[better], at[better]
        return least, which

    def near_spare(self, xyz_mm: Floats, way_mm: Floats) -> Floats:
        """Returns the spare (k,) to the channels near the port, as far as they count after `way_mm (k,)`."""
        least = np.full(len(xyz_mm), np.inf)
        network, reach = self.around.network, self.reach_mm()
        if not len(self.near_at):
            return least
        samples = network.xyz_mm[self.near_at]
        within = ((xyz_mm > samples.min(axis=0) - reach) & (xyz_mm < samples.max(axis=0) + reach)).all(axis=1)
        beside = np.flatnonzero(within & (way_mm > self.near_way_mm.min()))
        for at, counts_from in zip(self.near_at, self.near_way_mm, strict=True):
            here = beside[way_mm[beside] > counts_from]
            close = ((xyz_mm[here] - network.xyz_mm[at]) ** 2).sum(axis=1) < reach * reach
            here = here[close]
            if len(here):
                least[here] = np.minimum(least[here], self._to_samples(xyz_mm[here], np.full(len(here), at)))
        return least

    def reach_mm(self) -> float:
        """Returns how far from a channel's centreline one of this bore must keep at most."""
        network = self.around.network
        both = np.array([self.bore_mm, float(network.bore_mm.max(initial=0.0))])
        return float(reach_mm(both, network.section.up, network.section).sum()) + self.around.wall_mm

    def _to_samples(self, xyz_mm: Floats, at: Ints) -> Floats:
        network = self.around.network
        toward = unit_rows(network.xyz_mm[at] - xyz_mm)
        beside = reach_mm(network.bore_mm[at], -toward, network.section)
        needed = self._reach(toward) + beside + self.around.wall_mm
        return distance_to_strand_mm(network, xyz_mm, at) - needed

    def _reach(self, toward: Floats) -> Floats:
        rule = self.around.limits.section
        return reach_mm(np.full(len(toward), self.bore_mm), toward, rule)


def make_lead_field(around: Surroundings, bore_mm: float) -> LeadField:
    """Returns what a lead of `bore_mm` must keep clear of, its port's own channels told apart from the others."""
    from scipy.spatial import cKDTree

    network = around.network
    every = np.arange(len(network.owner))
    way = way_from_node_mm(network, around.node, every)
    counts_from = WALL_WAY * LeadField(around, bore_mm, None, every[:0], every[:0], way[:0]).reach_mm() - way
    near = np.flatnonzero(counts_from > 0.0)
    far = np.flatnonzero(counts_from <= 0.0)
    # Every second near sample will do: pieces of a strand reach from one to the next.
    near = near[::2]
    return LeadField(around, bore_mm, cKDTree(network.xyz_mm[far]) if len(far) else None, far, near, counts_from[near])


@dataclass(frozen=True, slots=True, eq=False)
class RoomGrid:
    """The spare on a regular grid over a box; channels near the port are left out.

    Args:
        field: what is tabulated.
        origin_mm: (3,) first node. step_mm: between nodes.
        base: (i, j, k) least spare to all but port faces. faces: the port faces.
        face_spare, face_distance: of each port face, (i, j, k).
    """

    field: LeadField
    origin_mm: Floats
    step_mm: float
    base: Floats
    faces: tuple[AnyFace, ...]
    face_spare: tuple[Floats, ...]
    face_distance: tuple[Floats, ...]

    def whole(self) -> Floats:
        """Returns the least spare (i, j, k) to everything."""
        least: Floats = np.minimum.reduce([self.base, *self.face_spare])
        return least

    def without(self, number: int) -> Floats:
        """Returns the least spare (i, j, k) to everything but port face `number`."""
        others = [one for k, one in enumerate(self.face_spare) if k != number]
        least: Floats = np.minimum.reduce([self.base, *others])
        return least

    def node_mm(self, index: Ints) -> Floats:
        """Returns the places (k, 3) of nodes by their number (k,) or numbers along the axes (k, 3)."""
        steps = np.stack(np.unravel_index(index, self.base.shape), axis=-1) if index.ndim == 1 else index
        return np.asarray(self.origin_mm + self.step_mm * steps, dtype=np.float64)

    def cell(self, xyz_mm: Floats) -> Ints:
        """Returns the nearest node (k, 3) along the axes, clipped to the grid."""
        steps = np.rint((xyz_mm - self.origin_mm) / self.step_mm).astype(np.int64)
        return np.clip(steps, 0, np.array(self.base.shape) - 1)

    def look_up(self, table: Floats, xyz_mm: Floats) -> Floats:
        """Returns `table (i, j, k)` at points (..., 3) by trilinear interpolation; far below 0 outside the box."""
        from scipy.ndimage import map_coordinates

        place = np.moveaxis((xyz_mm - self.origin_mm) / self.step_mm, -1, 0)
        read = map_coordinates(table, place, order=1, mode="constant", cval=OUTSIDE_MM, prefilter=False)
        return np.asarray(read, dtype=np.float64)


def make_room_grid(field: LeadField, box_mm: Floats) -> RoomGrid:
    """Returns the spare of `field` on a grid over `box_mm (2, 3)`."""
    low, size = box_mm[0], np.maximum(box_mm[1] - box_mm[0], 1.0)
    step = max(STEP_BORES * field.bore_mm, LEAST_STEP_MM, float(size.prod() / MOST_NODES) ** (1.0 / 3.0))
    while np.prod(np.ceil(size / step) + 1.0) > MOST_NODES:
        step *= 1.05
    shape = tuple(int(n) for n in np.maximum(np.ceil(size / step) + 1.0, 2.0))
    nodes = np.stack(np.meshgrid(*(np.arange(n) for n in shape), indexing="ij"), axis=-1).reshape(-1, 3)
    points = low + step * nodes
    port = tuple(face for face in field.around.blank.faces if face.role is FaceRole.PORT)
    other = [field.face_spare(face, points) for face in field.around.blank.faces if face.role is not FaceRole.PORT]
    other += [field.hole_spare(hole, points) for hole in field.around.blank.holes]
    base = np.minimum.reduce([np.full(len(points), 1e3), *other])
    inside = np.flatnonzero(base > -step)
    base[inside] = np.minimum(base[inside], field.channel_spare(points[inside])[0])
    spare = tuple(field.face_spare(face, points).reshape(shape) for face in port)
    distance = tuple(face.distance_mm(points).reshape(shape) for face in port)
    return RoomGrid(field, low, step, base.reshape(shape), port, spare, distance)
