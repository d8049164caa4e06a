"""What an engineer gets from libraries alone: threshold, thin, trace, tubes, boolean, STL.

No roofs, no walls, no fits, no checks, no report: the yardstick of the timing ratios. scikit-image
thresholds and thins, skan traces, trimesh makes 32-sided tubes along the polylines, joins them, cuts
them from a cylinder (with manifold3d underneath) and writes the file. Either every branch is swept with
one bore, which is quickest and loses the layout's widths, or every piece of polyline is a tube of its
own bore with a ball at each joint, as the layout has it.
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


def plain_build(density, size_mm, radius, depth, bore=None, margin_mm=(10.0, 10.0)) -> PlainResult:
    """Returns the insert of a cylinder core, channels `depth` below its face.

    Args:
        density: (rows, columns) 0..1, row 0 at the bottom; ports on the bottom edge.
        size_mm: width and height of the sheet, true at depth.
        radius, depth: of the core and of the centrelines, mm.
        bore: of all channels, mm; without it each has its own, from the distance to the nearest metal.
        margin_mm: metal below and above the sheet.
    """
    watch = Stopwatch()
    paths, widths = _trace(density, size_mm)
    if bore is not None:
        widths = [np.full(len(path), bore) for path in paths]
    watch.lap("layout")
    foot = -0.5 * size_mm[1] - margin_mm[0]
    tubes = [(_wrap(path, size_mm, radius - depth), width) for path, width in zip(paths, widths, strict=True)]
    tubes += [_lead(*tube, foot) for tube in tubes if _touches_bottom(*tube, size_mm[1])]
    watch.lap("surface")
    bodies = _swept(tubes) if bore is not None else _piecewise(tubes)
    insert, channels = _cut(bodies, radius, foot, 0.5 * size_mm[1] + margin_mm[1])
    watch.lap("solid")
    stl = insert.export(file_type="stl")
    watch.lap("export")
    return PlainResult(stl, watch.seconds, float(channels.volume), len(insert.faces))


def _trace(density, size_mm):
    from scipy.ndimage import distance_transform_edt
    from skan import Skeleton
    from skimage.morphology import skeletonize
    from skimage.transform import resize

    fine = resize(np.asarray(density, dtype=np.float64), np.multiply(density.shape, ENLARGE), order=1, mode="edge")
    width = 2.0 * distance_transform_edt(fine > 0.5)
    skeleton = Skeleton(skeletonize(fine > 0.5))
    pixel = np.divide(size_mm, fine.shape[::-1])
    paths, widths = [], []
    for index in range(skeleton.n_paths):
        pixels = skeleton.path_coordinates(index)
        keep = np.unique(np.append(np.arange(0, len(pixels), POINT_SPACING_PIXELS), len(pixels) - 1))
        if len(keep) > 1:
            paths.append((pixels[keep][:, ::-1] + 0.5) * pixel)
            widths.append(width[tuple(pixels[keep].T)] * pixel[0])
    return paths, widths


def _wrap(path, size_mm, radius):
    angle = (path[:, 0] - 0.5 * size_mm[0]) / radius
    return np.column_stack([radius * np.cos(angle), radius * np.sin(angle), path[:, 1] - 0.5 * size_mm[1]])


def _touches_bottom(line, width, height):
    return line[[0, -1], 2].min() < -0.5 * height + width.max()


def _lead(line, width, foot):
    end = 0 if line[0, 2] < line[-1, 2] else -1
    below = [line[end, 0], line[end, 1], foot - width[end]]
    return np.array([line[end], below]), np.full(2, width[end])


def _swept(tubes):
    import shapely
    import trimesh

    turn = 2.0 * np.pi * np.arange(SIDES) / SIDES
    ring = np.column_stack([np.cos(turn), np.sin(turn)])
    bodies = [trimesh.creation.sweep_polygon(shapely.Polygon(0.5 * width[0] * ring), line) for line, width in tubes]
    ends = {(*np.round(line[end], 6), width[end]) for line, width in tubes for end in (0, -1)}
    return bodies + [_ball(end[:3], end[3]) for end in sorted(ends)]


def _piecewise(tubes):
    import trimesh

    bodies = []
    for line, width in tubes:
        for here, there, one, other in zip(line, line[1:], width, width[1:], strict=False):
            tube = trimesh.creation.cylinder(0.25 * (one + other), segment=[here, there], sections=SIDES)
            bodies += [tube, _ball(here, one)]
        bodies.append(_ball(line[-1], width[-1]))
    return bodies


def _ball(centre, width):
    import trimesh

    return trimesh.creation.uv_sphere(0.5 * width, count=[SIDES // 2, SIDES]).apply_translation(centre)


def _cut(bodies, radius, foot, top):
    import trimesh

    channels = trimesh.boolean.union(bodies, engine="manifold", check_volume=False)
    middle = trimesh.transformations.translation_matrix([0.0, 0.0, 0.5 * (foot + top)])
    blank = trimesh.creation.cylinder(radius, top - foot, sections=256, transform=middle)
    return trimesh.boolean.difference([blank, channels], engine="manifold", check_volume=False), channels
