"""Where a lead may come out: places on the port faces whose whole opening keeps its walls.

Sites lie on a polar grid about the axis (foot, top, round faces) or a square grid (sides of a box),
aligned with the port so that the straight way down is always among them. A flat end of a mesh brings its own grid.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.blank import AnyFace, Blank
from morph.body.face import ConeFace, CylinderFace, FaceRole, PlaneFace
from morph.body.flange import FlangedFace
from morph.body.hole import line_crossings
from morph.body.lead_spare import least_spare_mm
from morph.body.room import Limits, measure_room
from morph.body.skin_face import FlatFace, SkinFace
from morph.core.arrays import Floats, unit_rows
from morph.core.errors import GeometryError, SettingError
from morph.settings.job import PortSettings

ON_FACE_MM = 0.05
"""A given exit lies on a port face when it is this near; it is then moved onto it."""

WINDOW = 30
"""Steps of the grid of sites to either side of the port; a step is 2.5 to 5 mm."""

WIDEST_OF = 201
"""Radii compared to find the ring of a face that lies farthest from all other faces."""

NEAREST_SITES, FAR_SITES = 250, 100
"""Sites tried on each face: the nearest to the port, and some of the others."""

ROOM_SLACK_MM = 1e-6
"""A bore capped by its room equals it up to rounding."""

SQUAREST_COSINE = 0.5
"""A lead may leave at most 60 degrees off the face's normal: flatter, the opening has a knife edge."""


@dataclass(frozen=True, slots=True, eq=False)
class Sites:
    """Places (n, 3) on one face and the unit directions (n, 3) out of the metal there."""

    face: AnyFace
    xyz_mm: Floats
    leave: Floats


def port_faces(blank: Blank) -> list[AnyFace]:
    """Returns the faces where ports may come out."""
    return [face for face in blank.faces if face.role is FaceRole.PORT]


def list_sites(
    blank: Blank, face: AnyFace, port_mm: Floats, bore_mm: float, leave: Floats | None, limits: Limits
) -> Sites:
    """Returns the places on `face` where a bore comes out with its walls to all other faces and holes.

    Args:
        blank: the body.
        face: one of its port faces.
        port_mm: (3,) the port the lead starts from; the grid is aligned with it.
        bore_mm: bore at the exit.
        leave: (3,) unit direction out of the metal, or None for square to the face.
        limits: walls and bands.
    """
    step = min(max(bore_mm, 2.5), 5.0)
    if isinstance(face, FlatFace):
        places = face.grid_mm(port_mm, step)
    elif isinstance(face, SkinFace):
        raise TypeError(f"ports come out of flat ends of a mesh, not of '{face.name}'")
    elif isinstance(face, CylinderFace):
        places = _round_grid(blank, face, port_mm, step)
    elif isinstance(face, ConeFace):
        places = _cone_grid(blank, face, port_mm, step)
    elif isinstance(face, FlangedFace):
        places = _edged_grid(face, port_mm, step)
    elif abs(face.normal[2]) > 0.5:
        places = _polar_grid(blank, face, port_mm, step)
    else:
        places = _square_grid(blank, face, port_mm, step)
    sites = keep_legal(blank, face, places, bore_mm, leave, limits)
    near = np.argsort(np.round(np.linalg.norm(sites.xyz_mm - port_mm, axis=1), 9), kind="stable")
    far = near[NEAREST_SITES:]
    chosen = np.concatenate([near[:NEAREST_SITES], far[:: max(1, len(far) // FAR_SITES)]])
    return Sites(face, sites.xyz_mm[chosen], sites.leave[chosen])


def keep_legal(
    blank: Blank,
    face: AnyFace,
    places_mm: Floats,
    bore_mm: float,
    leave: Floats | None,
    limits: Limits,
) -> Sites:
    """Returns the sites among `places_mm (n, 3)` on `face` whose opening keeps its walls and leaves steeply enough."""
    outward = face.outward(places_mm)
    directions = outward if leave is None else np.broadcast_to(leave, places_mm.shape).copy()
    opening = np.ones(len(places_mm), dtype=np.bool_)
    spare = least_spare_mm(blank, limits, places_mm, np.full(len(places_mm), bore_mm), face.name, opening)
    keep = (spare >= -ROOM_SLACK_MM) & ((outward * directions).sum(axis=1) >= SQUAREST_COSINE)
    return Sites(face, places_mm[keep], directions[keep])


def _spread(centre: float, low: float, high: float, step: float) -> Floats:
    """Returns the numbers centre + k step in [low, high], at most WINDOW to either side."""
    first = max(int(np.ceil(max(low - centre, -WINDOW * step) / step)), -WINDOW)
    last = min(int(np.floor(min(high - centre, WINDOW * step) / step)), WINDOW)
    return np.asarray(centre + step * np.arange(first, last + 1), dtype=np.float64)


def _around(port_mm: Floats, radius: float, step: float) -> Floats:
    """Returns angles about z from the port's own, `step` apart on `radius`: the whole turn or WINDOW each way."""
    start = float(np.arctan2(port_mm[1], port_mm[0]))
    n = max(1, int(np.ceil(min(2.0 * np.pi * radius / step, 1e6))))
    turn = 2.0 * np.pi * np.arange(n) / n if n <= 2 * WINDOW else np.arange(-WINDOW, WINDOW + 1) * (step / radius)
    return np.asarray(start + turn, dtype=np.float64)


def _polar_grid(blank: Blank, face: PlaneFace, port_mm: Floats, step: float) -> Floats:
    """Returns places in rings from the port's own angle, and in the ring that lies farthest from all other faces.

    Where the face is a narrow ring itself, that one may be the only one on which an end fits.
    """
    rings = []
    regular = _spread(float(np.hypot(*port_mm[:2])), 0.0, np.inf, step)
    for radius in (*regular, *_widest_radius_mm(blank, face, port_mm)):
        angle = _around(port_mm, float(radius), step)
        rings.append(np.column_stack([radius * np.cos(angle), radius * np.sin(angle)]))
    flat = np.concatenate([*rings, np.zeros((1, 2))])
    return np.column_stack([flat, np.full(len(flat), face.origin_mm[2])])


def _widest_radius_mm(blank: Blank, face: PlaneFace, port_mm: Floats) -> list[float]:
    """Returns the radius about z, at the port's angle on `face`, that lies farthest from all other faces, if round."""
    if blank.outer_radius_mm is None:
        return []
    radius = np.linspace(0.0, blank.outer_radius_mm, WIDEST_OF)
    angle = float(np.arctan2(port_mm[1], port_mm[0]))
    height = np.full(WIDEST_OF, face.origin_mm[2])
    line = np.column_stack([radius * np.cos(angle), radius * np.sin(angle), height])
    others = [other.distance_mm(line) for other in blank.faces if other.name != face.name]
    return [float(radius[np.min(others, axis=0).argmax()])] if others else []


def _square_grid(blank: Blank, face: PlaneFace, port_mm: Floats, step: float) -> Floats:
    axis = int(np.abs(face.normal).argmax())
    across = 1 - axis
    u, v = np.meshgrid(_spread(port_mm[across], -np.inf, np.inf, step), _spread(port_mm[2], *blank.z_mm, step))
    places = np.zeros((u.size, 3))
    places[:, axis], places[:, across], places[:, 2] = face.origin_mm[axis], u.ravel(), v.ravel()
    return places


def _round_grid(blank: Blank, face: CylinderFace, port_mm: Floats, step: float) -> Floats:
    angles, heights = np.meshgrid(_around(port_mm, face.radius_mm, step), _spread(port_mm[2], *blank.z_mm, step))
    angle = angles.ravel()
    return np.column_stack([face.radius_mm * np.cos(angle), face.radius_mm * np.sin(angle), heights.ravel()])


def _cone_grid(blank: Blank, face: ConeFace, port_mm: Floats, step: float) -> Floats:
    """Returns places at heights a step of the meridian apart, in rings from the port's own angle."""
    rings = []
    for z in _spread(port_mm[2], *blank.z_mm, step * float(np.cos(face.cone.half_angle_rad))):
        radius = face.cone.radius_at_mm(float(z))
        if radius > 0.0:
            angle = _around(port_mm, radius, step)
            rings.append(np.column_stack([radius * np.cos(angle), radius * np.sin(angle), np.full(len(angle), z)]))
    return np.concatenate(rings) if rings else np.empty((0, 3))


def _edged_grid(face: FlangedFace, port_mm: Floats, step: float) -> Floats:
    """Returns places in rings a step apart between the edges of the face, in rings from the port's own angle."""
    start, end = np.array(face.start), np.array(face.end)
    n = max(1, min(int(np.linalg.norm(end - start) / step), 4 * WINDOW))
    rings = []
    for radius, z in start + (np.arange(n)[:, None] + 0.5) / n * (end - start):
        angle = _around(port_mm, float(radius), step)
        rings.append(np.column_stack([radius * np.cos(angle), radius * np.sin(angle), np.full(len(angle), z)]))
    return np.concatenate(rings)


def project_to_face(face: AnyFace, xyz_mm: Floats) -> Floats:
    """Returns the nearest points (k, 3) of the endless `face` to points (k, 3)."""
    return np.asarray(xyz_mm + face.distance_mm(xyz_mm)[:, None] * face.outward(xyz_mm), dtype=np.float64)


def project_along(face: AnyFace, xyz_mm: Floats, leave: Floats) -> Floats:
    """Returns where rays from points (k, 3) along `leave (3,)` meet the endless `face`; the point itself if never."""
    result = xyz_mm.copy()
    for k, point in enumerate(xyz_mm):
        ahead = [place for place in line_crossings(face, point, leave) if place > 0.0]
        if ahead:
            result[k] = point + min(ahead) * leave
    return result


def nearest_on_port_face(blank: Blank, xyz_mm: Floats) -> tuple[Floats, str]:
    """Returns the nearest place found (3,) on the port faces within the body, and the face's name.

    Alternating projections onto the face and back inside the other faces; exact when one face limits.
    """
    best: tuple[float, Floats, str] | None = None
    for face in port_faces(blank):
        point = face.nearest_mm(xyz_mm[None, :]) if isinstance(face, FlatFace) else xyz_mm[None, :].copy()
        for _ in range(0 if isinstance(face, FlatFace) else 60):
            point = project_to_face(face, point)
            for other in blank.faces:
                if other is not face and float(other.distance_mm(point)[0]) < 0.0:
                    point = project_to_face(other, point)
        point = project_to_face(face, point)
        far = float(np.linalg.norm(point[0] - xyz_mm))
        if best is None or far < best[0] - 1e-12:
            best = (far, point[0], face.name)
    if best is None:
        raise ValueError("a blank without a port face")
    return best[1], best[2]


def given_exit(blank: Blank, port: PortSettings, bore_mm: float, limits: Limits) -> Sites:
    """Returns the one site of a port whose job gives `exit_mm`, moved onto its face.

    Raises:
        GeometryError: `exit-off-port-face` with the nearest place on a port face;
            `exit-without-wall` when the opening lies too near to another face or a hole.
        SettingError: `leave-into-metal` when `leave` does not point out of that face.
    """
    wanted = np.array(port.exit_mm, dtype=np.float64)
    nearest, name = nearest_on_port_face(blank, wanted)
    off = float(np.linalg.norm(nearest - wanted))
    where = f"[[port]] '{port.name}' exit_mm"
    if not off <= ON_FACE_MM:
        x, y, z = nearest
        raise GeometryError(
            "exit-off-port-face",
            expected=f"a place within {ON_FACE_MM} mm of a finished port face "
            f"({', '.join(face.name for face in port_faces(blank))})",
            found=f"({wanted[0]:.3f}, {wanted[1]:.3f}, {wanted[2]:.3f}) mm, {off:.3f} mm off",
            where=where,
            do=f"The nearest place is ({x:.3f}, {y:.3f}, {z:.3f}) mm on '{name}'.",
        )
    face = blank.face(name)
    leave = given_leave(port)
    outward = face.outward(nearest[None, :])[0]
    if leave is not None and float(outward @ leave) < SQUAREST_COSINE:
        x, y, z = outward
        raise SettingError(
            "leave-into-metal",
            expected=f"a direction out of face '{name}', at most 60 degrees off ({x:.3f}, {y:.3f}, {z:.3f})",
            found=f"leave = {list(port.leave or ())}",
            where=f"[[port]] '{port.name}' leave",
            do="Leave it out for square to the face, or turn it outward.",
        )
    room = measure_room(blank, limits, nearest[None, :], name, np.ones(1, dtype=np.bool_))
    if room.room_mm[0] < bore_mm - ROOM_SLACK_MM:
        raise GeometryError(
            "exit-without-wall",
            expected=f"room for the bore of {bore_mm:.3f} mm with its walls around the opening",
            found=f"room for {max(float(room.room_mm[0]), 0.0):.3f} mm, limited by {room.by_names()[0]}",
            where=where,
            do="Move the exit away from what limits it, or allow a smaller bore or wall.",
        )
    direction = outward if leave is None else leave
    return Sites(face, nearest[None, :].copy(), direction[None, :].copy())


def given_leave(port: PortSettings) -> Floats | None:
    """Returns the unit direction (3,) a job asks a port to leave along, or None.

    Raises:
        SettingError: `leave-without-direction` when it has no length.
    """
    if port.leave is None:
        return None
    leave = np.array(port.leave, dtype=np.float64)
    if not np.isfinite(leave).all() or float(np.linalg.norm(leave)) < 1e-9:
        raise SettingError(
            "leave-without-direction",
            expected="a direction of any length above 0",
            found=f"leave = {list(port.leave)}",
            where=f"[[port]] '{port.name}' leave",
            do="Give the direction out of the metal in the part frame, or leave it out for square to the face.",
        )
    return np.asarray(unit_rows(leave[None, :])[0], dtype=np.float64)
