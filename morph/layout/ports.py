"""Ports: where the image lets one believe a channel enters, and the declared ones tied to the web."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from morph.core.errors import GeometryError, SettingError
from morph.layout.density import Density
from morph.layout.frame import FrameRun, RunKind, Side, find_frame_runs
from morph.layout.level import Picture, make_picture
from morph.layout.web import Joint, Run, Web, arc_mm
from morph.settings.job import PortSettings


@dataclass(frozen=True, slots=True)
class PortCandidate:
    """A place on the frame where a channel may enter.

    Args:
        sheet_mm: middle of the coolant on the frame line.
        side: of the sheet. width_mm: along the frame.
        kind: cut by frame, or wall contact.
    """

    sheet_mm: tuple[float, float]
    side: Side
    width_mm: float
    kind: RunKind

    def sentence(self) -> str:
        """Returns the candidate as words for a message."""
        x, y = self.sheet_mm
        return f"[{x:.1f}, {y:.1f}] ({self.side.value}, {self.width_mm:.1f} mm wide, {self.kind.value})"


def find_port_candidates(density: Density, level: float) -> tuple[PortCandidate, ...]:
    """Returns where coolant meets the frame of `density` at `level`: bottom, top, left, right, each from its start."""
    return list_candidates(make_picture(density, level, np.empty((0, 2))), density.size_mm)


def list_candidates(picture: Picture, size_mm: tuple[float, float]) -> tuple[PortCandidate, ...]:
    """Returns the candidates of a clean picture of the sheet."""
    return tuple(_candidate(run, picture, size_mm) for run in find_frame_runs(picture.mask))


def _candidate(run: FrameRun, picture: Picture, size_mm: tuple[float, float]) -> PortCandidate:
    upright = run.side in {Side.LEFT, Side.RIGHT}
    first_mm, pitch_mm = picture.grid.first_mm[upright], picture.grid.pitch_mm[upright]
    along = min(max(first_mm + run.middle_px * pitch_mm, 0.0), size_mm[upright])
    across = {Side.BOTTOM: 0.0, Side.TOP: size_mm[1], Side.LEFT: 0.0, Side.RIGHT: size_mm[0]}[run.side]
    place = (across, along) if upright else (along, across)
    return PortCandidate(place, run.side, (run.last - run.first) * pitch_mm, run.kind)


def require_ports(ports: tuple[PortSettings, ...], size_mm: tuple[float, float], slack_mm: float = 0.0) -> None:
    """Raises unless there are ports, each of its own name, at its own place, on the sheet or `slack_mm` off it.

    Raises:
        SettingError: `port-missing`, `port-duplicate` or `port-outside-sheet`.
    """
    if not ports:
        raise SettingError(
            "port-missing",
            expected="at least one port in and one out",
            found="no [[port]]",
            where="job",
            do="Declare the ports; `morph start IMAGE` lists where channels meet the frame.",
        )
    for index, port in enumerate(ports):
        x, y = port.at_mm
        where = f'[[port]] "{port.name}"'
        slack = slack_mm + 1e-6
        if not (-slack <= x <= size_mm[0] + slack and -slack <= y <= size_mm[1] + slack):
            raise SettingError(
                "port-outside-sheet",
                expected=f"at_mm within 0..{size_mm[0]:g} by 0..{size_mm[1]:g} mm",
                found=f"[{x:g}, {y:g}]",
                where=where,
                do="Give the place on the sheet: x right, y up from its lower left corner.",
            )
        for other in ports[:index]:
            same_place = math.dist(port.at_mm, other.at_mm) < 1e-3
            if port.name == other.name or same_place:
                what = f"place [{x:g}, {y:g}]" if same_place else f'name "{port.name}"'
                raise SettingError(
                    "port-duplicate",
                    expected="a name and a place of its own for every port",
                    found=f'the {what} of port "{other.name}" again',
                    where=where,
                    do="Rename or move one of the two.",
                )


def keep_port_tips(web: Web, ports: tuple[PortSettings, ...]) -> None:
    """Keeps the dead end nearest to each declared port from being pruned as a spur."""
    tips = [key for key in sorted(web.joints) if web.degree(key) == 1]
    for port in ports:
        near = [(math.dist(web.joints[key].place_mm, port.at_mm), key) for key in tips]
        near = [(away, key) for away, key in near if away <= 2.0 * _reach_mm(web, key)]
        if near:
            web.joints[min(near)[1]].keep = True


def _reach_mm(web: Web, tip: int) -> float:
    run = web.runs[web.at[tip][0]]
    return max(web.joints[run.start].radius_mm, web.joints[run.end].radius_mm)


@dataclass(frozen=True, slots=True, eq=False)
class _Nearest:
    """The sample of the web nearest to a place: run, sample number, distance, half-width there."""

    run: int
    sample: int
    away_mm: float
    half_mm: float


def _find_nearest(web: Web, at_mm: tuple[float, float]) -> _Nearest | None:
    """Returns the nearest sample; a blind end reaches on to its end wall, half a bore past its last sample."""
    best: _Nearest | None = None
    for key in sorted(web.runs):
        run = web.runs[key]
        away = np.hypot(*(run.place_mm - at_mm).T)
        for end, joint in ((0, run.start), (-1, run.end)):
            if web.degree(joint) == 1 and web.joints[joint].mouth < 0:
                away[end] = max(0.0, away[end] - run.half_mm[end])
        sample = int(np.argmin(away))
        if best is None or away[sample] < best.away_mm:
            best = _Nearest(key, sample, float(away[sample]), float(run.half_mm[sample]))
    return best


def attach_ports(
    web: Web, ports: tuple[PortSettings, ...], candidates: tuple[PortCandidate, ...], size_mm: tuple[float, float]
) -> None:
    """Ties each declared port to the web: to a channel cut by the frame, a dead end, a junction, or within a run.

    Raises:
        GeometryError: `port-off-channel` or `ports-on-one-node`.
    """
    for port in ports:
        key = _joint_for(web, port, candidates, size_mm)
        taken = web.joints[key].port
        if taken is not None:
            x, y = web.joints[key].place_mm
            raise GeometryError(
                "ports-on-one-node",
                expected="an end of its own for every port",
                found=f'ports "{taken}" and "{port.name}" both at the channel end [{x:.1f}, {y:.1f}] mm',
                where=f'[[port]] "{port.name}"',
                do="Move one of them to another end. Channels meet the frame at: " + _listed(candidates),
            )
        web.joints[key].port = port.name


def _listed(candidates: tuple[PortCandidate, ...]) -> str:
    return "; ".join(candidate.sentence() for candidate in candidates) or "nowhere"


def _joint_for(
    web: Web, port: PortSettings, candidates: tuple[PortCandidate, ...], size_mm: tuple[float, float]
) -> int:
    nearest = _find_nearest(web, port.at_mm)
    mouths = []
    for key in sorted(web.joints):
        if web.joints[key].mouth >= 0 and web.degree(key) == 1:
            run = web.runs[web.at[key][0]]
            half = run.half_mm[0] if run.start == key else run.half_mm[-1]
            away = math.dist(web.joints[key].place_mm, port.at_mm)
            if away <= 2.0 * half:
                mouths.append((away, key))
    if mouths:
        return min(mouths)[1]
    if nearest is None or nearest.away_mm > 2.0 * nearest.half_mm:
        found = (
            "no channel at all"
            if nearest is None
            else (
                f"the nearest centreline {nearest.away_mm:.1f} mm away, where the bore is {2 * nearest.half_mm:.1f} mm"
            )
        )
        raise GeometryError(
            "port-off-channel",
            expected="a channel's centreline within one local bore",
            found=found,
            where=f'[[port]] "{port.name}" at [{port.at_mm[0]:g}, {port.at_mm[1]:g}] mm',
            do="Move it to one of the places where channels meet the frame: " + _listed(candidates),
        )
    return _joint_near(web, nearest, port, size_mm)


def _joint_near(web: Web, nearest: _Nearest, port: PortSettings, size_mm: tuple[float, float]) -> int:
    run = web.runs[nearest.run]
    arc = arc_mm(run.place_mm)
    along = {run.start: float(arc[nearest.sample]), run.end: float(arc[-1] - arc[nearest.sample])}
    for key, away_mm in sorted(along.items(), key=lambda item: (item[1], item[0])):
        if web.degree(key) == 1 and away_mm <= 2.0 * nearest.half_mm and web.joints[key].port is None:
            _fit_tip(web, key, port.at_mm, size_mm)
            return key
        if web.degree(key) >= 3 and away_mm <= web.joints[key].radius_mm:
            return key
        if away_mm <= 1e-9:
            return key
    return split_run(web, nearest.run, nearest.sample)


def _fit_tip(web: Web, key: int, at_mm: tuple[float, float], size_mm: tuple[float, float]) -> None:
    """Extends or trims the dead end `key` to the foot of the port on its centreline, never past the frame."""
    run_key = web.at[key][0]
    run = web.runs[run_key] if web.runs[run_key].start == key else web.runs[run_key].reversed()
    arc = arc_mm(run.place_mm)
    inner = run.place_mm[min(max(1, int(np.searchsorted(arc, float(run.half_mm[0])))), len(arc) - 1)]
    outward = run.place_mm[0] - inner
    outward = outward / max(float(np.hypot(*outward)), 1e-12)
    ahead = float((np.asarray(at_mm) - run.place_mm[0]) @ outward)
    if ahead > 1e-6:
        step = float(np.median(np.diff(arc)))
        n = max(1, round(ahead / step))
        reach = ahead * np.arange(n, 0, -1) / n
        place = np.clip(run.place_mm[0] + reach[:, None] * outward, 0.0, size_mm)
        keep = slice(0, None)
        half = np.full(n, run.half_mm[0])
    else:
        first = min(int(np.argmin(np.hypot(*(run.place_mm - at_mm).T))), len(arc) - 4)
        place, half, keep = run.place_mm[:0], run.half_mm[:0], slice(max(first, 0), None)
    free = None if run.free is None else np.concatenate([np.zeros(len(place), dtype=bool), run.free[keep]])
    web.remove_run(run_key)
    places = np.vstack([place, run.place_mm[keep]])
    web.joints[key].place_mm = places[0]
    web.add_run(Run(key, run.end, places, np.concatenate([half, run.half_mm[keep]]), free))


def split_run(web: Web, key: int, sample: int) -> int:
    """Puts a joint on `sample` of the run `key`, makes two runs of it, and returns the joint's key."""
    run = web.runs[key]
    sample = min(max(sample, 1), len(run.place_mm) - 2)
    web.remove_run(key)
    joint = web.add_joint(Joint(run.place_mm[sample].copy(), float(run.half_mm[sample])))
    head, tail = slice(0, sample + 1), slice(sample, None)
    free = run.free
    web.add_run(Run(run.start, joint, run.place_mm[head], run.half_mm[head], None if free is None else free[head]))
    rest = None if free is None else free[tail]
    web.add_run(Run(joint, run.end, run.place_mm[tail], run.half_mm[tail], rest, run.shift_mm))
    return joint
