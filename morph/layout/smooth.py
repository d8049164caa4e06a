"""Smooth centrelines: chains of runs fitted as one curve each, cut into one curve per branch.

A chain runs straight on through junctions, so the straighter pair shares its tangent there; cutting is
exact, by knot insertion. Joints that a chain passes are moved onto it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats
from morph.geometry.curve import DEGREE, Curve
from morph.layout.centre import smoothed_along
from morph.layout.fit import DEVIATION_SHARE, SEAM_WEIGHT, Samples, fit_chain
from morph.layout.junctions import move_joint
from morph.layout.web import Run, Web, arc_mm, moved_along

STRAIGHT_COSINE = -0.7
SETTLED_WEIGHT = 50.0
MOVED_POINTS = 4
"""A joint moved off its curve takes this many control points along, the last ones less and less."""


@dataclass(frozen=True, slots=True)
class Link:
    """A run within a chain, and whether the chain walks it from its start."""

    run: int
    forward: bool


def pair_straightest(web: Web) -> dict[tuple[int, int], int]:
    """Returns, per (joint, run), the run that continues it: the straightest pairs first, bent by less than 45 degrees.

    Where just two runs meet (a port within a channel) they always continue each other.
    """
    following: dict[tuple[int, int], int] = {}
    for joint in sorted(web.joints):
        if web.degree(joint) < 2:
            continue
        reach = 2.0 * web.joints[joint].radius_mm
        leaving = [(key, _direction(run, reach)) for key, run in web.leaving(joint) if run.start != run.end]
        ranked = sorted(
            (float(leaving[i][1] @ leaving[j][1]), i, j)
            for i in range(len(leaving))
            for j in range(i + 1, len(leaving))
        )
        taken: set[int] = set()
        for cosine, i, j in ranked:
            if i in taken or j in taken or (cosine > STRAIGHT_COSINE and web.degree(joint) > 2):
                continue
            taken |= {i, j}
            following[joint, leaving[i][0]] = leaving[j][0]
            following[joint, leaving[j][0]] = leaving[i][0]
    return following


def _direction(run: Run, reach_mm: float) -> Floats:
    arc = arc_mm(run.place_mm)
    there = run.place_mm[min(int(np.searchsorted(arc, reach_mm)), len(arc) - 1)]
    away = there - run.place_mm[0]
    return np.asarray(away / max(float(np.hypot(*away)), 1e-12), dtype=np.float64)


def make_chains(web: Web, following: dict[tuple[int, int], int]) -> list[list[Link]]:
    """Returns every run once, in chains that run on through junctions as `following` says."""
    waiting = dict.fromkeys(sorted(web.runs))
    chains = []
    while waiting:
        first = next(iter(waiting))
        del waiting[first]
        chain = [Link(first, True)]
        for ahead in (True, False):
            while True:
                link = chain[-1] if ahead else chain[0]
                run = web.runs[link.run]
                joint = run.end if link.forward == ahead else run.start
                key = following.get((joint, link.run))
                if key is None or key not in waiting:
                    break
                del waiting[key]
                leaves_from_start = web.runs[key].start == joint
                if ahead:
                    chain.append(Link(key, leaves_from_start))
                else:
                    chain.insert(0, Link(key, not leaves_from_start))
        chains.append(chain)
    return chains


def _gather(web: Web, chain: list[Link]) -> Samples:
    places, halves, frees, seams, n, shift_mm = [], [], [], [0], 0, 0.0
    for index, link in enumerate(chain):
        run = web.runs[link.run] if link.forward else web.runs[link.run].reversed()
        assert run.free is not None
        skip = 1 if index else 0
        places.append(moved_along(run.place_mm[skip:], shift_mm))
        shift_mm += run.shift_mm
        halves.append(run.half_mm[skip:])
        frees.append(run.free[skip:])
        n += len(run.place_mm) - skip
        seams.append(n - 1)
    place = np.concatenate(places)
    calm = smoothed_along(place, min(2.0, len(place) / 8.0))
    step = np.maximum(np.hypot(*np.diff(calm, axis=0).T), 1e-9)
    at = np.concatenate([[0.0], np.cumsum(step)])
    return Samples(at, place, np.concatenate(halves), np.concatenate(frees), tuple(seams))


def cut_curve(curve: Curve, at: tuple[float, ...]) -> list[Curve]:
    """Returns `curve` cut at the increasing inner parameters `at`, exactly, by inserting knots (Boehm 1980)."""
    from scipy.interpolate import BSpline

    pieces = []
    spline = BSpline(curve.knots, curve.control_mm, DEGREE)
    for parameter in at:
        missing = DEGREE - int(np.count_nonzero(spline.t == parameter))
        if missing > 0:
            spline = spline.insert_knot(parameter, missing)
        first = int(np.searchsorted(spline.t, parameter))
        pieces.append(Curve(np.append(spline.t[: first + DEGREE], parameter), spline.c[:first]))
        spline = BSpline(np.concatenate([[parameter], spline.t[first:]]), spline.c[first - 1 :], DEGREE)
    pieces.append(Curve(spline.t, spline.c[: len(spline.t) - DEGREE - 1]))
    return pieces


def moved_ends(curve: Curve, start_mm: Floats, end_mm: Floats) -> Curve:
    """Returns `curve` with its ends moved to `start_mm` and `end_mm`; tangents at the ends stay as they were.

    The first and last two control points move along with their end, the next ones less and less.
    """
    control = np.array(curve.control_mm)
    n = len(control)
    share = np.clip(1.0 - (np.arange(n) - 1.0) / min(MOVED_POINTS, n - 2.0), 0.0, 1.0)
    share[:2], share[-2:] = 1.0, 0.0
    back = share[::-1].copy()
    control += share[:, None] * (start_mm - control[0]) + back[:, None] * (end_mm - control[-1])
    control[0], control[-1] = start_mm, end_mm
    return Curve(curve.knots, control)


def turned_end(curve: Curve, direction: Floats) -> Curve:
    """Returns `curve` leaving its start along the unit vector `direction`, its first handle as long as before."""
    control = np.array(curve.control_mm)
    control[1] = control[0] + float(np.hypot(*(control[1] - control[0]))) * direction
    return Curve(curve.knots, control)


def reversed_curve(curve: Curve) -> Curve:
    """Returns the same curve walked from its end, parameters from 0."""
    return Curve(curve.knots[-1] - curve.knots[::-1], curve.control_mm[::-1])


def _list_chains(web: Web, kept: frozenset[int]) -> tuple[dict[tuple[int, int], int], list[list[Link]]]:
    """Returns which run continues which, and the chains they make, `kept` runs left out."""
    following = {
        (joint, key): other
        for (joint, key), other in pair_straightest(web).items()
        if key not in kept and other not in kept
    }
    return following, [chain for chain in make_chains(web, following) if chain[0].run not in kept]


def list_chained(web: Web, keys: set[int], kept: frozenset[int]) -> set[int]:
    """Returns the runs that are fitted in one curve with any of the runs `keys`, these included."""
    _, chains = _list_chains(web, kept)
    return {link.run for chain in chains if any(item.run in keys for item in chain) for link in chain}


def fit_web(
    web: Web, kept: frozenset[int] = frozenset(), share: dict[int, float] | None = None
) -> tuple[dict[int, Curve], dict[int, Floats]]:
    """Returns per run its curve, walked as the run, and the parameter of each of its samples.

    Joints that a chain passes are moved onto it, then all chains that meet such a joint are fitted
    again towards its new place. Runs that continue each other leave their joint along one line.

    Args:
        web: joints and runs, centred.
        kept: runs that have their curve already: they are neither fitted nor moved.
        share: how far the chains of some runs may deviate, in local widths, where it is less than usual.
    """
    following, chains = _list_chains(web, kept)
    fitted = [_fit_links(web, chain, SEAM_WEIGHT, share) for chain in chains]
    fixed = {joint for key in kept for joint in (web.runs[key].start, web.runs[key].end)}
    moved = _move_passed_joints(web, chains, fitted, fixed)
    for index, chain in enumerate(chains):
        if any({web.runs[link.run].start, web.runs[link.run].end} & moved for link in chain):
            fitted[index] = _fit_links(web, chain, SETTLED_WEIGHT, share)
    curves: dict[int, Curve] = {}
    parameters: dict[int, Floats] = {}
    for pieces in fitted:
        for key, curve, at in pieces:
            run = web.runs[key]
            end_mm = moved_along(web.joints[run.end].place_mm, run.shift_mm)
            curves[key] = moved_ends(curve, web.joints[run.start].place_mm, end_mm)
            parameters[key] = at
    _align(web, curves, following)
    return curves, parameters


def _fit_links(
    web: Web, chain: list[Link], seam_weight: float, share: dict[int, float] | None
) -> list[tuple[int, Curve, Floats]]:
    """Returns for each run of the chain its key, its curve and its samples' parameters, walked as the run."""
    samples = _gather(web, chain)
    inner = tuple(float(samples.at[seam]) for seam in samples.seams[1:-1])
    least = min([(share or {}).get(link.run, DEVIATION_SHARE) for link in chain])
    pieces = cut_curve(fit_chain(samples, seam_weight, least), inner)
    fitted, shift_mm = [], 0.0
    for index, (link, piece) in enumerate(zip(chain, pieces, strict=True)):
        at = samples.at[samples.seams[index] : samples.seams[index + 1] + 1]
        own_mm = web.runs[link.run].shift_mm
        if link.forward:
            curve = Curve(piece.knots - piece.knots[0], moved_along(piece.control_mm, -shift_mm))
            fitted.append((link.run, curve, at - at[0]))
            shift_mm += own_mm
        else:
            curve = Curve(piece.knots - piece.knots[0], moved_along(piece.control_mm, own_mm - shift_mm))
            fitted.append((link.run, reversed_curve(curve), at[-1] - at[::-1]))
            shift_mm -= own_mm
    return fitted


def _move_passed_joints(
    web: Web, chains: list[list[Link]], fitted: list[list[tuple[int, Curve, Floats]]], fixed: set[int]
) -> set[int]:
    """Moves each joint that a chain passes, but the fixed, to the mean of where chains pass it; returns those moved."""
    passing: dict[int, list[Floats]] = {}
    for chain, pieces in zip(chains, fitted, strict=True):
        for link, (_, curve, _) in zip(chain[1:], pieces[1:], strict=True):
            run = web.runs[link.run]
            joint, place = run.start, curve.control_mm[0]
            if not link.forward:
                joint, place = run.end, moved_along(curve.control_mm[-1], -run.shift_mm)
            passing.setdefault(joint, []).append(place)
    for joint in sorted(passing.keys() - fixed):
        move_joint(web, joint, np.mean(passing[joint], axis=0))
    return passing.keys() - fixed


def _align(web: Web, curves: dict[int, Curve], following: dict[tuple[int, int], int]) -> None:
    """Turns the ends of runs that continue each other onto their common tangent, where they are not on it yet."""
    for (joint, key), other in sorted(following.items()):
        if key > other or web.runs[key].start == web.runs[key].end:
            continue
        ends = [(k, web.runs[k].start == joint) for k in (key, other)]
        away = []
        for k, at_start in ends:
            control = curves[k].control_mm if at_start else curves[k].control_mm[::-1]
            handle = control[1] - control[0]
            away.append(handle / max(float(np.hypot(*handle)), 1e-12))
        line = away[0] - away[1]
        size = float(np.hypot(*line))
        if size < 1e-6:
            continue
        line /= size
        for (k, at_start), direction in zip(ends, (line, -line), strict=True):
            if at_start:
                curves[k] = turned_end(curves[k], direction)
            else:
                curves[k] = reversed_curve(turned_end(reversed_curve(curves[k]), direction))
