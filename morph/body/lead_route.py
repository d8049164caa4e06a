"""Leads by search: from the port through the room grid until a bend and a straight end come out of a port face.

Where the lattice (lead_lattice.py) comes near enough, its way is finished by one bend onto a face whose
exit is free, or by two onto a given exit. Such a way wanders by a step here and there; so the same exit is
also reached with up to three of its points as corners between long straight lines. Shortest first, the
caller judges them all.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from morph.body.blank import AnyFace
from morph.body.end_fit import EndFits
from morph.body.exit import SQUAREST_COSINE, Sites, given_leave, keep_legal, project_along, project_to_face
from morph.body.lead_candidate import Bend, Bundle, make_start, two_bends
from morph.body.lead_check import NECK, Surroundings
from morph.body.lead_field import RoomGrid, make_lead_field, make_room_grid
from morph.body.lead_ground import Ground, PortStart
from morph.body.lead_lattice import DOUBT_STEPS, FREE_STEPS, Lattice, least_way_mm, opens
from morph.body.lead_path import SHARPEST_TURN_RAD, Paths, make_paths, sample_paths, start_corner, turn_between_rad
from morph.body.room import way_out
from morph.core.arrays import Bools, Floats, Ints

MOST_WAYS = 15
"""Batches of the lattice from which ways are handed out before the search gives up."""

WAYS_AT_ONCE = 3

MOST_STATES, FEWER_STATES, PATIENT_STATES = 40_000, 20_000, 300_000
"""States of the lattice before it gives up, for the least bore and for wider ones, which may still be thinned."""

VIAS = 10
"""Points of a way between which straight lines are tried."""

TAIL_SAMPLES = 14
TAIL_SLACK_MM = 0.3
"""Spare forgiven along a tail on the grid; it is measured afterwards."""

NEAR_BENDS = 8.0
"""States nearer than this to a given exit, in bend radii, are tried to finish there."""


@dataclass(frozen=True, slots=True, eq=False)
class _Tails:
    """Ways (n,) from states to a face: the state, the path from it, and the direction out (n, 3)."""

    state: Ints
    paths: Paths
    leave: Floats

    def only(self, keep: Bools | Ints) -> _Tails:
        return _Tails(self.state[keep], self.paths.only(keep), self.leave[keep])


class RoomSearch:
    """The search for ways of one port, with the room of each bore tabulated once.

    Args:
        around: what the lead must keep clear of.
        ground: body, carrier and limits.
        port: where it starts.
        fits: where the port's end fits.
    """

    def __init__(self, around: Surroundings, ground: Ground, port: PortStart, fits: EndFits) -> None:
        self._around, self._ground, self._port, self._fits = around, ground, port, fits
        self._rooms: dict[float, tuple[RoomGrid, Floats] | None] = {}

    def starts_open(self, headings: Sequence[tuple[float, Floats]], bend: Bend) -> bool:
        """Returns whether any way with those bends can leave the port at all, port faces aside."""
        field = make_lead_field(self._around, NECK * bend.bore_mm)
        port = self._port
        begin = np.array([heading for _, heading in headings])
        return opens(field, port.xyz_mm + bend.start_mm * begin, begin, bend.radius_mm)

    def reaches(self, places: Sequence[Sites], bend: Bend) -> bool:
        """Returns whether the port is joined to a way out by free room, bends aside."""
        room = self._room(places, bend)
        return room is not None and bool(np.isfinite(room[1][tuple(room[0].cell(self._port.xyz_mm[None, :])[0])]))

    def _room(self, places: Sequence[Sites], bend: Bend) -> tuple[RoomGrid, Floats] | None:
        """Returns the room of the bore and the least way to go from each node, or None when no exit is left."""
        if bend.bore_mm not in self._rooms:
            found = None
            if any(len(sites.xyz_mm) for sites in places):
                field = make_lead_field(self._around, bend.bore_mm)
                grid = make_room_grid(field, self._box_mm(places, bend.radius_mm))
                given = places[0] if self._port.settings.exit_mm is not None else None
                found = grid, least_way_mm(grid, _ways_out_mm(grid, self._port, given, bend))
            self._rooms[bend.bore_mm] = found
        return self._rooms[bend.bore_mm]

    def _box_mm(self, places: Sequence[Sites], pad_mm: float) -> Floats:
        """Returns the box (2, 3) a lead is searched in: port, channels and sites, and `pad_mm` around them."""
        sites = [one.xyz_mm for one in places]
        points = np.concatenate([self._port.xyz_mm[None, :], self._around.network.xyz_mm, *sites])
        return np.array([points.min(axis=0) - pad_mm, points.max(axis=0) + pad_mm])

    def ways(
        self, headings: Sequence[tuple[float, Floats]], places: Sequence[Sites], bend: Bend, patient: bool = False
    ) -> Iterator[tuple[list[Bundle], list[float]]]:
        """Yields paths found by search with the kink of each bundle at the port, likely shortest first.

        Args:
            headings: kinks and unit headings (3,) to start along.
            places: sites on the port faces, or the one given.
            bend: bend radius, straight end and bore.
            patient: takes many more steps before it gives up.
        """
        room = self._room(places, bend)
        if room is None:
            return
        grid, port = room[0], self._port
        given = places[0] if port.settings.exit_mm is not None else None
        start = np.array([heading for _, heading in headings])
        most = MOST_STATES if bend.bore_mm <= self._ground.limits.least_bore_mm else FEWER_STATES
        most = PATIENT_STATES if patient else most
        lattice = Lattice(grid, room[1], port.xyz_mm, start, bend.radius_mm, bend.start_mm, most)
        handed = 0
        for batch in lattice.batches():
            bundles: list[Bundle] = []
            kinks: list[float] = []
            for number, face in enumerate(grid.faces):
                tails = _tails(self._ground, port, lattice, batch, face, given, bend)
                if tails is None:
                    continue
                tails = _shortest_clear(lattice, grid, number, tails)
                for root, one in _whole_ways(self._ground, port, lattice, face, tails, bend):
                    way = self._fits.only_fitting(one, self._ground.carrier)
                    if len(way.leave):
                        bundles.append(way)
                        kinks.append(headings[root][0])
            if bundles:
                handed += 1
                yield bundles, kinks
            if handed >= MOST_WAYS:
                return


def _ways_out_mm(grid: RoomGrid, port: PortStart, given: Sites | None, bend: Bend) -> Floats:
    """Returns the straight way out (i, j, k) from each node, inf where it is too short or not clear.

    It ends at the given exit (from nodes beside its axis), else square to a port face or as `leave` says.
    """
    found = np.full(grid.base.shape, np.inf)
    nodes = grid.node_mm(np.flatnonzero(grid.whole().ravel() >= -FREE_STEPS * grid.step_mm))
    least = max(bend.straight_mm, bend.whole_mm) - grid.step_mm
    for number, face in enumerate(grid.faces):
        if given is not None and face.name != given.face.name:
            continue
        if given is not None:
            leave = np.broadcast_to(given.leave[0], nodes.shape)
            length = (given.xyz_mm[0] - nodes) @ given.leave[0]
            aside = np.linalg.norm(nodes + length[:, None] * leave - given.xyz_mm[0], axis=1)
            ahead = (aside <= grid.step_mm) & (length >= least)
        else:
            asked = given_leave(port.settings)
            leave = face.outward(nodes) if asked is None else np.broadcast_to(asked, nodes.shape)
            slope = (face.outward(nodes) * leave).sum(axis=1)
            length = face.distance_mm(nodes) / np.maximum(slope, SQUAREST_COSINE)
            ahead = (length >= least) & (slope >= SQUAREST_COSINE)
        chosen = np.flatnonzero(ahead)
        share = np.linspace(0.0, 1.0, TAIL_SAMPLES)[:, None, None]
        line = nodes[chosen] + share * (length[chosen, None] * leave[chosen])
        spare = grid.look_up(grid.without(number), line).min(axis=0)
        chosen = chosen[spare >= -DOUBT_STEPS * grid.step_mm]
        at = tuple(grid.cell(nodes[chosen]).T)
        found[at] = np.minimum(found[at], np.maximum(length[chosen], 1e-6))
    return found


def _root(lattice: Lattice, state: int) -> int:
    while lattice.states.parent[state] >= 0:
        state = int(lattice.states.parent[state])
    return state


def _tails(
    ground: Ground, port: PortStart, lattice: Lattice, batch: Ints, face: AnyFace, given: Sites | None, bend: Bend
) -> _Tails | None:
    """Returns the ways from the states of `batch` onto `face` that are valid in shape, or None."""
    if given is not None and face.name != given.face.name:
        return None
    place, heading = lattice.states.xyz_mm[batch], lattice.states.heading[batch]
    found = (
        _onto_given(place, heading, given, bend) if given is not None else _onto_face(port, place, heading, face, bend)
    )
    paths, leave, who = found
    keep = paths.valid & (paths.pieces[:, -1] >= max(bend.straight_mm, bend.whole_mm) - 1e-9)
    if given is None:
        exits = np.flatnonzero(keep)
        sites = keep_legal(
            ground.blank, face, paths.vertices[exits, -1], bend.bore_mm, given_leave(port.settings), ground.limits
        )
        legal = {tuple(row) for row in sites.xyz_mm}
        keep[exits] = [tuple(row) in legal for row in paths.vertices[exits, -1]]
    if not keep.any():
        return None
    return _Tails(batch[who[keep]], paths.only(keep), leave[keep])


def _onto_face(
    port: PortStart, place: Floats, heading: Floats, face: AnyFace, bend: Bend
) -> tuple[Paths, Floats, Ints]:
    """Returns paths with one bend onto an endless `face`, their directions out (n, 3) and the states they begin at."""
    given = given_leave(port.settings)
    corner = place
    for _ in range(3):
        out = face.outward(corner) if given is None else np.broadcast_to(given, corner.shape)
        turn = np.minimum(turn_between_rad(heading, out), SHARPEST_TURN_RAD)
        corner = place + (bend.radius_mm * np.tan(0.5 * turn) + 1e-4)[:, None] * heading
    who = np.flatnonzero(face.distance_mm(corner) > 0.0)
    corner, out = corner[who], out[who]
    exits = project_to_face(face, corner) if given is None else project_along(face, corner, given)
    out = face.outward(exits) if given is None else out
    paths = make_paths(np.stack([place[who], corner, exits], axis=1), np.full(len(who), bend.radius_mm))
    return paths, out, who


def _onto_given(place: Floats, heading: Floats, given: Sites | None, bend: Bend) -> tuple[Paths, Floats, Ints]:
    """Returns paths with two bends onto the given exit."""
    assert given is not None
    exit_mm, leave = given.xyz_mm[0], given.leave[0]
    near = np.flatnonzero(np.linalg.norm(place - exit_mm, axis=1) <= NEAR_BENDS * bend.radius_mm + bend.straight_mm)
    vertices, who = [], []
    for height in bend.straight_mm + np.array([1.0, 1.5, 2.5]) * bend.radius_mm:
        last = np.broadcast_to(exit_mm - height * leave, (len(near), 3))
        radii, nothing = np.full(len(near), bend.radius_mm), np.zeros(len(near))
        first = start_corner(place[near], heading[near], last, radii, nothing)
        ends = np.broadcast_to(exit_mm, last.shape)
        vertices.append(np.stack([place[near], first, last, ends], axis=1))
        who.append(near)
    whole = np.concatenate(vertices)
    paths = make_paths(whole, np.full(len(whole), bend.radius_mm))
    return paths, np.broadcast_to(leave, (len(whole), 3)).copy(), np.concatenate(who)


def _shortest_clear(lattice: Lattice, grid: RoomGrid, number: int, tails: _Tails) -> _Tails:
    """Returns the few shortest of `tails` onto port face `number` that keep clear on the grid."""
    points, _ = sample_paths(tails.paths, TAIL_SAMPLES)
    opening = way_out(grid.faces[number], points)
    spare = np.where(opening, grid.look_up(grid.without(number), points), grid.look_up(grid.whole(), points))
    clear = np.flatnonzero(spare.min(axis=1) >= -TAIL_SLACK_MM)
    length = lattice.states.way_mm[tails.state[clear]] + tails.paths.lengths()[clear]
    return tails.only(clear[np.argsort(np.round(length, 6), kind="stable")[:WAYS_AT_ONCE]])


def _whole_ways(
    ground: Ground, port: PortStart, lattice: Lattice, face: AnyFace, tails: _Tails, bend: Bend
) -> Iterator[tuple[int, Bundle]]:
    """Yields each way from the port through the lattice and its tail, and shorter ways to the same exit.

    Before each stands the number of the heading it starts along.
    """
    for k, state in enumerate(tails.state):
        corners = lattice.states.corners(int(state))
        vertices = np.concatenate([port.xyz_mm[None, :], corners, tails.paths.vertices[k, 1:]])
        paths = make_paths(vertices[None], np.array([bend.radius_mm]))
        leave = tails.leave[k : k + 1]
        if not paths.valid[0]:
            continue
        root = _root(lattice, int(state))
        yield root, Bundle(paths, False, face, leave)
        site = Sites(face, vertices[-1:], leave)
        for one in _straightened(ground, port, lattice.states.heading[root], paths, site, bend):
            yield root, one


def _straightened(
    ground: Ground, port: PortStart, heading: Floats, paths: Paths, site: Sites, bend: Bend
) -> Iterator[Bundle]:
    """Yields paths to the exit of one way with up to three of its points as corners."""
    start = make_start(ground.carrier, port.xyz_mm, heading)
    yield from two_bends(start, site, bend, None)
    vias = sample_paths(paths, VIAS + 2)[0][0, 1:-1]
    exit_mm, leave = site.xyz_mm[0], site.leave[0]
    for count in (1, 2, 3):
        chosen = np.array(list(itertools.combinations(range(VIAS), count)))
        between = vias[chosen]
        n = len(chosen)
        radii = np.full(n, bend.radius_mm)
        first = start_corner(port.xyz_mm, heading, between[:, 0], radii, np.full(n, bend.start_mm))
        last = start_corner(exit_mm, -leave, between[:, -1], radii, np.full(n, bend.straight_mm))
        ends = [np.broadcast_to(point, (n, 1, 3)) for point in (port.xyz_mm, exit_mm)]
        vertices = np.concatenate([ends[0], first[:, None], between, last[:, None], ends[1]], axis=1)
        bundle = Bundle(make_paths(vertices, radii), False, site.face, np.broadcast_to(leave, (n, 3)).copy())
        yield bundle.only(bundle.paths.valid & bundle.runs_straight(bend))
