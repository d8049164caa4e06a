"""What an engineer gets from libraries alone: threshold, thin, trace, tubes, boolean, STL.

No roofs, no walls, no fits, no checks, no report: the yardstick of the timing ratios. scikit-image
thresholds and thins, skan traces, trimesh sweeps 32-sided tubes of one bore, joins them, cuts them from
a cylinder (with manifold3d underneath) and writes the file.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field

import numpy as np

SIDES = 32
ENLARGE = 4
POINT_SPACING_PIXELS = 6


@dataclass
class Stopwatch:
    """Seconds per stage, in the order they ran."""

    seconds: dict[str, float] = field(default_factory=dict)
    _last: float = field(default_factory=time.perf_counter)

    def lap(self, name: str) -> None:
        now = time.perf_counter()
        self.seconds[name] = now - self._last
        self._last = now


@dataclass
class PlainResult:
    """The binary STL, seconds per stage, and the channel volume for a sanity check."""

    stl: bytes
    seconds: dict[str, float]
    channel_volume_mm3: float
    triangles: int


def plain_build(density, size_mm, radius, depth, bore, margin_mm=(10.0, 10.0)) -> PlainResult:
    """Returns the insert of a cylinder core, channels `depth` below its face, all of one `bore` (mm).

    Args:
        density: (rows, columns) 0..1, row 0 at the bottom; ports on the bottom edge.
        size_mm: width and height of the sheet, true at depth.
        radius, depth, bore: of core, centrelines and channels.
        margin_mm: metal below and above the sheet.
    """
    watch = Stopwatch()
    paths = _trace(density, size_mm)
    watch.lap("layout")
    foot = -0.5 * size_mm[1] - margin_mm[0]
    lines = [_wrap(path, size_mm, radius - depth) for path in paths]
    lines += [_lead(line, size_mm[1], foot, bore) for line in lines if _touches_bottom(line, size_mm[1], bore)]
    watch.lap("surface")
    insert, channels = _cut(lines, radius, bore, foot, 0.5 * size_mm[1] + margin_mm[1])
    watch.lap("solid")
    stl = _write(insert)
    watch.lap("export")
    return PlainResult(stl, watch.seconds, float(channels.volume), len(insert.faces))


def _trace(density, size_mm):
    from skan import Skeleton
    from skimage.morphology import skeletonize
    from skimage.transform import resize

    fine = resize(np.asarray(density, dtype=np.float64), np.multiply(density.shape, ENLARGE), order=1, mode="edge")
    skeleton = Skeleton(skeletonize(fine > 0.5))
    pixel = np.divide(size_mm, fine.shape[::-1])
    paths = []
    for index in range(skeleton.n_paths):
        pixels = skeleton.path_coordinates(index)
        keep = np.unique(np.append(np.arange(0, len(pixels), POINT_SPACING_PIXELS), len(pixels) - 1))
        if len(keep) > 1:
            paths.append((pixels[keep][:, ::-1] + 0.5) * pixel)
    return paths


def _wrap(path, size_mm, radius):
    angle = (path[:, 0] - 0.5 * size_mm[0]) / radius
    return np.column_stack([radius * np.cos(angle), radius * np.sin(angle), path[:, 1] - 0.5 * size_mm[1]])


def _touches_bottom(line, height, bore):
    return line[[0, -1], 2].min() < -0.5 * height + bore


def _lead(line, height, foot, bore):
    end = line[0] if line[0, 2] < line[-1, 2] else line[-1]
    return np.array([end, [end[0], end[1], foot - bore]])


def _cut(lines, radius, bore, foot, top):
    import shapely
    import trimesh

    turn = 2.0 * np.pi * np.arange(SIDES) / SIDES
    disc = shapely.Polygon(0.5 * bore * np.column_stack([np.cos(turn), np.sin(turn)]))
    bodies = [trimesh.creation.sweep_polygon(disc, line) for line in lines]
    ball = trimesh.creation.icosphere(3, 0.5 * bore)
    ends = {tuple(np.round(point, 6)) for line in lines for point in (line[0], line[-1])}
    bodies += [ball.copy().apply_translation(point) for point in sorted(ends)]
    channels = trimesh.boolean.union(bodies, engine="manifold", check_volume=False)
    middle = trimesh.transformations.translation_matrix([0.0, 0.0, 0.5 * (foot + top)])
    blank = trimesh.creation.cylinder(radius, top - foot, sections=256, transform=middle)
    return trimesh.boolean.difference([blank, channels], engine="manifold", check_volume=False), channels


def _write(insert):
    return insert.export(file_type="stl")
