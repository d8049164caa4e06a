"""A cone carrier about the z axis, in closed form.

The sheet's centre lies at angle 0 (+x) and height z = 0 of the face; sheet y runs up the meridian.
Two maps: *flat* develops the cone, so that every length is kept at the true surface (at depth, or at the
face) and the sheet's edges follow no circle of the cone: they sag. *Polar* maps sheet x to the angle and
sheet y to the meridian; it closes a full wrap, and stretches along x by radius / radius at the sheet's
centre. Off the true surface only the lengths around the axis change, as on any offset surface.

With s along the meridian from the sheet's centre, a the half angle and R the true radius there, the slant
from the apex is rho = s + R / sin a; the development is the plane sector with the angle phi = theta sin a
(do Carmo, Differential Geometry of Curves and Surfaces, 1976, section 2-5 on developable surfaces).
Limits: one turn, and a sheet that stays clear of the apex and the axis.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import GeometryError, SettingError
from morph.geometry.cone import Cone
from morph.settings.job import ConeMap, ConeSettings, Metal, Seam, SeenFrom, TrueAt
from morph.surface.limits import LEAST_RADIUS_MM, TURN_SLACK, closed_radius_mm, require_positive


@dataclass(frozen=True, slots=True)
class ConeCarrier:
    """The Carrier of a conical core (metal toward the axis) or of a jacket or cavity (away from it).

    Args:
        face: the finished part face; its radius is that at the sheet's centre.
        metal: on which side of it the metal lies.
        map: flat or polar.
        true_depth_mm: depth at which the sheet's lengths are kept.
        size_mm: width and height of the sheet.
        turn: +1 when sheet x grows with the angle about z, -1 when it falls.
        depth_mm: depth of the centrelines the sheet is laid for.
        closed_mm: radius at which a full wrap closes exactly, None for an open sheet.
    """

    face: Cone
    metal: Metal
    map: ConeMap
    true_depth_mm: float
    size_mm: tuple[float, float]
    turn: float
    depth_mm: float
    closed_mm: float | None = None

    @property
    def side(self) -> float:
        """Returns +1 when a point deeper in the metal is nearer to the axis, else -1."""
        return 1.0 if self.metal is Metal.TOWARD_AXIS else -1.0

    @property
    def sine(self) -> float:
        """Returns the sine of the half angle, with its sign."""
        return math.sin(self.face.half_angle_rad)

    @property
    def cosine(self) -> float:
        """Returns the cosine of the half angle."""
        return math.cos(self.face.half_angle_rad)

    @property
    def true_radius_mm(self) -> float:
        """Returns the radius of the true surface at the sheet's centre."""
        if self.closed_mm is not None:
            return self.closed_mm
        return self.face.radius_mm - self.side * self.true_depth_mm * self.cosine

    @property
    def slant_mm(self) -> float:
        """Returns the slant from the apex of the true surface to the sheet's centre, negative below an apex."""
        return self.true_radius_mm / self.sine

    @property
    def turn_mm(self) -> float:
        """Returns the sheet width of one turn: infinite on the flat map, which does not repeat along x."""
        return math.inf if self.map is ConeMap.FLAT else 2.0 * math.pi * self.true_radius_mm

    def radius_at_mm(self, along_mm: Floats, depth_mm: float | Floats) -> Floats:
        """Returns the radius (k,) at places (k,) along the meridian, `depth_mm` into the metal."""
        return np.asarray(
            self.face.radius_mm + along_mm * self.sine - self.side * depth_mm * self.cosine, dtype=np.float64
        )

    def _from_apex(self, sheet_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Returns, on the flat map, sheet x from the centre, y from the apex (positive on the sheet), and the slant."""
        x = sheet_mm[:, 0] - 0.5 * self.size_mm[0]
        y = math.copysign(1.0, self.slant_mm) * (sheet_mm[:, 1] - 0.5 * self.size_mm[1] + self.slant_mm)
        return x, y, np.hypot(x, y)

    def along_mm(self, sheet_mm: Floats) -> Floats:
        """Returns the place (k,) of sheet points (k, 2) along the meridian, 0 at the sheet's centre, upwards."""
        if self.map is ConeMap.POLAR:
            return np.asarray(sheet_mm[:, 1] - 0.5 * self.size_mm[1], dtype=np.float64)
        sign = math.copysign(1.0, self.slant_mm)
        return np.asarray(sign * self._from_apex(sheet_mm)[2] - self.slant_mm, dtype=np.float64)

    def angle_rad(self, sheet_mm: Floats) -> Floats:
        """Returns the angle (k,) about z of the sheet points (k, 2)."""
        if self.map is ConeMap.POLAR:
            across = sheet_mm[:, 0] - 0.5 * self.size_mm[0]
            return np.asarray(self.turn * across / self.true_radius_mm, dtype=np.float64)
        x, y, _ = self._from_apex(sheet_mm)
        return np.asarray(self.turn * np.arctan2(x, y) / abs(self.sine), dtype=np.float64)

    def point_mm(self, sheet_mm: Floats, depth_mm: float | Floats) -> Floats:
        """Returns the points (k, 3) that lie `depth_mm` (one number or (k,)) below the sheet points (k, 2)."""
        along, angle = self.along_mm(sheet_mm), self.angle_rad(sheet_mm)
        radius = self.radius_at_mm(along, depth_mm)
        height = along * self.cosine + self.side * depth_mm * self.sine
        return np.column_stack([radius * np.cos(angle), radius * np.sin(angle), height])

    def into_metal(self, sheet_mm: Floats) -> Floats:
        """Returns the unit vectors (k, 3) from the face into the metal."""
        angle = self.angle_rad(sheet_mm)
        around = self.cosine * np.column_stack([np.cos(angle), np.sin(angle)])
        return -self.side * np.column_stack([around, np.full(len(angle), -self.sine)])

    def _gradients(self, sheet_mm: Floats) -> tuple[Floats, Floats]:
        """Returns d s / d (x, y) and d theta / d (x, y), each (k, 2): meridian place and angle over the sheet."""
        along, around = np.zeros((len(sheet_mm), 2)), np.zeros((len(sheet_mm), 2))
        if self.map is ConeMap.POLAR:
            along[:, 1] = 1.0
            around[:, 0] = self.turn / self.true_radius_mm
            return along, around
        x, y, slant = self._from_apex(sheet_mm)
        sign = math.copysign(1.0, self.slant_mm)
        along[:, 0], along[:, 1] = sign * x / slant, y / slant
        scale = self.turn / (abs(self.sine) * slant**2)
        around[:, 0], around[:, 1] = scale * y, -scale * sign * x
        return along, around

    def jacobian(self, sheet_mm: Floats, depth_mm: float) -> Floats:
        """Returns d point / d (x, y) as (k, 3, 2), dimensionless, at `depth_mm`."""
        angle, place = self.angle_rad(sheet_mm), self.along_mm(sheet_mm)
        along, around = self._gradients(sheet_mm)
        zero = np.zeros_like(angle)
        meridian = np.column_stack(
            [self.sine * np.cos(angle), self.sine * np.sin(angle), np.full(len(angle), self.cosine)]
        )
        parallel = self.radius_at_mm(place, depth_mm)[:, None] * np.column_stack([-np.sin(angle), np.cos(angle), zero])
        return np.asarray(
            meridian[:, :, None] * along[:, None, :] + parallel[:, :, None] * around[:, None, :], dtype=np.float64
        )

    def shape_operator(self, sheet_mm: Floats) -> Floats:
        """Returns S as (k, 2, 2) in 1/mm with J_d = J (I - d S): cosine / radius around, 0 along the meridian."""
        _, around = self._gradients(sheet_mm)
        way = around / np.linalg.norm(around, axis=1)[:, None]
        curvature = self.side * self.cosine / self.radius_at_mm(self.along_mm(sheet_mm), 0.0)
        return np.asarray(curvature[:, None, None] * way[:, :, None] * way[:, None, :], dtype=np.float64)

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the signed distance (k,) of points (k, 3) from the face, positive in the metal."""
        return np.asarray(-self.side * self.face.outside_mm(xyz_mm), dtype=np.float64)

    def develop(self, xyz_mm: Floats) -> Floats:
        """Returns sheet x, sheet y and depth (k, 3) of points (k, 3): the inverse of `point_mm`, angle in (-pi, pi].

        The depth is measured from the meridian's line; points past the apex have no place on the sheet.
        """
        angle = self.turn * np.arctan2(xyz_mm[:, 1], xyz_mm[:, 0])
        along, depth = self.face.along_mm(xyz_mm), -self.side * self.face.above_mm(xyz_mm)
        if self.map is ConeMap.POLAR:
            x, y = self.true_radius_mm * angle, along
        else:
            rho, phi = along + self.slant_mm, angle * abs(self.sine)
            x = math.copysign(1.0, self.slant_mm) * rho * np.sin(phi)
            y = rho * np.cos(phi) - self.slant_mm
        return np.column_stack([x + 0.5 * self.size_mm[0], y + 0.5 * self.size_mm[1], depth])

    def edge_sag_mm(self) -> tuple[float, float]:
        """Returns how far the ends of the sheet's lower and upper edge lie above its middle along the meridian, in mm.

        sqrt((W/2)^2 + rho^2) - |rho| with the sign of rho, the slant at the middle of the edge; 0 on the polar map.
        """
        width, height = self.size_mm
        edges = np.array([[0.0, 0.0], [0.5 * width, 0.0], [0.0, height], [0.5 * width, height]])
        along = self.along_mm(edges)
        return float(along[0] - along[1]), float(along[2] - along[3])

    def sheet_z_mm(self) -> tuple[float, float]:
        """Returns the lowest and the highest z the sheet reaches, on its face and at `depth_mm`."""
        width, height = self.size_mm
        along = self.along_mm(np.array([[x, y] for x in (0.0, 0.5 * width) for y in (0.0, height)]))
        rise = self.side * self.depth_mm * self.sine
        low, high = float(along.min()) * self.cosine, float(along.max()) * self.cosine
        return low + min(rise, 0.0), high + max(rise, 0.0)


def make_cone(
    settings: ConeSettings,
    size_mm: tuple[float, float],
    seen_from: SeenFrom,
    depth_mm: float,
    seam: Seam = Seam.OPEN,
) -> ConeCarrier:
    """Returns the cone carrier of a job.

    Args:
        settings: the [carrier] table.
        size_mm: width and height of the sheet.
        seen_from: from which side the drawing reads.
        depth_mm: depth of the centrelines below the face.
        seam: joined: the sheet goes all the way round on the polar map and is stretched to close exactly.

    Raises:
        SettingError: `carrier-not-positive` when radius, depth or sheet size is not a positive number;
            `seam-needs-polar` when a flat map is to close.
        GeometryError: `sheet-past-apex` when the face's narrow edge comes too near to the apex;
            `depth-past-axis` when the centreline there reaches the axis; `sheet-wraps-past-itself`; `seam-width`.

    >>> cone = ConeSettings(radius_mm=30.0, half_angle_deg=10.0, metal=Metal.TOWARD_AXIS)
    >>> round(make_cone(cone, (60.0, 40.0), SeenFrom.PART, 8.0).true_radius_mm, 6)
    22.121538
    """
    require_positive(settings.radius_mm, size_mm, depth_mm)
    toward = settings.metal is Metal.TOWARD_AXIS
    from_outside = toward == (seen_from is SeenFrom.PART)
    carrier = ConeCarrier(
        face=Cone(settings.radius_mm, math.radians(settings.half_angle_deg)),
        metal=settings.metal,
        map=settings.map,
        true_depth_mm=depth_mm if settings.true_at is TrueAt.DEPTH else 0.0,
        size_mm=size_mm,
        turn=1.0 if from_outside else -1.0,
        depth_mm=depth_mm,
    )
    _require_clear(carrier)
    if seam is Seam.JOINED:
        carrier = _closed(carrier)
    _require_one_turn(carrier)
    return carrier


def _closed(carrier: ConeCarrier) -> ConeCarrier:
    """Returns the carrier stretched around the axis so that its sheet closes exactly."""
    if carrier.map is ConeMap.FLAT:
        raise SettingError(
            "seam-needs-polar",
            expected='map = "polar" on a cone, where both edges of the sheet are the same meridian',
            found='map = "flat"',
            where='[layout] seam = "joined" on [carrier]',
            do='Set [carrier] map = "polar", or [layout] seam = "open".',
        )
    radius_mm = closed_radius_mm(carrier.size_mm[0], carrier.true_radius_mm, "at the sheet's centre")
    return replace(carrier, closed_mm=radius_mm)


def _require_clear(carrier: ConeCarrier) -> None:
    """Raises unless the narrow edge of the sheet stays clear of the apex on the face and of the axis at depth."""
    narrow = -math.copysign(0.5 * carrier.size_mm[1], carrier.sine)
    face_mm, deep_mm = (float(carrier.radius_at_mm(np.array(narrow), d)) for d in (0.0, carrier.depth_mm))
    if face_mm < LEAST_RADIUS_MM:
        raise GeometryError(
            "sheet-past-apex",
            expected=f"a face radius of at least {LEAST_RADIUS_MM:.1f} mm under the whole sheet",
            found=f"{face_mm:.3f} mm at the sheet's {'lower' if narrow < 0.0 else 'upper'} edge",
            where="[layout] size_mm on [carrier]",
            do="Make the sheet lower, raise radius_mm, or check the sign of half_angle_deg (above 0 widens upwards).",
        )
    if deep_mm < LEAST_RADIUS_MM:
        most = (face_mm - LEAST_RADIUS_MM) / carrier.cosine
        raise GeometryError(
            "depth-past-axis",
            expected=f"at most {most:.3f} mm (face radius {face_mm:.3f} mm at the sheet's narrow edge less "
            f"{LEAST_RADIUS_MM:.1f} mm clear of the axis, along the normal)",
            found=f"a channel depth of {carrier.depth_mm:.3f} mm",
            where="[carrier] depth",
            do="Lower depth_mm or wall_to_face_mm, make the sheet lower, or raise radius_mm.",
        )


def _require_one_turn(carrier: ConeCarrier) -> None:
    width, height = carrier.size_mm
    narrow = 0.0 if carrier.sine > 0.0 else height
    half_turn = float(np.abs(carrier.angle_rad(np.array([[0.0, narrow]])))[0])
    if half_turn <= math.pi * (1.0 + TURN_SLACK):
        return
    if carrier.map is ConeMap.POLAR:
        most_mm = carrier.turn_mm
    else:
        # a half turn is less than a quarter of the plane here: wider sectors hold any width
        most_mm = 2.0 * (abs(carrier.slant_mm) - 0.5 * height) * math.tan(math.pi * abs(carrier.sine))
    raise GeometryError(
        "sheet-wraps-past-itself",
        expected=f"at most {most_mm:.3f} mm, one turn "
        + ("at the sheet's centre" if carrier.map is ConeMap.POLAR else "at the sheet's narrow edge"),
        found=f"a sheet {width:.3f} mm wide, {math.degrees(2.0 * half_turn):.1f} degrees around the axis",
        where="[layout] size_mm on [carrier]",
        do="Narrow the sheet, raise radius_mm, or keep lengths true at the larger of face and depth (true_at).",
    )
