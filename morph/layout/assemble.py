"""From the cleaned web to the ChannelGraph record: pieces, smooth curves, samples, ids, notices."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field

import numpy as np

from morph.core.arrays import Floats
from morph.core.tolerance import COINCIDE_MM
from morph.core.verdict import Notice
from morph.geometry.curve import Curve, curve_at, curve_length_mm
from morph.layout import notices as say
from morph.layout.bridges import Suggestion
from morph.layout.centre import smoothed_along
from morph.layout.dead_ends import Known, name_dead_ends
from morph.layout.fit import DEVIATION_SHARE
from morph.layout.graph import (
    Accepted,
    Branch,
    Bridge,
    ChannelGraph,
    Dropped,
    DropReason,
    LevelCount,
    Node,
    NodeKind,
)
from morph.layout.smooth import fit_web, list_chained
from morph.layout.web import Run, Web, arc_mm, moved_along

LONGEST_STEP_MM = 1.0
CLOSER = (0.98, 0.96, 0.85, 0.7, 0.5)
"""Largest shares of the deviation bound tried in turn where a curve ends beyond it; the last is the least too."""
AIM = 0.99
"""Of the bound that would just do if a curve moved with it."""


@dataclass(frozen=True, slots=True, eq=False)
class Parts:
    """What the record holds besides nodes, branches and bridges, and the fine grid's pixel.

    `turn_mm`: the width after which sheet x repeats, None on an open sheet. `ends`: what is known of
    dead ends, by joint. `accepted`: suggestions carried out.
    """

    size_mm: tuple[float, float]
    level: float
    area_ratio: float
    dropped: tuple[Dropped, ...]
    levels: tuple[LevelCount, ...]
    notices: tuple[Notice, ...]
    pixel_mm: float
    turn_mm: float | None = None
    ends: dict[int, Known] = field(default_factory=dict)
    accepted: tuple[Accepted, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class _Drawn:
    """A run as it will be in the record, before it has an id."""

    key: int
    curve: Curve
    parameter: Floats
    sheet_mm: Floats
    bore_mm: Floats
    length_mm: float
    deviation_mm: float
    excess: float


def assemble(
    web: Web, parts: Parts, suggestions: list[Suggestion], kept: dict[int, Branch] | None = None
) -> ChannelGraph:
    """Returns the record of `web`: pieces with a port built, pieces without one kept aside as loose.

    Args:
        web: cleaned, centred, ports attached; its joints are moved onto the fitted curves.
        parts: the rest of the record.
        suggestions: ways on from dead ends, by joint and run keys of `web`.
        kept: runs that are branches already and stay as they are.
    """
    for key in [key for key in sorted(web.joints) if web.degree(key) == 0]:
        web.remove_joint(key)
    kept = kept or {}
    drawn = _draw_all(web, kept, parts.pixel_mm)
    piece = web.pieces()
    fed = {piece[key] for key, joint in web.joints.items() if joint.port is not None}
    joint_id = _numbered("N", {key: joint.place_mm for key, joint in web.joints.items()}, piece, fed)
    middles = {key: _within(item.sheet_mm[len(item.sheet_mm) // 2], parts.turn_mm) for key, item in drawn.items()}
    run_id = _numbered("B", middles, {key: piece[web.runs[key].start] for key in web.runs}, fed)
    place = {joint_id[key]: _within(joint.place_mm, parts.turn_mm) for key, joint in web.joints.items()}
    nodes = _nodes(web, joint_id, place)
    branches = [_branch(item, web.runs[item.key], run_id, joint_id, place) for item in drawn.values()]
    branches.sort(key=lambda branch: int(branch.id[1:]))
    built = {joint_id[key] for key in web.joints if piece[key] in fed}
    bridges = _bridges(suggestions, joint_id, run_id)
    dropped = parts.dropped + _left_out(web, piece, fed, drawn)
    found = list(parts.notices)
    found += [say.piece_without_port(item) for item in dropped if item.reason is DropReason.NO_PORT]
    found += _branch_notices(web, drawn, run_id, {key for key in web.joints if piece[key] in fed})
    found += [say.likely_bridge(bridge) for bridge in bridges if bridge.likely]
    return ChannelGraph(
        parts.size_mm,
        parts.level,
        parts.area_ratio,
        tuple(node for node in nodes if node.id in built),
        tuple(branch for branch in branches if branch.start in built),
        dropped,
        bridges,
        parts.levels,
        tuple(found),
        tuple(node for node in nodes if node.id not in built),
        tuple(branch for branch in branches if branch.start not in built),
        parts.turn_mm,
        name_dead_ends(
            web,
            {node.id: node for node in nodes},
            {branch.id: branch for branch in branches},
            joint_id,
            run_id,
            bridges,
            parts.ends,
        ),
        parts.accepted,
    )


def _draw_all(web: Web, kept: dict[int, Branch], pixel_mm: float) -> dict[int, _Drawn]:
    """Returns every run as drawn; chains whose curve came out beyond the bound are fitted again within a closer one.

    A fit is judged across its chain before its ends are settled on the joints and measured after, so one that
    uses its bound up may end a few hundredths beyond it. The closer bound is as much less as it was exceeded,
    and no more at first: a sharp corner fitted closer than it must be folds the channel's inner wall.
    """
    share: dict[int, float] = {}
    drawn = {key: _keep(key, kept[key]) for key in kept}
    fixed = frozenset(kept)
    for closer in (*CLOSER, 0.0):
        curves, at = fit_web(web, fixed, share)
        drawn |= {key: _draw(web.runs[key], key, curves[key], at[key], pixel_mm) for key in curves}
        beyond = {key for key, item in drawn.items() if item.excess > 1.0 + 1e-9 and key not in kept}
        if not beyond or not closer:
            break
        for key in beyond:
            aimed = AIM * share.get(key, DEVIATION_SHARE) / drawn[key].excess
            share[key] = max(min(aimed, DEVIATION_SHARE * closer), DEVIATION_SHARE * CLOSER[-1])
        fixed = frozenset(web.runs) - list_chained(web, beyond, frozenset(kept))
    return {key: drawn[key] for key in sorted(drawn)}


def _within(place_mm: Floats, turn_mm: float | None) -> Floats:
    """Returns the place (2,) with x between 0 and `turn_mm`, if the sheet repeats."""
    if turn_mm is None:
        return place_mm
    return moved_along(place_mm, -turn_mm * math.floor(float(place_mm[0]) / turn_mm))


def _numbered(letter: str, places: dict[int, Floats], piece: dict[int, int], fed: set[int]) -> dict[int, str]:
    """Returns ids by (y, x) rounded to 0.1 mm, what is built first."""

    def rank(key: int) -> tuple[object, ...]:
        x, y = (float(value) for value in places[key])
        return piece[key] not in fed, round(y, 1) + 0.0, round(x, 1) + 0.0, y, x, key

    return {key: f"{letter}{number}" for number, key in enumerate(sorted(places, key=rank), start=1)}


def _nodes(web: Web, joint_id: dict[int, str], place: dict[str, Floats]) -> list[Node]:
    nodes = []
    for key, joint in web.joints.items():
        if joint.port is not None:
            kind = NodeKind.PORT
        else:
            kind = NodeKind.DEAD_END if web.degree(key) == 1 else NodeKind.JUNCTION
        nodes.append(Node(joint_id[key], kind, joint.port, place[joint_id[key]]))
    return sorted(nodes, key=lambda node: int(node.id[1:]))


def _keep(key: int, branch: Branch) -> _Drawn:
    return _Drawn(
        key,
        branch.curve,
        branch.parameter,
        branch.sheet_mm,
        branch.bore_mm,
        branch.length_mm,
        branch.deviation_mm,
        branch.deviation_mm / (DEVIATION_SHARE * float(branch.bore_mm.max())),
    )


def _draw(run: Run, key: int, curve: Curve, at: Floats, pixel_mm: float) -> _Drawn:
    assert run.free is not None
    arc = arc_mm(run.place_mm)
    sigma = float(np.median(run.half_mm)) / max(float(arc[-1]) / (len(arc) - 1), 1e-12)
    half = smoothed_along(run.half_mm, min(sigma, len(arc) / 6.0))
    bore = np.maximum(2.0 * half, 0.5 * pixel_mm)
    step_mm = min(float(bore.min()) / 4.0, LONGEST_STEP_MM)
    length_mm = curve_length_mm(curve)
    parameter, place = _sampled(curve, length_mm, step_mm)
    away = distance_to(place, run.place_mm)
    share = np.where(run.free, away / (DEVIATION_SHARE * bore), 0.0)
    deviation = float(away[run.free].max(initial=0.0))
    return _Drawn(
        key, curve, parameter, place, np.interp(parameter, at, bore), length_mm, deviation, float(share.max())
    )


def _sampled(curve: Curve, length_mm: float, step_mm: float) -> tuple[Floats, Floats]:
    """Returns parameters and places of samples at most `step_mm` apart, evenly spread along the curve."""
    fine = np.linspace(0.0, float(curve.knots[-1]), max(64, 4 * math.ceil(length_mm / step_mm)) + 1)
    arc = arc_mm(curve_at(curve, fine))
    n = max(2, math.ceil(float(arc[-1]) / step_mm * 1.001) + 1)
    parameter = np.interp(np.linspace(0.0, arc[-1], n), arc, fine)
    parameter[0], parameter[-1] = 0.0, curve.knots[-1]
    place = curve_at(curve, parameter)
    place[0], place[-1] = curve.control_mm[0], curve.control_mm[-1]
    return parameter, place


def distance_to(line_mm: Floats, place_mm: Floats) -> Floats:
    """Returns (k,) distances of `place_mm (k, 2)` from the polyline `line_mm (n, 2)`: nearest point first."""
    from scipy.spatial import cKDTree

    distance, index = cKDTree(line_mm).query(place_mm)
    for shift in (-1, 1):
        other = np.clip(index + shift, 0, len(line_mm) - 1)
        start, along = line_mm[index], line_mm[other] - line_mm[index]
        share = ((place_mm - start) * along).sum(axis=1) / np.maximum((along * along).sum(axis=1), 1e-18)
        foot = start + np.clip(share, 0.0, 1.0)[:, None] * along
        distance = np.minimum(distance, np.hypot(*(place_mm - foot).T))
    return np.asarray(distance, dtype=np.float64)


def _branch(
    item: _Drawn, run: Run, run_id: dict[int, str], joint_id: dict[int, str], node_mm: dict[str, Floats]
) -> Branch:
    """Returns the branch, walked from the node of the lower number."""
    start, end = joint_id[run.start], joint_id[run.end]
    curve, parameter, place, bore = item.curve, item.parameter, item.sheet_mm, item.bore_mm
    if int(start[1:]) > int(end[1:]):
        start, end = end, start
        last = curve.knots[-1]
        curve = Curve(last - curve.knots[::-1], moved_along(curve.control_mm[::-1], -run.shift_mm))
        parameter, bore = last - parameter[::-1], bore[::-1]
        place = moved_along(place[::-1], -run.shift_mm)
    turns_mm = float(node_mm[start][0] - place[0, 0])
    if abs(turns_mm) > COINCIDE_MM:
        curve, place = Curve(curve.knots, moved_along(curve.control_mm, turns_mm)), moved_along(place, turns_mm)
    return Branch(run_id[item.key], start, end, curve, parameter, place, bore, item.length_mm, item.deviation_mm)


def _left_out(web: Web, piece: dict[int, int], fed: set[int], drawn: dict[int, _Drawn]) -> tuple[Dropped, ...]:
    """Returns one Dropped per piece without a port: its mean place and the area length x mean bore."""
    left = []
    for first in sorted(set(piece.values()) - fed):
        runs = [key for key in sorted(web.runs) if piece[web.runs[key].start] == first]
        area = sum(drawn[key].length_mm * float(drawn[key].bore_mm.mean()) for key in runs)
        x, y = np.concatenate([drawn[key].sheet_mm for key in runs]).mean(axis=0)
        left.append(Dropped(DropReason.NO_PORT, (float(x), float(y)), float(area)))
    return tuple(left)


def _branch_notices(web: Web, drawn: dict[int, _Drawn], run_id: dict[int, str], built: set[int]) -> list[Notice]:
    found: list[Notice] = []
    for key in sorted(run_id, key=lambda k: int(run_id[k][1:])):
        run, item = web.runs[key], drawn[key]
        if run.start not in built:
            continue
        for joint_key, bore in ((run.start, item.bore_mm[0]), (run.end, item.bore_mm[-1])):
            joint = web.joints[joint_key]
            if web.degree(joint_key) > 1 or joint.port is not None:
                continue
            place = (float(joint.place_mm[0]), float(joint.place_mm[1]))
            if joint.mouth >= 0:
                found.append(say.open_end(place, run_id[key], float(bore)))
            found.append(say.dead_end(place, run_id[key], item.length_mm))
        middle = item.sheet_mm[len(item.sheet_mm) // 2]
        place = (float(middle[0]), float(middle[1]))
        bore_mm = float(item.bore_mm.mean())
        if bore_mm > item.length_mm:
            found.append(say.wide_region(place, run_id[key], bore_mm, item.length_mm))
        if item.excess > 1.0 + 1e-9:
            found.append(say.fit_deviation(place, run_id[key], item.deviation_mm, item.deviation_mm / item.excess))
    return found


def _bridges(suggestions: list[Suggestion], joint_id: dict[int, str], run_id: dict[int, str]) -> tuple[Bridge, ...]:
    def rank(item: Suggestion) -> tuple[float, ...]:
        x, y = (float(value) for value in item.path_mm[len(item.path_mm) // 2])
        return round(y, 1) + 0.0, round(x, 1) + 0.0, y, x

    taken = {item.id for item in suggestions}
    free = (name for number in itertools.count(1) if (name := f"G{number}") not in taken)
    found = []
    for item in sorted(suggestions, key=rank):
        onto = joint_id[item.onto_joint] if item.onto_joint is not None else run_id[item.onto_run]
        name = item.id or next(free)
        figures = (item.path_mm, item.gap_mm, item.lowest_density, item.likely, item.width_mm, item.grey)
        found.append(Bridge(name, joint_id[item.tip], onto, *figures, item.grey_mm, item.middle_mm))
    return tuple(found)
