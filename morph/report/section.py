"""The section through the worst wall: which wall that is, the plane that shows it, and its cut.

The worst wall is the first in headline order (a fail before a watch before a pass), then channels
that run together, then the one with the least share of its limit left after its band. Its verdict
gives the middle of the metal; the plane goes through that point, contains the direction of the wall
and stands as square to the channel as that allows, so that the thickness is seen in its true length.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.arrays import Floats, frozen_floats
from morph.core.verdict import HEADLINE_ORDER, Outcome, Verdict
from morph.report.cut import Loop, Plane, cut_mesh
from morph.solid.result import Insert

MERGE = "branches-merge"
"""The verdict of channels that run together: a wall of nothing."""

CHANNEL = 1
"""The label of channel wall on the insert's triangles."""

FLATTEST_UP = 0.3
"""The build direction is drawn upwards when at least this much of it lies in the plane."""


@dataclass(frozen=True, slots=True, eq=False)
class Crossing:
    """Where a branch passes through the plane of a cut: its id and `at_mm (2,)` in drawing coordinates."""

    branch: str
    at_mm: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "at_mm", frozen_floats("at_mm", self.at_mm, (2,)))


@dataclass(frozen=True, slots=True, eq=False)
class WallSection:
    """A cut through the insert that shows one wall in its true length.

    Args:
        verdict: the wall's verdict. plane: where the cut was made; its origin is the middle of the metal.
        loops: the outlines of the written insert, label 1 where they are channel wall.
        crossings: where branches pass through the plane, in plan order.
        named: the branches the verdict names, at their cut beside the wall; the first is the one dimensioned.
        channel_side_mm, far_side_mm: (2,) the ends of the wall in drawing coordinates.
        bore_mm: bore of the channel beside it.
        build_is_up: the build direction is drawn upwards; else the cut is seen along it.
    """

    verdict: Verdict
    plane: Plane
    loops: tuple[Loop, ...]
    crossings: tuple[Crossing, ...]
    channel_side_mm: Floats
    far_side_mm: Floats
    bore_mm: float
    build_is_up: bool
    named: tuple[Crossing, ...] = ()

    def __post_init__(self) -> None:
        for name in ("channel_side_mm", "far_side_mm"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (2,)))

    @property
    def drawn_mm(self) -> float:
        """The length of the wall as drawn."""
        return float(np.linalg.norm(self.far_side_mm - self.channel_side_mm))

    @property
    def overlaps(self) -> bool:
        """Whether the channels run into each other, so that there is no wall to draw."""
        return self.verdict.value is not None and self.verdict.value <= 0.0


def wall_after_band_mm(verdict: Verdict) -> float:
    """Returns the wall of a verdict less its band, in mm; infinite when it has no figure."""
    return np.inf if verdict.value is None else verdict.value - verdict.band


def margin_ratio(verdict: Verdict) -> float:
    """Returns the wall after its band over its limit; where there is no limit, the wall itself in mm."""
    return wall_after_band_mm(verdict) / (verdict.limit or 1.0)


def wall_verdicts(verdicts: tuple[Verdict, ...]) -> list[Verdict]:
    """Returns the verdicts that give a wall thickness and its place, the worst first."""
    walls = [
        v
        for v in verdicts
        if (v.code.startswith("wall-") or v.code == MERGE)
        and v.unit == "mm"
        and v.value is not None
        and v.xyz_mm is not None
        and v.outcome is not Outcome.NOT_CHECKED
    ]
    return sorted(walls, key=lambda v: (HEADLINE_ORDER[v.outcome], v.code != MERGE, margin_ratio(v)))


def _nearest_sample(plan: ChannelPlan, branch_ids: tuple[str, ...], point: Floats) -> tuple[Floats, Floats, float]:
    """Returns centre, unit tangent and bore where the first named branch (or any) is nearest to `point (3,)`."""
    named = [b for b in plan.branches if b.id in branch_ids[:1]] or list(plan.branches)
    gap = [float(np.linalg.norm(b.xyz_mm - point, axis=1).min()) for b in named]
    branch = named[int(np.argmin(gap))]
    index = int(np.argmin(np.linalg.norm(branch.xyz_mm - point, axis=1)))
    before, after = max(index - 1, 0), min(index + 1, len(branch.xyz_mm) - 1)
    step = branch.xyz_mm[after] - branch.xyz_mm[before]
    length = float(np.linalg.norm(step))
    tangent = step / length if length > 0.0 else np.array([0.0, 0.0, 1.0])
    return branch.xyz_mm[index], tangent, float(branch.bore_mm[index])


def _any_square(direction: Floats) -> Floats:
    """Returns a unit vector square to `direction (3,)`."""
    other = np.cross(direction, np.eye(3)[int(np.argmin(np.abs(direction)))])
    return np.asarray(other / np.linalg.norm(other), dtype=np.float64)


def section_plane(middle_mm: Floats, centre_mm: Floats, tangent: Floats, build_direction: Floats) -> tuple[Plane, bool]:
    """Returns the plane through `middle_mm` and `centre_mm` that is most square to `tangent`.

    Args:
        middle_mm: (3,) a point in the wall.
        centre_mm: (3,) the channel's centre beside it.
        tangent: (3,) unit direction of the channel.
        build_direction: (3,) unit; drawn upwards when enough of it lies in the plane.

    Returns:
        the plane with its axes as drawn, and whether the build direction is up.
    """
    toward = middle_mm - centre_mm
    reach = float(np.linalg.norm(toward))
    wall = toward / reach if reach > 1e-9 else _any_square(tangent)
    normal = tangent - (tangent @ wall) * wall
    size = float(np.linalg.norm(normal))
    normal = normal / size if size > 1e-6 else _any_square(wall)
    up = build_direction - (build_direction @ normal) * normal
    in_plane = float(np.linalg.norm(up))
    if in_plane >= FLATTEST_UP:
        up = up / in_plane
        return Plane(middle_mm, np.cross(up, normal), up), True
    # seen against the build direction, so that left and right are those of a plan view
    normal = normal if normal @ build_direction > 0.0 else -normal
    return Plane(middle_mm, wall, np.cross(normal, wall)), False


def _nearest_on_loops(loops: tuple[Loop, ...], label: int) -> Floats | None:
    """Returns the outline point (2,) of `label` that is nearest to the origin, or None."""
    best, found = np.inf, None
    for loop in loops:
        a, b = loop.points_mm, np.roll(loop.points_mm, -1, axis=0)
        a, b = a[loop.label == label], b[loop.label == label]
        if not len(a):
            continue
        step = b - a
        square = np.einsum("ij,ij->i", step, step)
        t = np.clip(-np.einsum("ij,ij->i", a, step) / np.where(square > 0.0, square, 1.0), 0.0, 1.0)
        foot = a + t[:, None] * step
        gap = np.linalg.norm(foot, axis=1)
        if float(gap.min()) < best:
            best, found = float(gap.min()), foot[int(np.argmin(gap))]
    return found


def plane_crossings(plan: ChannelPlan, plane: Plane) -> tuple[Crossing, ...]:
    """Returns where the centrelines of `plan` pass through `plane`."""
    found = []
    for branch in plan.branches:
        height = np.einsum("ij,j->i", branch.xyz_mm - plane.origin_mm, plane.normal)
        front = height >= 0.0
        for i in np.flatnonzero(front[1:] != front[:-1]).tolist():
            t = height[i] / (height[i] - height[i + 1])
            point = (1.0 - t) * branch.xyz_mm[i] + t * branch.xyz_mm[i + 1]
            found.append(Crossing(branch.id, plane.flat_mm(point)[0]))
    return tuple(found)


def _named(plan: ChannelPlan, plane: Plane, branch_ids: tuple[str, ...]) -> tuple[Crossing, ...]:
    """Returns where the first two branches named are cut beside the origin of `plane`, if it meets them there."""
    found = []
    for name in branch_ids[:2]:
        for branch in plan.branches:
            if branch.id == name:
                centre, _, bore_mm = _nearest_sample(plan, (name,), plane.origin_mm)
                if abs(float((centre - plane.origin_mm) @ plane.normal)) < 0.5 * bore_mm:
                    found.append(Crossing(name, plane.flat_mm(centre)[0]))
    return tuple(found)


def make_section(
    insert: Insert, plan: ChannelPlan, verdict: Verdict, build_direction: tuple[float, float, float]
) -> WallSection | None:
    """Returns the cut of the written `insert` through the wall of `verdict`; None when the plane meets no channel.

    Args:
        insert: the insert as written.
        plan: for the direction of the channel.
        verdict: a wall with its place, the middle of the metal.
        build_direction: part frame, any length.
    """
    middle = np.asarray(verdict.xyz_mm, dtype=np.float64)
    centre, tangent, bore_mm = _nearest_sample(plan, verdict.branch_ids, middle)
    build = np.asarray(build_direction, dtype=np.float64)
    plane, is_up = section_plane(middle, centre, tangent, build / np.linalg.norm(build))
    loops = cut_mesh(insert.mesh, insert.channel_triangle, plane)
    near = _nearest_on_loops(loops, CHANNEL)
    if near is None or verdict.value is None:
        return None
    crossings, named = plane_crossings(plan, plane), _named(plan, plane, verdict.branch_ids)
    return WallSection(verdict, plane, loops, crossings, near, -near, bore_mm, is_up, named)
