"""Mirrored layouts: the graph of a doubled image made exactly symmetric about its mirror line.

Thinning and fitting treat the two halves of a symmetric image a little differently (some hundredths of a pixel).
Nodes and branches are paired with their mirror images; each pair is averaged on the low half of the sheet and
reflected to the other; what is its own mirror image is averaged with it. A mean of two curves is no further from
the mean of their measured centrelines than the two are on average. What has no partner (a port declared on one
side only) stays as it is and is told.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from morph.core.arrays import Floats
from morph.core.verdict import Notice
from morph.geometry.curve import DEGREE, Curve, curve_at, curve_length_mm
from morph.layout.assemble import distance_to
from morph.layout.graph import Branch, ChannelGraph, Node
from morph.layout.smooth import moved_ends, reversed_curve, turned_end
from morph.layout.web import moved_along
from morph.settings.job import MirrorAt

REACH_BORES = 0.75
"""A node and the reflection of its partner lie at most this many bores apart."""
LEAST_REACH_MM = 0.5
SQUARE_SINE = 0.17
"""A branch that meets the mirror line within 10 degrees of square leaves it exactly square."""
SAME_KNOT = 1e-9
PLACES = np.linspace(0.0, 1.0, 9)


@dataclass(frozen=True, slots=True)
class Mirror:
    """The mirror line: axis 0 for x = `line_mm`, 1 for y; the width after which the sheet repeats, or None."""

    axis: int
    line_mm: float
    turn_mm: float | None

    def reflect(self, place_mm: Floats) -> Floats:
        """Returns places (..., 2) on the other side."""
        moved = np.array(place_mm, dtype=np.float64)
        moved[..., self.axis] = 2.0 * self.line_mm - moved[..., self.axis]
        return moved

    def apart(self, one_mm: Floats, two_mm: Floats) -> Floats:
        """Returns the vectors (..., 2) from `two_mm` to `one_mm`, by the shorter way around."""
        away = np.array(one_mm - two_mm, dtype=np.float64)
        if self.turn_mm is not None:
            away[..., 0] -= self.turn_mm * np.round(away[..., 0] / self.turn_mm)
        return away

    def is_low(self, place_mm: Floats) -> bool:
        """Returns whether a place lies on the low half of the sheet."""
        at = float(place_mm[self.axis])
        if self.turn_mm is not None and self.axis == 0:
            at %= self.turn_mm
        return at <= self.line_mm


def make_mirror(graph: ChannelGraph, mirror_at: MirrorAt) -> Mirror:
    """Returns the mirror line of a graph on the doubled sheet."""
    axis = 0 if mirror_at in {MirrorAt.LEFT, MirrorAt.RIGHT} else 1
    return Mirror(axis, 0.5 * graph.size_mm[axis], graph.turn_mm)


def symmetrised(graph: ChannelGraph, mirror_at: MirrorAt) -> ChannelGraph:
    """Returns `graph` with each pair of mirror images exactly alike; a notice names what has no partner.

    Args:
        graph: of the doubled image.
        mirror_at: the edge of the image that is the mirror line.
    """
    if mirror_at is MirrorAt.NONE:
        return graph
    mirror = make_mirror(graph, mirror_at)
    nodes, branches = graph.nodes + graph.loose_nodes, graph.branches + graph.loose_branches
    partner = _pair_nodes(mirror, nodes, branches)
    place = _new_places(mirror, nodes, partner)
    pairs = _pair_branches(mirror, branches, partner)
    drawn = _drawn(mirror, branches, pairs, place)
    lonely = [node for node in nodes if node.id not in partner]
    alone = [branch for branch in branches if branch.id not in pairs]
    found = graph.notices + ((_not_exact(lonely, alone),) if lonely or alone else ())
    moved = {node.id: replace(node, sheet_mm=place[node.id]) for node in nodes}
    return replace(
        graph,
        nodes=tuple(moved[node.id] for node in graph.nodes),
        loose_nodes=tuple(moved[node.id] for node in graph.loose_nodes),
        branches=tuple(drawn[branch.id] for branch in graph.branches),
        loose_branches=tuple(drawn[branch.id] for branch in graph.loose_branches),
        notices=found,
    )


def _pair_nodes(mirror: Mirror, nodes: tuple[Node, ...], branches: tuple[Branch, ...]) -> dict[str, str]:
    """Returns the partner of each node that has one: nearest to each other's reflection, and near enough."""
    if not nodes:
        return {}
    bore = dict.fromkeys((node.id for node in nodes), 0.0)
    for branch in branches:
        for end, at in ((branch.start, 0), (branch.end, -1)):
            bore[end] = max(bore[end], float(branch.bore_mm[at]))
    place = np.array([node.sheet_mm for node in nodes])
    away = np.linalg.norm(mirror.apart(mirror.reflect(place)[:, None], place[None]), axis=2)
    nearest = np.argmin(away, axis=1)
    found = {}
    for index, node in enumerate(nodes):
        other = int(nearest[index])
        reach_mm = max(LEAST_REACH_MM, REACH_BORES * bore[node.id])
        if int(nearest[other]) == index and away[index, other] <= reach_mm:
            found[node.id] = nodes[other].id
    return found


def _new_places(mirror: Mirror, nodes: tuple[Node, ...], partner: dict[str, str]) -> dict[str, Floats]:
    """Returns each node's place: on the line, the mean with its partner's reflection, or the reflection of that."""
    old = {node.id: np.asarray(node.sheet_mm) for node in nodes}
    place = dict(old)
    for node in nodes:
        other = partner.get(node.id)
        if other is None:
            continue
        if other == node.id:
            place[node.id] = old[node.id] + 0.5 * mirror.apart(mirror.reflect(old[node.id]), old[node.id])
        elif mirror.is_low(old[node.id]) and not mirror.is_low(old[other]):
            mean = old[node.id] + 0.5 * mirror.apart(mirror.reflect(old[other]), old[node.id])
            place[node.id], reflected = mean, mirror.reflect(mean)
            if mirror.turn_mm is not None:
                reflected = moved_along(reflected, -mirror.turn_mm * math.floor(float(reflected[0]) / mirror.turn_mm))
            place[other] = reflected
    return place


def _pair_branches(
    mirror: Mirror, branches: tuple[Branch, ...], partner: dict[str, str]
) -> dict[str, tuple[Branch, bool]]:
    """Returns per branch its partner, and whether that runs the other way; each partner names it back."""
    by_ends: dict[frozenset[str], list[Branch]] = {}
    for branch in branches:
        by_ends.setdefault(frozenset((branch.start, branch.end)), []).append(branch)
    best: dict[str, tuple[float, Branch, bool]] = {}
    for branch in branches:
        ends = [partner.get(branch.start), partner.get(branch.end)]
        for other in by_ends.get(frozenset(end for end in ends if end is not None), []):
            for backward in (False, True):
                if [other.end, other.start] != ends if backward else [other.start, other.end] != ends:
                    continue
                away = _apart_mm(mirror, branch, other, backward)
                if branch.id not in best or away < best[branch.id][0] - 1e-12:
                    best[branch.id] = (away, other, backward)
    return {
        key: (other, backward)
        for key, (_, other, backward) in best.items()
        if other.id in best and best[other.id][1].id == key
    }


def _apart_mm(mirror: Mirror, one: Branch, two: Branch, backward: bool) -> float:
    """Returns the rms distance of `two` from the reflection of `one` at a few shares of their parameters."""
    here = mirror.reflect(curve_at(one.curve, PLACES * one.curve.knots[-1]))
    there = curve_at(two.curve, (PLACES[::-1] if backward else PLACES) * two.curve.knots[-1])
    return float(np.sqrt((mirror.apart(here, there) ** 2).sum(axis=1).mean()))


def _drawn(
    mirror: Mirror, branches: tuple[Branch, ...], pairs: dict[str, tuple[Branch, bool]], place: dict[str, Floats]
) -> dict[str, Branch]:
    """Returns every branch by id, ends on the new places."""
    drawn: dict[str, Branch] = {}
    for branch in branches:
        if branch.id in drawn:
            continue
        other, backward = pairs.get(branch.id, (None, False))
        if other is None:
            drawn[branch.id] = _settled(mirror, branch, branch.curve, place)
        elif other.id == branch.id:
            drawn[branch.id] = _own_image(mirror, branch, backward, place)
        else:
            middle = branch.sheet_mm[len(branch.sheet_mm) // 2]
            master, twin = (branch, other) if mirror.is_low(middle) else (other, branch)
            mean = _mean(mirror, master, twin, backward)
            kept = _squared(mirror, _settled(mirror, mean, mean.curve, place))
            drawn[master.id] = kept
            drawn[twin.id] = _reflected(mirror, kept, twin, backward, place)
    return drawn


def _image(mirror: Mirror, branch: Branch, twin: Branch, backward: bool) -> Curve:
    """Returns the reflection of `twin` walked as `branch`, beside it and as long in parameters."""
    image = Curve(twin.curve.knots, mirror.reflect(twin.curve.control_mm))
    image = reversed_curve(image) if backward else image
    start, own = image.control_mm[0], branch.curve.control_mm[0]
    turns_mm = float(own[0] - start[0] - mirror.apart(own, start)[0])
    stretch = branch.curve.knots[-1] / image.knots[-1]
    return Curve(image.knots * stretch, moved_along(image.control_mm, turns_mm))


def _mean(mirror: Mirror, branch: Branch, twin: Branch, backward: bool) -> Branch:
    """Returns `branch` halfway to the reflection of `twin`."""
    image = _image(mirror, branch, twin, backward)
    if len(image.control_mm) == len(branch.curve.control_mm):
        control = 0.5 * (np.asarray(branch.curve.control_mm) + image.control_mm)
        curve = Curve(0.5 * (branch.curve.knots + image.knots), control)
    else:
        curve = _average(branch.curve, image)
    share, bore_mm = twin.parameter / twin.curve.knots[-1], np.asarray(twin.bore_mm)
    share, bore_mm = (1.0 - share[::-1], bore_mm[::-1]) if backward else (share, bore_mm)
    other_mm = np.interp(branch.parameter / branch.curve.knots[-1], share, bore_mm)
    mean = _along(branch, curve, np.asarray(branch.parameter), 0.5 * (branch.bore_mm + other_mm))
    return replace(mean, deviation_mm=0.5 * (branch.deviation_mm + twin.deviation_mm))


def _settled(mirror: Mirror, branch: Branch, curve: Curve, place: dict[str, Floats]) -> Branch:
    """Returns `branch` along `curve`, its ends moved onto their nodes."""
    ends = []
    for node, at in ((branch.start, 0), (branch.end, -1)):
        ends.append(curve.control_mm[at] + mirror.apart(place[node], curve.control_mm[at]))
    if np.array_equal(ends, curve.control_mm[[0, -1]]) and curve is branch.curve:
        return branch
    return _along(branch, moved_ends(curve, ends[0], ends[1]), branch.parameter, branch.bore_mm)


def _along(branch: Branch, curve: Curve, parameter: Floats, bore_mm: Floats) -> Branch:
    """Returns `branch` along another curve; its deviation grows by how far that runs from its own."""
    sheet_mm = curve_at(curve, parameter)
    sheet_mm[0], sheet_mm[-1] = curve.control_mm[0], curve.control_mm[-1]
    moved_mm = float(distance_to(branch.sheet_mm, sheet_mm)[1:-1].max(initial=0.0))
    return replace(
        branch,
        curve=curve,
        parameter=parameter,
        sheet_mm=sheet_mm,
        bore_mm=bore_mm,
        length_mm=curve_length_mm(curve),
        deviation_mm=branch.deviation_mm + moved_mm,
    )


def _squared(mirror: Mirror, branch: Branch) -> Branch:
    """Returns `branch` leaving the mirror line square where it nearly does, so that it runs on smoothly beyond."""
    curve = branch.curve
    for backward in (False, True):
        walked = reversed_curve(curve) if backward else curve
        at, away = walked.control_mm[0], walked.control_mm[1] - walked.control_mm[0]
        size = float(np.hypot(*away))
        on_line = abs(float(mirror.apart(mirror.reflect(at), at)[mirror.axis])) < 1e-9
        if on_line and size > 0.0 and abs(float(away[1 - mirror.axis])) < SQUARE_SINE * size:
            square = np.zeros(2)
            square[mirror.axis] = math.copysign(1.0, float(away[mirror.axis]))
            walked = turned_end(walked, square)
            curve = reversed_curve(walked) if backward else walked
    return branch if curve is branch.curve else _along(branch, curve, branch.parameter, branch.bore_mm)


def _reflected(mirror: Mirror, kept: Branch, twin: Branch, backward: bool, place: dict[str, Floats]) -> Branch:
    """Returns `twin` as the exact reflection of `kept`."""
    curve = Curve(kept.curve.knots, mirror.reflect(kept.curve.control_mm))
    parameter, sheet_mm, bore_mm = kept.parameter, mirror.reflect(kept.sheet_mm), kept.bore_mm
    if backward:
        curve, parameter = reversed_curve(curve), kept.curve.knots[-1] - parameter[::-1]
        sheet_mm, bore_mm = sheet_mm[::-1], bore_mm[::-1]
    if mirror.turn_mm is not None:
        turns_mm = mirror.turn_mm * round(float(place[twin.start][0] - sheet_mm[0, 0]) / mirror.turn_mm)
        curve, sheet_mm = Curve(curve.knots, moved_along(curve.control_mm, turns_mm)), moved_along(sheet_mm, turns_mm)
    figures = (curve, parameter, sheet_mm, bore_mm, kept.length_mm, kept.deviation_mm)
    return Branch(twin.id, twin.start, twin.end, *figures)


def _own_image(mirror: Mirror, branch: Branch, backward: bool, place: dict[str, Floats]) -> Branch:
    """Returns a branch that is its own mirror image: the mean of itself and its reflection."""
    last = float(branch.curve.knots[-1])
    image = _image(mirror, branch, branch, backward)
    curve = _average(branch.curve, image)
    parameter, bore_mm = np.asarray(branch.parameter), np.asarray(branch.bore_mm)
    if backward:
        even = 0.5 * (parameter + (last - parameter[::-1]))
        even[0], even[-1] = parameter[0], parameter[-1]
        bore_mm = np.interp(even, parameter, bore_mm)
        parameter, bore_mm = even, 0.5 * (bore_mm + bore_mm[::-1])
    mean = replace(_along(branch, curve, parameter, bore_mm), deviation_mm=branch.deviation_mm)
    return _settled(mirror, mean, curve, place)


def _average(curve: Curve, image: Curve) -> Curve:
    """Returns the curve halfway between two over the same parameters, on the knots of both."""
    from scipy.interpolate import BSpline

    one, two = (BSpline(item.knots, item.control_mm, DEGREE) for item in (curve, image))
    for knot in _missing(curve.knots, image.knots):
        one = one.insert_knot(knot)
    for knot in _missing(image.knots, curve.knots):
        two = two.insert_knot(knot)
    n = len(one.t) - DEGREE - 1
    return Curve(one.t, 0.5 * (one.c[:n] + two.c[:n]))


def _missing(knots: Floats, wanted: Floats) -> list[float]:
    """Returns the inner knots of `wanted` that `knots` has not."""
    inner = wanted[DEGREE + 1 : -DEGREE - 1]
    nearest = np.abs(inner[:, None] - knots[None]).min(axis=1) if len(inner) else inner
    return [float(value) for value in inner[nearest > SAME_KNOT * knots[-1]]]


def _not_exact(lonely: list[Node], alone: list[Branch]) -> Notice:
    """Names what of a mirrored layout has no mirror image."""
    places = [node.sheet_mm for node in lonely] + [branch.sheet_mm[len(branch.sheet_mm) // 2] for branch in alone]
    listed = ", ".join([node.id for node in lonely] + [branch.id for branch in alone])
    x, y = (float(value) for value in places[0])
    return Notice(
        "mirror-not-exact",
        f"The layout is mirrored, but {listed} (first at [{x:.1f}, {y:.1f}] mm) have no mirror image in the graph: a "
        "port declared on one side only, or a junction read differently on both sides. All else is exactly symmetric.",
        tuple(branch.id for branch in alone),
        (x, y),
    )
