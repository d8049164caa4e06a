"""Ends without a place confirmed by other means: random places all over the flat port faces."""

from __future__ import annotations

import re

import numpy as np

from tests.body.lead_oracle import BAND_MM, WALL_MM, face_distance, hole_distance


def samples_find_no_place(scene, error, n=6000):
    """Whether none of `n` random places on the flat port faces has room for the land and the cut of an end.

    Their sizes are those the error says; channels and other ends are left aside, so True is strong, False says nothing.
    """
    land_mm, cut_mm, depth_mm = map(float, re.findall(r"(\d+\.\d+) mm (?:across|deep)", error.expected))
    rng, blank = np.random.default_rng(1), scene.blank
    wide = 2.0 * scene.radius_mm + 60.0
    turn = np.linspace(0.0, 2.0 * np.pi, 24, endpoint=False)
    for face in (face for face in blank.faces if face.role == "port" and hasattr(face, "origin_mm")):
        first = np.cross(face.normal, [0.3, 0.5, 0.8])
        first /= np.linalg.norm(first)
        ring = np.cos(turn)[:, None] * first + np.sin(turn)[:, None] * np.cross(face.normal, first)
        places = rng.uniform(-wide, wide, (n, 3)) * [1.0, 1.0, 0.0] + [0.0, 0.0, 1.0] * rng.uniform(*blank.z_mm, (n, 1))
        places = places + face_distance(face, places)[:, None] * face.normal
        land = places[:, None] + 0.5 * land_mm * ring
        depths = np.linspace(0.0, depth_mm, 8)[:, None, None, None] * face.normal
        cut = (places[:, None] + 0.5 * cut_mm * ring)[None] - depths
        free = np.ones(n, dtype=bool)
        for other in (other for other in blank.faces if other.name != face.name):
            free &= face_distance(other, land.reshape(-1, 3)).reshape(n, -1).min(axis=1) >= 0.0
            free &= _least(lambda p, f=other: face_distance(f, p), cut) >= WALL_MM + BAND_MM
        for hole in blank.holes:
            free &= hole_distance(hole, land.reshape(-1, 3)).reshape(n, -1).min(axis=1) >= 0.0
            free &= _least(lambda p, h=hole: hole_distance(h, p), cut) >= hole.wall_mm + BAND_MM
        if free.any():
            return False
    return True


def _least(distance, points):
    """The least distance over points (depths, n, ring, 3) for each of n places."""
    return distance(points.reshape(-1, 3)).reshape(points.shape[:-1]).min(axis=(0, 2))
