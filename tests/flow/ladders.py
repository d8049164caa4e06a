"""Ladders as flow networks: a feed and a return header with rungs between, and the range of their bores."""

import numpy as np

from morph.flow.bore_range import BoreRange
from morph.flow.network import FlowNetwork, FlowPort, pad_junctions
from morph.flow.pipe_law import straight_pipes
from morph.settings.job import Role

PITCH_M, RUNG_M, LEAD_M = 0.008, 0.08, 0.02
HEADER_MM, BORE_MM = (3.0, 8.0, 10.0), (3.0, 4.0, 6.0)
"""Least, present and greatest bore of headers and rungs."""


def ladder(n_rungs: int, opposite: bool = True, junctions: bool = False) -> tuple[FlowNetwork, BoreRange]:
    """A ladder whose return leaves at the far end of the feed (opposite) or at the same end.

    Args:
        n_rungs: rungs. opposite: where the return leaves. junctions: with the losses of the junctions.
    """
    k = n_rungs
    out = 2 * k - 1 if opposite else k
    start = np.r_[np.arange(k - 1), k + np.arange(k - 1), np.arange(k), 2 * k, out]
    end = np.r_[np.arange(1, k), k + np.arange(1, k), k + np.arange(k), 0, 2 * k + 1]
    m = len(start)
    length = np.r_[np.full(2 * k - 2, PITCH_M), np.full(k, RUNG_M), LEAD_M, LEAD_M]
    low, bore, high = (
        np.r_[np.full(2 * k - 2, header), np.full(k, rung), HEADER_MM[1], HEADER_MM[1]]
        for header, rung in zip(HEADER_MM, BORE_MM, strict=True)
    )
    segments = straight_pipes(length, 1e-3 * bore, 2e-5)
    legs = _legs(start, end, k, opposite) if junctions else {}
    joints = pad_junctions(legs, segments.area_m2)
    network = FlowNetwork(
        branch_ids=tuple(f"B{e}" for e in range(m)),
        node_ids=tuple(f"N{i}" for i in range(2 * k + 2)),
        start=start,
        end=end,
        is_channel=np.r_[np.zeros(2 * k - 2, bool), np.ones(k, bool), False, False],
        through=np.ones(m, bool),
        segments=segments,
        meetings=joints,
        junctions=joints,
        ports=(FlowPort("in", Role.IN, 2 * k, 0), FlowPort("out", Role.OUT, 2 * k + 1, 0)),
        n_supplies=1,
    )
    free = np.r_[np.ones(m - 2, bool), False, False]
    first = 2 * np.arange(m + 1)
    bores = BoreRange(first, *(np.repeat(v, 2) for v in (bore, low, high)), free, ("face:top",) * (2 * m))
    return network, bores


def _legs(start, end, k: int, opposite: bool) -> dict[int, list]:
    at = np.arange(k) * PITCH_M
    feed, back = np.c_[at, 0 * at, 0 * at], np.c_[at, 0 * at + RUNG_M, 0 * at]
    exit_x = (k - 1) * PITCH_M + LEAD_M if opposite else -LEAD_M
    place = np.r_[feed, back, [[-LEAD_M, 0.0, 0.0]], [[exit_x, RUNG_M, 0.0]]]
    legs: dict[int, list] = {}
    for e, (a, b) in enumerate(zip(start.tolist(), end.tolist(), strict=True)):
        along = (place[b] - place[a]) / np.linalg.norm(place[b] - place[a])
        legs.setdefault(a, []).append((e, -1.0, along, e))
        legs.setdefault(b, []).append((e, 1.0, -along, e))
    return {node: rows for node, rows in sorted(legs.items()) if len(rows) > 1}
