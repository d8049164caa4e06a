"""Why a port has no lead, and where one would work: the narrowest place of the widest way, and other exits.

The widest way is the one over the nodes of the room grid whose tightest place is the least tight. What
limits it there is what blocks the port. When walls alone leave a way, its bends do not fit.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.body.exit import list_sites, port_faces
from morph.body.face import FaceRole
from morph.body.lead_check import Surroundings
from morph.body.lead_field import LeadField, RoomGrid, make_lead_field, make_room_grid
from morph.body.lead_ground import Blocked, Ground, Lead, PortStart
from morph.body.lead_search import find_lead
from morph.core.arrays import Bools, Floats
from morph.core.progress import SILENT

QUICK = ((False, False, 1.0), (False, False, 0.0), (True, False, 0.0))
"""Searches for a nearer exit to propose (see SEARCHES)."""

THOROUGH = (*QUICK, (False, True, 0.0), (True, True, 0.0))
"""Searches for any exit to propose."""

RINGS_BORES = (2.0, 5.0, 12.0)
"""Nearer exits are looked for within these distances of the one asked for, in bores."""

HALVINGS = 14
DEEPEST_MM = 20.0
"""A way that lacks more than this is no way at all."""

ALONG_STEPS = 1.5
"""Nodes this near to the port or to an exit, in grid steps, belong to it."""


@dataclass(frozen=True, slots=True, eq=False)
class Narrow:
    """The tightest place (3,) of the widest way, what limits it and how much is missing there in mm."""

    xyz_mm: Floats
    by: str
    lack_mm: float


def find_narrow(around: Surroundings, ground: Ground, port: PortStart, exit_mm: Floats | None) -> Narrow | None:
    """Returns the tightest place of the widest way for the least bore, or None when walls alone leave a way.

    Args:
        around: what the lead must keep clear of.
        ground: body, carrier and limits.
        port: where it starts.
        exit_mm: (3,) the exit that the job gives, or None for any on the port faces.
    """
    field = make_lead_field(around, ground.limits.least_bore_mm)
    grid = make_room_grid(field, _box_mm(around, ground, port))
    table = np.full(grid.base.shape, -np.inf)
    out = np.zeros(table.shape, dtype=np.bool_)
    for number, distance in enumerate(grid.face_distance):
        inside = distance >= -0.75 * grid.step_mm
        table = np.maximum(table, np.where(inside, grid.without(number), -np.inf))
        out |= np.abs(distance) <= 0.75 * grid.step_mm
    if exit_mm is not None:
        out = _beside(grid, exit_mm)
    begin = _beside(grid, port.xyz_mm)
    table = np.where(begin, np.maximum(table, 0.0), table)
    if exit_mm is not None:
        table = np.where(out, np.maximum(table, 0.0), table)
    if _joined(table, 0.0, begin, out):
        return None
    low, high = -DEEPEST_MM, 0.0
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _joined(table, middle, begin, out) else (low, middle)
    place = _tightest(grid, table, low, begin, out)
    return None if place is None else _named(field, place)


def _box_mm(around: Surroundings, ground: Ground, port: PortStart) -> Floats:
    places = [
        list_sites(ground.blank, face, port.xyz_mm, 0.0, None, ground.limits).xyz_mm
        for face in port_faces(ground.blank)
    ]
    points = np.concatenate([port.xyz_mm[None, :], around.network.xyz_mm, *places])
    return np.array([points.min(axis=0) - 5.0, points.max(axis=0) + 5.0])


def _beside(grid: RoomGrid, xyz_mm: Floats) -> Bools:
    nodes = grid.node_mm(np.arange(grid.base.size)).reshape(*grid.base.shape, 3)
    near: Bools = np.linalg.norm(nodes - xyz_mm, axis=-1) <= ALONG_STEPS * grid.step_mm
    return near


def _joined(table: Floats, level: float, begin: Bools, out: Bools) -> bool:
    """Returns whether nodes of at least `level` join `begin` to `out`."""
    from scipy.ndimage import label

    pieces, _ = label(table >= level, structure=np.ones((3, 3, 3)))
    here = np.unique(pieces[begin & (pieces > 0)])
    return bool(np.isin(pieces[out], here[here > 0]).any())


def _tightest(grid: RoomGrid, table: Floats, level: float, begin: Bools, out: Bools) -> Floats | None:
    """Returns the node (3,) of least spare on a way over nodes of at least `level`, spreading from the port."""
    free = table >= level
    reached, order = begin & free, [begin & free]
    while not (reached & out).any():
        grown = _grown(reached) & free & ~reached
        if not grown.any():
            return None
        order.append(grown)
        reached = reached | grown
    front = reached & out
    worst: tuple[float, int] = (np.inf, -1)
    for shell in order[::-1]:
        here = shell & (front if shell is order[-1] else _grown(front))
        spots = np.flatnonzero(here.ravel())
        if not len(spots):
            continue
        best = int(spots[np.argmax(table.ravel()[spots])])
        worst = min(worst, (float(table.ravel()[best]), best))
        front = np.zeros_like(front)
        front.ravel()[best] = True
    return None if worst[1] < 0 else np.asarray(grid.node_mm(np.array([worst[1]]))[0], dtype=np.float64)


def _grown(mask: Bools) -> Bools:
    from scipy.ndimage import binary_dilation

    return np.asarray(binary_dilation(mask, structure=np.ones((3, 3, 3), dtype=np.bool_)), dtype=np.bool_)


def _named(field: LeadField, place_mm: Floats) -> Narrow:
    """Returns what limits the lead at a place (3,), port faces aside."""
    spare, names = field.rows(place_mm[None, :])
    port = {f"face:{face.name}" for face in field.around.blank.faces if face.role is FaceRole.PORT}
    counts = [k for k, name in enumerate(names) if name not in port]
    worst = min(counts, key=lambda k: float(spare[k, 0]))
    name = names[worst]
    if name == "branch":
        network = field.around.network
        name = f"branch:{network.strands[int(network.owner[field.channel_spare(place_mm[None, :])[1][0]])].id}"
    return Narrow(place_mm, name, max(-float(spare[worst, 0]), 0.0))


def other_exit(around: Surroundings, ground: Ground, port: PortStart) -> str:
    """Returns where else a lead of `port` would work, as a sentence for the user."""
    free = replace(port, settings=replace(port.settings, exit_mm=None, leave=None))
    wanted = None if port.settings.exit_mm is None else np.array(port.settings.exit_mm)
    names = ", ".join(f"'{face.name}'" for face in port_faces(ground.blank))
    if wanted is not None:
        lead = _try(around, ground, free, wanted, np.inf)
        if lead is not None:
            for bores in RINGS_BORES:
                nearer = _try(around, ground, free, wanted, bores * port.bore_mm)
                if nearer is not None:
                    lead = nearer
                    break
            return f"The nearest place found that works is {_place_words(lead)}."
    for face in ground.blank.faces:
        if face.role is FaceRole.OUTER and not port.finishes:
            opened = _with_port_face(ground, face.name)
            lead = _try(replace(around, blank=opened.blank), opened, free, None, np.inf)
            if lead is not None:
                return (
                    f"No place on {names} works; one on another face would: add it to port_faces, {_place_words(lead)}."
                )
    return f"No place on {names} works, and none was found on another face that is not a part face."


def _with_port_face(ground: Ground, name: str) -> Ground:
    """Returns the ground with face `name` as the one port face."""

    def role(face_name: str, role: FaceRole) -> FaceRole:
        if face_name == name:
            return FaceRole.PORT
        return FaceRole.OUTER if role is FaceRole.PORT else role

    faces = tuple(replace(face, role=role(face.name, face.role)) for face in ground.blank.faces)
    return replace(ground, blank=replace(ground.blank, faces=faces))


def _try(
    around: Surroundings, ground: Ground, port: PortStart, near_mm: Floats | None, within_mm: float
) -> Lead | None:
    centre = None if near_mm is None else (near_mm, within_mm)
    searches = QUICK if np.isfinite(within_mm) else THOROUGH
    try:
        return find_lead(around, ground, port, SILENT, searches, centre)
    except Blocked:
        return None


def _place_words(lead: Lead) -> str:
    x, y, z = lead.path.xyz_mm[-1]
    return f"({x:.2f}, {y:.2f}, {z:.2f}) mm on '{lead.face}'"
