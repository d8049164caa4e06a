"""Suggested bridges: offered at blocked channels, not in clouds, and joined only when asked."""

import math

import numpy as np
import pytest

from morph.core.errors import SettingError
from morph.core.fingerprint import fingerprint
from morph.layout.density import Density
from morph.layout.extract import find_graph, make_graph, require_circuits
from morph.layout.graph import DropReason
from morph.layout.join import apply_bridges
from tests.layout.drawing import drawn, ports, ring, settings

pytestmark = pytest.mark.quick

SIZE_MM = (60.0, 40.0)
BOTH = ports(("a", "in", 0, 20), ("b", "out", 60, 20))


def necked(lines, necks, grey):
    """Returns a density with `lines` in full and `necks` (stretches that join them) at density `grey`."""
    full, neck = drawn(lines, SIZE_MM, 0.5), drawn(necks, SIZE_MM, 0.5)
    value = np.maximum(full.value, grey * neck.value)
    return Density(value, SIZE_MM, full.samples, full.seam, "necked.npy", "0" * 16)


STRAIGHT_CUT = necked([([(-9, 20), (24, 20)], 4), ([(32, 20), (70, 20)], 4)], [([(20, 20), (36, 20)], 4)], 0.4)


def test_a_blocked_channel_is_suggested_and_not_built():
    graph = find_graph(STRAIGHT_CUT, settings(STRAIGHT_CUT), BOTH)
    assert len(graph.branches) == 2
    (bridge,) = graph.bridges
    assert bridge.likely and bridge.lowest_density == pytest.approx(0.4, abs=0.02)
    assert 4 < bridge.gap_mm < 8  # end walls 4 mm apart, cap centres 8 mm
    assert "bridge-suggested" in {notice.code for notice in graph.notices}


def test_an_accepted_bridge_makes_one_channel():
    graph = find_graph(STRAIGHT_CUT, settings(STRAIGHT_CUT), BOTH)
    joined = apply_bridges(graph, ["G1"])
    (branch,) = joined.branches
    assert branch.length_mm == pytest.approx(60, abs=0.05)
    np.testing.assert_allclose(branch.sheet_mm[:, 1], 20, atol=0.05)
    np.testing.assert_allclose(branch.bore_mm, 4, atol=0.3)
    assert not joined.bridges and not [n for n in joined.notices if n.code in {"dead-end", "bridge-suggested"}]
    require_circuits(joined, BOTH)


def test_a_bridge_onto_a_channel_makes_a_junction_there():
    density = necked([([(-9, 10), (70, 10)], 4), ([(30, 20), (30, 60)], 4)], [([(30, 10), (30, 24)], 4)], 0.42)
    declared = ports(("a", "in", 0, 10), ("b", "out", 60, 10), ("c", "out", 30, 40))
    graph = find_graph(density, settings(density), declared)
    joined = apply_bridges(graph, [b.id for b in graph.bridges if b.likely])
    (junction,) = [n for n in joined.nodes if n.kind.value == "junction"]
    assert tuple(junction.sheet_mm) == pytest.approx((30, 10), abs=0.6)
    assert len(joined.branches) == 3


def test_a_loose_piece_comes_back_with_its_bridges():
    """A ring cut twice leaves an arc without a port; both bridges together restore the loop."""
    angle = np.radians(np.linspace(-145, 325, 300))
    circle = lambda a: np.column_stack([30 + 12 * np.cos(a), 20 + 12 * np.sin(a)])  # noqa: E731
    lower, upper = np.radians(np.linspace(-170, -10, 100)), np.radians(np.linspace(40, 140, 100))
    del angle
    lines = [([(-9, 20), (18, 20)], 4), ([(42, 20), (70, 20)], 4)]
    lines += [(circle(np.radians(np.linspace(180, 370, 200))), 4), (circle(upper), 4)]
    density = necked(lines, [(ring((30, 20), 12), 4)], 0.4)
    del lower
    graph = find_graph(density, settings(density), BOTH)
    assert len(graph.loose_branches) == 1
    assert [d.reason for d in graph.dropped].count(DropReason.NO_PORT) == 1
    joined = apply_bridges(graph, [b.id for b in graph.bridges if b.likely])
    assert not joined.loose_branches
    assert DropReason.NO_PORT not in [d.reason for d in joined.dropped]
    assert len(joined.branches) - len(joined.nodes) + 1 == 1
    upper_half = max(joined.branches, key=lambda b: b.sheet_mm[:, 1].max())
    assert upper_half.length_mm == pytest.approx(math.pi * 12, rel=0.05)


def test_no_gap_no_suggestion():
    density = drawn([([(-9, 20), (70, 20)], 4), ([(30, 20), (30, 32)], 4)], SIZE_MM, 0.5)
    assert make_graph(density, settings(density), BOTH).bridges == ()


def test_a_cloud_is_not_a_blocked_channel():
    full = drawn([([(-9, 8), (70, 8)], 4), ([(30, 8), (30, 20)], 4), ([(-9, 36), (70, 36)], 4)], SIZE_MM, 0.5)
    y = np.arange(80)[:, None] * 0.5 + 0.25
    cloud = np.where((y > 15) & (y < 34), 0.38, 0.0)
    density = Density(np.maximum(full.value, cloud), SIZE_MM, full.samples, full.seam, "c", "0")
    declared = ports(("a", "in", 0, 8), ("b", "out", 60, 8), ("c", "in", 0, 36), ("d", "out", 60, 36))
    graph = make_graph(density, settings(density), declared)
    assert not any(bridge.likely for bridge in graph.bridges)


def test_an_unknown_suggestion_is_refused():
    graph = find_graph(STRAIGHT_CUT, settings(STRAIGHT_CUT), BOTH)
    with pytest.raises(SettingError) as caught:
        apply_bridges(graph, ["G1", "G7"])
    assert caught.value.code == "bridge-unknown" and "G7" in caught.value.found


def test_branches_that_no_bridge_touches_stay_as_they_are():
    density = necked(
        [([(-9, 30), (70, 30)], 4), ([(-9, 10), (24, 10)], 4), ([(32, 10), (70, 10)], 4)],
        [([(20, 10), (36, 10)], 4)],
        0.4,
    )
    declared = ports(("a", "in", 0, 10), ("b", "out", 60, 10), ("c", "in", 0, 30), ("d", "out", 60, 30))
    graph = find_graph(density, settings(density), declared)
    joined = apply_bridges(graph, ["G1"])
    before = max(graph.branches, key=lambda b: b.sheet_mm[:, 1].mean())
    after = max(joined.branches, key=lambda b: b.sheet_mm[:, 1].mean())
    assert fingerprint(before.curve) == fingerprint(after.curve)
    assert fingerprint(before.bore_mm) == fingerprint(after.bore_mm)
    assert apply_bridges(graph, []).nodes[0].port == graph.nodes[0].port
