"""How much shorter than its centreline a leg of a junction is at creeping flow, from solutions in three dimensions.

A linear junction of three legs is exactly a star of three resistances; three solutions on the lattice give each leg's
as a length of its own bore less than that from the mouth to the node. Fourteen such junctions (tees at 45 to 90
degrees, forks, unequal bores; own solutions, good to 0.03 bores) are held by one rule within 0.06 bores rms, worst 0.2:

    every leg gains a tenth of its bore; two legs closer together than 120 degrees run as one for a while, and each
    gains more by how far its near wall lies beyond the node; the other legs lose by how far the pair moved the fork.

A leg may come out longer than its centreline (negative): the stem of a narrow fork. One length for all legs misses the
same solutions by 0.3 bores rms at 0.4 bores, and lets through 9 to 15 % too much in ladders of wide headers.

The lengths hold at every velocity. What junctions cost beyond them grows with its square and is counted there
(junction.py); handbooks give that against friction up to the node, so at turbulent friction (factors of 0.03 to 0.06)
the lengths move a coefficient by 0.05 at most, of coefficients of 0.5 to 1.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from morph.core.arrays import Floats
from morph.flow.junction import Junctions
from morph.flow.pipe_law import Segments

ALWAYS = 0.1
"""Gain of every leg, in bores."""

NEAR, NEAR_SQUARE = 0.473, 0.313
"""Gain of a leg of a close pair per bore of overlap, and per bore squared."""

MOVED = 0.443
"""Loss of the other legs per length of overlap of the pair."""

FREE_OVERLAP = 0.5 / math.tan(math.radians(60.0))
"""Overlap in bores of two equal legs at 120 degrees; up to here legs count as apart."""

CLOSEST_RAD, STRAIGHT_RAD = math.radians(25.0), math.radians(170.0)
"""Closer legs count as at the first angle; beyond the second a pair is straight on and has no overlap."""

LEAST_LENGTH_LEFT = 0.2
"""No pipe loses more than the rest of this share of its length to its junctions."""


def junction_lengths_mm(direction: Floats, bore_mm: Floats) -> Floats:
    """Returns by how much (k,) each leg of a junction is shorter than its centreline, mm.

    Args:
        direction: (k, 3) unit, from the node outwards along each leg, k >= 3.
        bore_mm: (k,) hydraulic diameter of each leg at the node.

    >>> tee = np.array([[-1.0, 0.0, 0.0], [1.0, 0.0, 0.0], [0.0, 1.0, 0.0]])
    >>> (junction_lengths_mm(tee, np.array([4.0, 4.0, 4.0])) / 4.0).round(2).tolist()
    [0.12, 0.12, 0.33]
    """
    bore = np.asarray(bore_mm, dtype=np.float64)
    shorter = ALWAYS * bore
    for j in range(len(bore)):
        for k in range(j + 1, len(bore)):
            cosine = float(np.clip(direction[j] @ direction[k], -1.0, 1.0))
            angle = max(math.acos(cosine), CLOSEST_RAD)
            if angle > STRAIGHT_RAD:
                continue
            overlap = 0.5 * (bore[[k, j]] + bore[[j, k]] * math.cos(angle)) / math.sin(angle)
            excess = np.maximum(overlap / bore[[j, k]] - FREE_OVERLAP, 0.0)
            shorter[[j, k]] += (NEAR * excess + NEAR_SQUARE * excess**2) * bore[[j, k]]
            moved = max(float(overlap.mean() - FREE_OVERLAP * bore[[j, k]].mean()), 0.0)
            others = np.ones(len(bore), np.bool_)
            others[[j, k]] = False
            shorter[others] -= MOVED * moved
    return shorter


def without_junctions(segments: Segments, meetings: Junctions) -> Segments:
    """Returns the pipes less what their junctions take from their ends; where that is negative the end gets longer.

    Args:
        segments: pipes as long as their centrelines.
        meetings: every node with the legs of all pipes, those that stand still too; three legs or more are a junction.
    """
    take = np.zeros((segments.n_pipes, 2))
    for j in np.flatnonzero(meetings.used.sum(axis=1) > 2):
        used = meetings.used[j]
        bore_mm = 1e3 * segments.diameter_m[meetings.segment[j, used]]
        side = (meetings.sign[j, used] > 0.0).astype(np.int64)
        take[meetings.pipe[j, used], side] = 1e-3 * junction_lengths_mm(meetings.direction[j, used], bore_mm)
    length = np.empty(len(segments.length_m))
    for e in range(segments.n_pipes):
        part = slice(int(segments.first[e]), int(segments.first[e + 1]))
        length[part] = _cut(segments.length_m[part], take[e])
    return replace(segments, length_m=length)


def _cut(length: Floats, take: Floats) -> Floats:
    """Returns the lengths (k,) of a pipe's segments after its two ends lost `take` (2,)."""
    edge = np.concatenate([[0.0], length.cumsum()])
    off = np.maximum(take, 0.0)
    off *= min(1.0, (1.0 - LEAST_LENGTH_LEFT) * edge[-1] / max(float(off.sum()), 1e-300))
    left = np.diff(np.clip(edge, off[0], edge[-1] - off[1]))
    left[0] += max(-take[0], 0.0)
    left[-1] += max(-take[1], 0.0)
    return np.asarray(left, dtype=np.float64)
