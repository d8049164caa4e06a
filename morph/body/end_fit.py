"""Which exits of candidate leads the end of one port fits, remembered from search to search."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from morph.body.end_room import SLACK_MM, ChannelReach, Land, Spare, measure_channel_reach, measure_end_spare
from morph.body.exit import Sites
from morph.body.face import Face, PlaneFace
from morph.body.finish import PLAIN, Finish
from morph.body.lead_candidate import Bundle
from morph.body.lead_check import Surroundings
from morph.body.room import Limits
from morph.core.arrays import Bools, Floats
from morph.core.errors import GeometryError
from morph.surface.carrier import Carrier

Key = tuple[str, float, float, float]


class EndFits:
    """Where the end of one port fits; a plain end fits wherever it stays off the lands of other ends.

    Args:
        around: blank with what other ends cut, and the laid channels.
        limits: walls and bands.
        lands: circles of faces that other ports have taken.
        port: the port's name.
        finishes: the faces where its end can be made, each with its finish; empty for a plain end.
        opening: a plain end as wide as its bore.
        within: only exits this near to a place count: the place (3,) and the distance in mm.
    """

    def __init__(
        self,
        around: Surroundings,
        limits: Limits,
        lands: Sequence[Land],
        port: str,
        finishes: Sequence[tuple[str, Finish]],
        opening: Finish = PLAIN,
        within: tuple[Floats, float] | None = None,
    ) -> None:
        self._within = within
        self._opening = opening
        self._around, self._limits, self._lands, self._port = around, limits, tuple(lands), port
        self._finishes: Mapping[str, Finish] = dict(finishes)
        self._spare: dict[Key, tuple[float, str]] = {}
        self._reach: dict[Key, ChannelReach] = {}

    @property
    def any_fits(self) -> bool:
        """Whether the end fitted any exit looked at so far, channels aside or not."""
        return any(
            spare >= -SLACK_MM and self._reach[key].longest_mm > -np.inf for key, (spare, _) in self._spare.items()
        )

    def nearest_words(self) -> str:
        """Returns what stood in the way at the exit where the least was missing."""
        rows = [(-spare, name, key) for key, (spare, name) in self._spare.items() if spare < -SLACK_MM]
        rows += [(r.lack_mm, f"branch {r.by}", key) for key, r in self._reach.items() if r.longest_mm == -np.inf]
        if not rows:
            return "no place on a flat port face with the walls of its bore"
        lack, name, (face, x, y, z) = min(rows)
        return f"{lack:.3f} mm too little to {name} at the best place tried, ({x:.2f}, {y:.2f}, {z:.2f}) mm on '{face}'"

    def only(self, sites: Sites) -> Sites:
        """Returns the sites on which the end fits, channels aside."""
        near = self._near(sites.xyz_mm)
        sites = Sites(sites.face, sites.xyz_mm[near], sites.leave[near])
        if self._is_free(sites.face) or not len(sites.xyz_mm):
            return sites
        if self._finishes and sites.face.name not in self._finishes:
            return Sites(sites.face, sites.xyz_mm[:0], sites.leave[:0])
        keep = np.array([spare >= -SLACK_MM for spare, _ in self._spares(sites.face, sites.xyz_mm)], dtype=np.bool_)
        return Sites(sites.face, sites.xyz_mm[keep], sites.leave[keep])

    def only_fitting(self, bundle: Bundle, carrier: Carrier) -> Bundle:
        """Returns the paths of a bundle whose exits the end fits, with a wall to every channel that counts."""
        if self._within is not None:
            bundle = bundle.only(self._near(bundle.exits(carrier)))
        if self._is_free(bundle.face) or not len(bundle.leave):
            return bundle
        if self._finishes and bundle.face.name not in self._finishes:
            return bundle.only(np.zeros(len(bundle.leave), dtype=np.bool_))
        exits, face = bundle.exits(carrier), bundle.face
        keep: Bools = np.array([spare >= -SLACK_MM for spare, _ in self._spares(face, exits)], dtype=np.bool_)
        length = bundle.paths.lengths()
        for k in np.flatnonzero(keep):
            keep[k] = length[k] <= self._reach_at(face, exits[k]).longest_mm
        return bundle.only(keep)

    def require(self, face: Face, exit_mm: Floats, least_run_mm: float) -> None:
        """Raises when the end does not fit a given exit, however its lead runs.

        Args:
            face: the face it lies on.
            exit_mm: (3,) on it.
            least_run_mm: no lead is shorter.

        Raises:
            GeometryError: `land-not-flat`, `land-off-face`, `lands-overlap`, `end-without-wall`.
        """
        where = f"[[port]] '{self._port}' exit_mm"
        if self._finishes and not (isinstance(face, PlaneFace) and face.name in self._finishes):
            raise GeometryError(
                "land-not-flat",
                expected="an exit on a flat port face, one of " + ", ".join(self._finishes),
                found=f"'{face.name}'",
                where=where,
                do="Move the exit to such a face, choose another thread, or use a plain end.",
            )
        if self._is_free(face):
            return
        finish = self._finish(face)
        spare, name = self._spares(face, exit_mm[None, :])[0]
        if spare < -SLACK_MM:
            raise _unfit(finish, -spare, name, where)
        reach = self._reach_at(face, exit_mm)
        if reach.longest_mm < least_run_mm:
            raise _unfit(finish, reach.lack_mm, f"branch {reach.by}", where)

    def _near(self, places_mm: Floats) -> Bools:
        if self._within is None:
            return np.ones(len(places_mm), dtype=np.bool_)
        return np.asarray(np.linalg.norm(places_mm - self._within[0], axis=1) <= self._within[1], dtype=np.bool_)

    def _is_free(self, face: Face) -> bool:
        return not self._finishes and face.name not in {land.face for land in self._lands}

    def _finish(self, face: Face) -> Finish:
        return self._finishes.get(face.name, self._opening)

    def _spares(self, face: Face, exits_mm: Floats) -> list[tuple[float, str]]:
        keys = [_key(face, place) for place in exits_mm]
        new = {key: k for k, key in enumerate(keys) if key not in self._spare}
        if new:
            places = exits_mm[list(new.values())]
            found: Spare = measure_end_spare(
                self._around.blank, self._limits, face, places, self._finish(face), self._lands
            )
            for key, spare, by in zip(new, found.spare_mm, found.by, strict=True):
                self._spare[key] = (float(spare), found.names[by])
                if spare >= -SLACK_MM:
                    place = np.array(key[1:])
                    leave = face.outward(place[None, :])[0]
                    self._reach[key] = measure_channel_reach(self._around, place, leave, self._finish(face))
        return [self._spare[key] for key in keys]

    def _reach_at(self, face: Face, exit_mm: Floats) -> ChannelReach:
        return self._reach[_key(face, exit_mm)]


def _key(face: Face, place: Floats) -> Key:
    x, y, z = (round(float(v), 6) for v in place)
    return face.name, x, y, z


def _unfit(finish: Finish, lack_mm: float, name: str, where: str) -> GeometryError:
    """Returns the error for a given exit that its end does not fit."""
    found = f"{lack_mm:.3f} mm too little to {name}"
    if name.startswith("the edge to"):
        return GeometryError(
            "land-off-face",
            expected=f"the whole land of {finish.land_mm:.2f} mm across on its face",
            found=found,
            where=where,
            do="Move the exit inward by that much, or give a smaller land_mm.",
        )
    if name.startswith("an open hole"):
        return GeometryError(
            "land-off-face",
            expected=f"the whole land of {finish.land_mm:.2f} mm across flat",
            found=found,
            where=where,
            do="Move the exit away from the hole, or give a smaller land_mm.",
        )
    if name.startswith("the land of"):
        return GeometryError(
            "lands-overlap",
            expected="lands that lie beside each other",
            found=found,
            where=where,
            do="Move the exits apart, or give a smaller land_mm.",
        )
    return GeometryError(
        "end-without-wall",
        expected=f"the full wall around the {finish.words}, counted from {finish.cut_mm:.3f} mm across over "
        f"{finish.cut_depth_mm:.2f} mm of depth, bands included",
        found=found,
        where=where,
        do="Move the exit away from what limits it, choose a smaller thread, or give thread_depth_mm.",
    )
