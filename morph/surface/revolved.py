"""A carrier of revolution about the z axis: a smooth profile turned once round.

The profile is a cubic spline through the given points (r, z), upwards, over its chord length. Sheet y runs along the
meridian and keeps its lengths there at the true depth (or at the face); sheet x runs around and keeps its lengths on
the parallel through the sheet's centre, elsewhere it stretches by radius over that radius. The sheet's centre lies at
angle 0 (+x) where the profile crosses z = 0.

With T the unit meridian tangent and N the unit normal out of the metal, dN = k T along the meridian; offset by d into
the metal a meridian length shrinks by 1 - k d (do Carmo, Differential Geometry of Curves and Surfaces, 1976,
section 3-3, surfaces of revolution). Limits: one turn, a sheet on the profile, a depth before the focus and the axis.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import GeometryError, SettingError
from morph.settings.job import Metal, RevolvedSettings, Seam, SeenFrom, TrueAt
from morph.surface.limits import LEAST_RADIUS_MM, TURN_SLACK, closed_radius_mm, require_positive

STEPS = 64
"""Steps of the table per span of the profile, from which Newton's method starts."""
NEWTON = 30
WHERE = "[carrier] profile_mm"


@dataclass(frozen=True, slots=True, eq=False)
class Profile:
    """The smooth curve (r, z) through the given points, by its chord length t in mm."""

    points_mm: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "points_mm", frozen_floats("points_mm", self.points_mm, (None, 2)))

    def chords_mm(self) -> Floats:
        """Returns the chord length (n,) at every given point, 0 at the first."""
        return np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(self.points_mm, axis=0), axis=1))])

    def _spline(self) -> Any:
        from scipy.interpolate import CubicSpline

        return CubicSpline(
            self.chords_mm(), self.points_mm, bc_type="natural" if len(self.points_mm) < 4 else "not-a-knot"
        )

    def table_mm(self) -> Floats:
        """Returns closely spaced chord lengths (m,) over the whole profile."""
        chords = self.chords_mm()
        share = np.arange(STEPS) / STEPS
        inner = (chords[:-1, None] + np.diff(chords)[:, None] * share).ravel()
        return np.append(inner, chords[-1])

    def at(self, t_mm: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """Returns point (k, 2), unit tangent (k, 2), speed (k,) and curvature (k,), positive where convex."""
        spline = self._spline()
        point, first, second = (np.asarray(spline(t_mm, order), dtype=np.float64) for order in range(3))
        speed = np.linalg.norm(first, axis=1)
        bend = (second[:, 1] * first[:, 0] - second[:, 0] * first[:, 1]) / speed**3
        return point, first / speed[:, None], speed, bend

    def nearest(self, radial_mm: Floats) -> tuple[Floats, Floats]:
        """Returns the chord length (k,) and the signed distance (k,), positive away from the axis, of points (k, 2)."""
        from scipy.spatial import KDTree

        table = self.table_mm()
        start = KDTree(self.at(table)[0]).query(radial_mm)[1]
        low, high = table[np.maximum(start - 1, 0)], table[np.minimum(start + 1, len(table) - 1)]
        t = table[start]
        for _ in range(NEWTON):
            point, tangent, speed, bend = self.at(t)
            off = radial_mm - point
            along = (off * tangent).sum(axis=1)
            out = off[:, 0] * tangent[:, 1] - off[:, 1] * tangent[:, 0]
            step = along / (speed * np.maximum(1.0 + bend * out, 0.05))
            t = np.clip(t + step, low, high)
            if float(np.abs(step).max(initial=0.0)) < 1e-13:
                break
        point, tangent, _, _ = self.at(t)
        off = radial_mm - point
        side = np.where(off[:, 0] * tangent[:, 1] - off[:, 1] * tangent[:, 0] >= 0.0, 1.0, -1.0)
        return t, np.asarray(side * np.linalg.norm(off, axis=1), dtype=np.float64)


@dataclass(frozen=True, slots=True, eq=False)
class RevolvedCarrier:
    """The Carrier of a core of revolution (metal toward the axis) or of a jacket or cavity (away from it).

    Args:
        profile: the finished part face.
        metal: on which side of it the metal lies.
        true_depth_mm: depth at which the meridian keeps its lengths.
        true_radius_mm: radius of the parallel that keeps its lengths, through the sheet's centre at that depth.
        centre_mm: chord length of the profile where it crosses z = 0.
        size_mm: width and height of the sheet.
        turn: +1 when sheet x grows with the angle about z, -1 when it falls.
        depth_mm: depth of the centrelines the sheet is laid for.
    """

    profile: Profile
    metal: Metal
    true_depth_mm: float
    true_radius_mm: float
    centre_mm: float
    size_mm: tuple[float, float]
    turn: float
    depth_mm: float

    @property
    def side(self) -> float:
        """Returns +1 when a point deeper in the metal is nearer to the axis, else -1."""
        return 1.0 if self.metal is Metal.TOWARD_AXIS else -1.0

    @property
    def turn_mm(self) -> float:
        """Returns the sheet width of one turn."""
        return 2.0 * math.pi * self.true_radius_mm

    def _meridian_mm(self, t_mm: Floats) -> Floats:
        """Returns sheet y from the centre (k,) at chord lengths (k,): the meridian's length at the true depth.

        By Gauss quadrature of 10 points on each step of the profile's table, exact to about 1e-12 mm.
        """
        table = self.profile.table_mm()
        node, weight = np.polynomial.legendre.leggauss(10)

        def length(low: Floats, high: Floats) -> Floats:
            half = 0.5 * (high - low)
            places = (low + half)[:, None] + half[:, None] * node
            _, _, speed, bend = self.profile.at(places.ravel())
            rate = (speed * (1.0 - self.side * bend * self.true_depth_mm)).reshape(places.shape)
            return np.asarray(half * (rate @ weight), dtype=np.float64)

        whole = np.concatenate([[0.0], np.cumsum(length(table[:-1], table[1:]))])
        both = np.append(t_mm, self.centre_mm)
        k = np.clip(np.searchsorted(table, both, side="right") - 1, 0, len(table) - 2)
        reached = whole[k] + length(table[k], both)
        return np.asarray(reached[:-1] - reached[-1], dtype=np.float64)

    def chord_mm(self, sheet_mm: Floats) -> Floats:
        """Returns the chord length (k,) of the profile at sheet points (k, 2), by Newton's method."""
        wanted = sheet_mm[:, 1] - 0.5 * self.size_mm[1]
        table = self.profile.table_mm()
        t = np.interp(wanted, self._meridian_mm(table), table)
        for _ in range(NEWTON):
            _, _, speed, bend = self.profile.at(t)
            step = (wanted - self._meridian_mm(t)) / (speed * (1.0 - self.side * bend * self.true_depth_mm))
            t = t + step
            if float(np.abs(step).max(initial=0.0)) < 1e-12:
                break
        return np.asarray(t, dtype=np.float64)

    def angle_rad(self, sheet_mm: Floats) -> Floats:
        """Returns the angle (k,) about z of the sheet points (k, 2)."""
        return np.asarray(self.turn * (sheet_mm[:, 0] - 0.5 * self.size_mm[0]) / self.true_radius_mm, dtype=np.float64)

    def point_mm(self, sheet_mm: Floats, depth_mm: float | Floats) -> Floats:
        """Returns the points (k, 3) that lie `depth_mm` (one number or (k,)) below the sheet points (k, 2)."""
        point, tangent, _, _ = self.profile.at(self.chord_mm(sheet_mm))
        angle, inward = self.angle_rad(sheet_mm), -self.side * np.asarray(depth_mm, dtype=np.float64)
        radius, height = point[:, 0] + inward * tangent[:, 1], point[:, 1] - inward * tangent[:, 0]
        return np.column_stack([radius * np.cos(angle), radius * np.sin(angle), height])

    def into_metal(self, sheet_mm: Floats) -> Floats:
        """Returns the unit vectors (k, 3) from the face into the metal."""
        _, tangent, _, _ = self.profile.at(self.chord_mm(sheet_mm))
        angle = self.angle_rad(sheet_mm)
        return -self.side * np.column_stack(
            [tangent[:, 1] * np.cos(angle), tangent[:, 1] * np.sin(angle), -tangent[:, 0]]
        )

    def jacobian(self, sheet_mm: Floats, depth_mm: float) -> Floats:
        """Returns d point / d (x, y) as (k, 3, 2), dimensionless, at `depth_mm`."""
        point, tangent, _, bend = self.profile.at(self.chord_mm(sheet_mm))
        angle, zero = self.angle_rad(sheet_mm), np.zeros(len(sheet_mm))
        radius = point[:, 0] - self.side * depth_mm * tangent[:, 1]
        around = (self.turn * radius / self.true_radius_mm)[:, None] * np.column_stack(
            [-np.sin(angle), np.cos(angle), zero]
        )
        scale = (1.0 - self.side * bend * depth_mm) / (1.0 - self.side * bend * self.true_depth_mm)
        up = scale[:, None] * np.column_stack(
            [tangent[:, 0] * np.cos(angle), tangent[:, 0] * np.sin(angle), tangent[:, 1]]
        )
        return np.stack([around, up], axis=2)

    def shape_operator(self, sheet_mm: Floats) -> Floats:
        """Returns S as (k, 2, 2) in 1/mm with J_d = J (I - d S): cosine / radius around, k along the meridian."""
        point, tangent, _, bend = self.profile.at(self.chord_mm(sheet_mm))
        result = np.zeros((len(sheet_mm), 2, 2))
        result[:, 0, 0] = self.side * tangent[:, 1] / point[:, 0]
        result[:, 1, 1] = self.side * bend
        return result

    def distance_mm(self, xyz_mm: Floats) -> Floats:
        """Returns the signed distance (k,) of points (k, 3) from the face, positive in the metal."""
        radial = np.column_stack([np.hypot(xyz_mm[:, 0], xyz_mm[:, 1]), xyz_mm[:, 2]])
        return -self.side * self.profile.nearest(radial)[1]

    def develop(self, xyz_mm: Floats) -> Floats:
        """Returns sheet x, sheet y and depth (k, 3) of points (k, 3): the inverse of `point_mm`, angle in (-pi, pi]."""
        radial = np.column_stack([np.hypot(xyz_mm[:, 0], xyz_mm[:, 1]), xyz_mm[:, 2]])
        t, out = self.profile.nearest(radial)
        across = 0.5 * self.size_mm[0] + self.turn * self.true_radius_mm * np.arctan2(xyz_mm[:, 1], xyz_mm[:, 0])
        return np.column_stack([across, self._meridian_mm(t) + 0.5 * self.size_mm[1], -self.side * out])


def make_revolved(
    settings: RevolvedSettings,
    size_mm: tuple[float, float],
    seen_from: SeenFrom,
    depth_mm: float,
    seam: Seam = Seam.OPEN,
) -> RevolvedCarrier:
    """Returns the revolved carrier of a job.

    Args:
        settings: the [carrier] table.
        size_mm: width and height of the sheet.
        seen_from: from which side the drawing reads.
        depth_mm: depth of the centrelines below the face.
        seam: joined: the sheet goes all the way round and is stretched to close exactly.

    Raises:
        SettingError: `carrier-not-positive`, `profile-not-a-curve`.
        GeometryError: `profile-misses-centre`, `sheet-past-profile`, `depth-past-focus`, `depth-past-axis`,
            `depth-meets-other-face`, `sheet-wraps-past-itself`, `seam-width`.

    >>> tube = RevolvedSettings(((30.0, -40.0), (30.0, 0.0), (30.0, 40.0)), Metal.TOWARD_AXIS)
    >>> round(make_revolved(tube, (60.0, 40.0), SeenFrom.PART, 8.0).true_radius_mm, 9)
    22.0
    """
    require_positive(1.0, size_mm, depth_mm)
    profile = Profile(_require_curve(settings))
    from_outside = (settings.metal is Metal.TOWARD_AXIS) == (seen_from is SeenFrom.PART)
    carrier = RevolvedCarrier(
        profile=profile,
        metal=settings.metal,
        true_depth_mm=depth_mm if settings.true_at is TrueAt.DEPTH else 0.0,
        true_radius_mm=1.0,
        centre_mm=_centre_mm(profile),
        size_mm=size_mm,
        turn=1.0 if from_outside else -1.0,
        depth_mm=depth_mm,
    )
    require_laid(carrier)
    centre = profile.at(np.array([carrier.centre_mm]))
    radius = float(centre[0][0, 0] - carrier.side * carrier.true_depth_mm * centre[1][0, 1])
    if seam is Seam.JOINED:
        radius = closed_radius_mm(size_mm[0], radius, "at the sheet's centre")
    carrier = replace(carrier, true_radius_mm=radius)
    if size_mm[0] > carrier.turn_mm * (1.0 + TURN_SLACK):
        raise GeometryError(
            "sheet-wraps-past-itself",
            expected=f"at most {carrier.turn_mm:.3f} mm, one turn at the sheet's centre",
            found=f"a sheet {size_mm[0]:.3f} mm wide",
            where="[layout] size_mm on [carrier]",
            do="Narrow the sheet, or keep lengths true at the larger of face and depth (true_at).",
        )
    return carrier


def _require_curve(settings: RevolvedSettings) -> Floats:
    points = np.array(settings.profile_mm, dtype=np.float64).reshape(-1, 2)
    usable = len(points) >= 2 and bool(np.isfinite(points).all()) and float(points[:, 0].min()) > 0.0
    if not usable or float(np.diff(points[:, 1]).min()) < 0.0 or not np.diff(points, axis=0).any(axis=1).all():
        raise SettingError(
            "profile-not-a-curve",
            expected="two or more different points [r, z] in mm, r above 0, z never falling",
            found=f"{len(points)} {'point' if len(points) == 1 else 'points'}: {np.round(points[:4], 3).tolist()}",
            where=WHERE,
            do="Give the meridian of the part face from the lowest point upwards.",
        )
    return points


def _centre_mm(profile: Profile) -> float:
    from scipy.optimize import brentq

    table = profile.table_mm()
    height = profile.at(table)[0][:, 1]
    crossing = np.flatnonzero((height[:-1] <= 0.0) & (height[1:] >= 0.0))
    if len(crossing) == 0:
        raise GeometryError(
            "profile-misses-centre",
            expected="a profile that crosses z = 0, where the sheet's centre lies",
            found=f"heights from {height.min():.3f} to {height.max():.3f} mm",
            where=WHERE,
            do="Move the profile (and the rest of the part) along z so that z = 0 lies where the sheet's centre goes.",
        )
    k = int(crossing[0])
    return float(brentq(lambda t: float(profile.at(np.array([t]))[0][0, 1]), table[k], table[k + 1], xtol=1e-13))


def require_laid(carrier: RevolvedCarrier) -> None:
    """Raises unless the sheet lies on the profile, before each focus, off the axis and nearest to its own face."""
    table, half = carrier.profile.table_mm(), 0.5 * carrier.size_mm[1]
    point, tangent, _, bend = carrier.profile.at(table)
    deepest = max(carrier.depth_mm, carrier.true_depth_mm)
    shrink = 1.0 - carrier.side * bend * deepest
    # only what lies under the sheet counts; past a focus the meridian has no length to tell that by
    reach = np.interp(table, table, np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(point, axis=0), axis=1))]))
    along = reach - float(np.interp(carrier.centre_mm, table, reach))
    if shrink.min() > 0.0:
        along = carrier._meridian_mm(table)
    under = np.abs(along) <= half

    def place(k: int) -> str:
        return f"{WHERE}, r = {point[k, 0]:.3f} mm, z = {point[k, 1]:.3f} mm"

    if shrink[under].min() <= 0.0:
        k = int(np.flatnonzero(under)[shrink[under].argmin()])
        raise GeometryError(
            "depth-past-focus",
            expected=f"a profile nowhere rounder than the depth of {deepest:.3f} mm under the sheet",
            found=f"a radius of {1.0 / abs(bend[k]):.3f} mm",
            where=place(k),
            do="Lower the depth below that radius, or round the profile more.",
        )
    if along[0] > -half * (1.0 - 1e-9) or along[-1] < half * (1.0 - 1e-9):
        raise GeometryError(
            "sheet-past-profile",
            expected=f"a sheet that reaches at most {-along[0]:.3f} mm below and {along[-1]:.3f} mm above its centre",
            found=f"{half:.3f} mm to each side",
            where="[layout] size_mm on [carrier] profile_mm",
            do="Make the sheet lower, or give more of the profile.",
        )
    radius = point[:, 0] - carrier.side * carrier.depth_mm * tangent[:, 1]
    if radius[under].min() < LEAST_RADIUS_MM:
        k = int(np.flatnonzero(under)[radius[under].argmin()])
        raise GeometryError(
            "depth-past-axis",
            expected=f"centrelines at least {LEAST_RADIUS_MM:.1f} mm clear of the axis",
            found=f"a radius of {radius[k]:.3f} mm at {carrier.depth_mm:.3f} mm depth",
            where=place(k),
            do="Lower the depth, or move the sheet away from the narrow place.",
        )
    deep = np.column_stack([radius, point[:, 1] + carrier.side * carrier.depth_mm * tangent[:, 0]])[under]
    short = carrier.depth_mm - np.abs(carrier.profile.nearest(deep)[1])
    if short.max() > 1e-3:
        k = int(np.flatnonzero(under)[short.argmax()])
        raise GeometryError(
            "depth-meets-other-face",
            expected=f"no other part of the profile nearer to the channels than the depth of {carrier.depth_mm:.3f} mm",
            found=f"one {carrier.depth_mm - short.max():.3f} mm away",
            where=place(k),
            do="Lower the depth, or widen the narrow place.",
        )
