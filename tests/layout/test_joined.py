"""Full wraps: the graph does not know where the image was cut, and knows the loops that go all the way round."""

import math
from dataclasses import replace

import numpy as np
import pytest

from morph.core.errors import GeometryError, SettingError
from morph.geometry.curve import curve_at
from morph.layout.extract import find_graph, make_graph
from morph.layout.fold import fold, normalise
from morph.layout.graph import count_loops
from morph.layout.joined import count_around, find_first_column
from morph.layout.web import Joint, Run, Web
from morph.settings.job import AcceptSettings, LevelRule, Samples, Seam
from tests.layout.drawing import drawn, ports, settings

pytestmark = pytest.mark.quick

W, H = 100.0, 60.0
LADDER = [
    ([(-10, 15), (110, 15)], 5.0),
    ([(-10, 45), (110, 45)], 4.0),
    ([(20, 15), (20, 45)], 3.5),
    ([(60, 15), (75, 45)], 3.5),
    ([(20, 0), (20, 15)], 5.0),
    ([(85, 45), (85, 60)], 5.0),
]
"""Two rings and two rungs: pieces 1, loops 3 (two rings, and the field between the rungs)."""
HELIX = [([(10, -10), (10, 10), (150, 50), (150, 70)], 5.0)]
"""One channel that climbs 1.4 turns."""


def around(lines, samples=Samples.CELLS, pitch=0.5, size=(W, H)):
    """The drawing with every channel repeated a turn to both sides, seam joined."""
    turns = range(-3, 2)
    lines = [([(x + k * size[0], y) for x, y in points], width) for points, width in lines for k in turns]
    return replace(drawn(lines, size, pitch, samples), seam=Seam.JOINED)


def turned(density, columns):
    """The same layout with its image turned by whole columns to the right."""
    if density.samples is Samples.CELLS:
        return replace(density, value=np.roll(density.value, columns, axis=1))
    value = np.roll(density.value[:, :-1], columns, axis=1)
    return replace(density, value=np.column_stack([value, value[:, 0]]))


def ladder_graph(samples=Samples.CELLS, columns=0):
    density = turned(around(LADDER, samples), columns)
    shift = columns * density.pitch_mm[0]
    named = ports(("a", "in", (20 + shift) % W, 0), ("b", "out", (85 + shift) % W, 60))
    return make_graph(density, settings(density, seam=Seam.JOINED), named), shift


def shape(graph, shift=0.0):
    """Nodes and branch samples turned back by `shift`, in an order that does not depend on ids."""

    def back(place):
        moved = np.array(place, dtype=float)
        moved[..., 0] -= shift
        return moved

    nodes = np.array(sorted(((back(n.sheet_mm)[0] + 0.5) % W, back(n.sheet_mm)[1]) for n in graph.nodes))
    curves = []
    for branch in graph.branches:
        points = back(branch.sheet_mm)
        if (points[0, 1], points[0, 0]) > (points[-1, 1], points[-1, 0] % W):
            points = points[::-1]
        points[:, 0] -= W * math.floor((points[0, 0] + 0.5) / W)
        curves.append(points)
    return nodes, sorted(curves, key=lambda p: (len(p), round(p[0, 1], 3), round(p[-1, 0], 3)))


@pytest.mark.parametrize("samples", list(Samples))
def test_turning_the_image_turns_the_graph_and_nothing_else(samples):
    base, _ = ladder_graph(samples)
    nodes, curves = shape(base)
    for columns in (1, 40, 77, 133, 199):
        graph, shift = ladder_graph(samples, columns)
        found_nodes, found_curves = shape(graph, shift)
        np.testing.assert_allclose(found_nodes, nodes, atol=1e-6)
        assert len(found_curves) == len(curves)
        for found, wanted in zip(found_curves, curves, strict=True):
            np.testing.assert_allclose(found, wanted, atol=1e-6)
        assert graph.area_ratio == pytest.approx(base.area_ratio, abs=1e-12)


@pytest.mark.parametrize("columns", [0, 60])
def test_loops_all_the_way_round_are_counted(columns):
    graph, _ = ladder_graph(columns=columns)
    number = {node.id: k for k, node in enumerate(graph.nodes)}
    assert count_loops(len(number), [(number[b.start], number[b.end]) for b in graph.branches]) == (1, 3)
    assert [(level.pieces, level.holes) for level in graph.levels] == [(1, 3)] * 3
    assert graph.notices == () and graph.turn_mm == W
    assert all(0.0 <= node.sheet_mm[0] < W for node in graph.nodes)


def test_centrelines_are_those_drawn_also_across_the_seam():
    graph, _ = ladder_graph(columns=160)
    rings = [b for b in graph.branches if np.ptp(b.sheet_mm[:, 1]) < 1.0]
    crossing = [b for b in rings if b.sheet_mm[:, 0].min() < 0.0 or b.sheet_mm[:, 0].max() > W]
    assert len(crossing) >= 1
    for branch in rings:
        level, width = (15.0, 5.0) if branch.sheet_mm[0, 1] < 30 else (45.0, 4.0)
        # Away from junctions the centreline is where it was drawn, to a tenth of a 0.5 mm pixel.
        middle = branch.sheet_mm[len(branch.sheet_mm) // 4 : -len(branch.sheet_mm) // 4]
        np.testing.assert_allclose(middle[:, 1], level, atol=0.05)
        np.testing.assert_allclose(branch.bore_mm[len(middle) // 2 : -len(middle) // 2], width, atol=0.1)


def test_a_branch_across_the_seam_is_one_smooth_curve():
    graph, _ = ladder_graph(columns=100)
    n_crossings = 0
    for branch in graph.branches:
        for edge in (0.0, W):
            inside = (branch.sheet_mm[:, 0] - edge)[:-1] * (branch.sheet_mm[:, 0] - edge)[1:] < 0
            for k in np.flatnonzero(inside):
                at = np.linspace(branch.parameter[k] - 1.0, branch.parameter[k + 1] + 1.0, 201)
                bend = curve_at(branch.curve, at, 2)
                # Straight rings: no bend at the seam (a kink of 1 degree over 1 mm would be 0.017 per mm).
                assert np.abs(bend).max() < 0.002
                n_crossings += 1
    assert n_crossings == 2


@pytest.mark.parametrize("columns", [0, 45, 130])
def test_a_helix_of_more_than_a_turn_is_one_branch(columns):
    density = turned(around(HELIX), columns)
    shift = columns * 0.5
    named = ports(("a", "in", (10 + shift) % W, 0), ("b", "out", (150 + shift) % W, 60))
    graph = make_graph(density, settings(density, seam=Seam.JOINED), named)
    (branch,) = graph.branches
    # Two bends cut their corners by some tenths of a mm.
    assert branch.length_mm == pytest.approx(20.0 + math.hypot(140.0, 40.0), abs=2.0)
    assert np.ptp(branch.sheet_mm[:, 0]) == pytest.approx(140.0, abs=0.4)
    middle = np.abs(branch.sheet_mm[:, 1] - 30.0) < 12.0
    line = branch.sheet_mm[middle]
    slope = np.polyfit(line[:, 0], line[:, 1], 1)[0]
    assert abs(slope) == pytest.approx(40.0 / 140.0, abs=0.002)
    assert [(level.pieces, level.holes) for level in graph.levels] == [(1, 0)] * 3


def test_a_ring_without_a_junction_closes_on_itself():
    density = around([([(-10, 30), (110, 30)], 5.0)])
    graph = find_graph(density, settings(density), ports(("a", "in", 0, 30), ("b", "out", 50, 30)))
    assert len(graph.nodes) == len(graph.branches) == 2
    assert sum(branch.length_mm for branch in graph.branches) == pytest.approx(W, abs=1e-3)


def test_keep_area_counts_the_seam_once():
    density = around(LADDER)
    wanted = settings(density, seam=Seam.JOINED, level=LevelRule.KEEP_AREA, area_ratio=0.2)
    named = ports(("a", "in", 20, 0), ("b", "out", 85, 60))
    one = make_graph(density, wanted, named)
    shifted = turned(density, 50)
    two = make_graph(shifted, wanted, ports(("a", "in", 45, 0), ("b", "out", 10, 60)))
    assert one.level == two.level and one.area_ratio == pytest.approx(0.2, abs=0.01)


@pytest.mark.parametrize(
    ("rows", "counts"),
    [
        (["000", "111", "000"], (1, 1)),
        (["000", "101", "000"], (1, 0)),
        (["010", "010", "010"], (1, 0)),
        (["111", "000", "111"], (2, 2)),
        (["111", "010", "111"], (1, 2)),
        (["11011", "01010", "11011"], (1, 1)),
        (["11011", "10001", "11011"], (1, 0)),
        (["0110", "0000", "0110", "0000"], (2, 0)),
        (["10001", "01010", "00100"], (1, 1)),
    ],
)
def test_pieces_and_loops_around_by_hand(rows, counts):
    """Counted by hand on a strip of paper glued to a ring; diagonal coolant is joined, diagonal metal is not."""
    mask = np.array([[c == "1" for c in row] for row in rows])
    assert count_around(mask) == counts
    assert count_around(np.roll(mask, 1, axis=1)) == counts


def test_the_first_column_is_the_same_however_the_image_is_turned():
    rng = np.random.default_rng(3)
    for value in (rng.random((6, 31)), np.tile(rng.random((6, 5)), 6), np.ones((4, 9))):
        first = find_first_column(value)
        wanted = np.roll(value, -first, axis=1)
        for turn in range(value.shape[1]):
            moved = np.roll(value, turn, axis=1)
            np.testing.assert_array_equal(np.roll(moved, -find_first_column(moved), axis=1), wanted)


def test_nodes_on_the_seam_must_agree():
    density = around(LADDER, Samples.NODES)
    value = density.value.copy()
    value[20, -1] += 0.5
    with pytest.raises(SettingError) as caught:
        find_graph(replace(density, value=value), settings(density), ports(("a", "in", 20, 0), ("b", "out", 85, 60)))
    assert caught.value.code == "seam-edges-differ" and "y = 10.00 mm" in caught.value.found


def test_a_port_off_every_channel_is_named_by_its_place_on_the_sheet():
    density = turned(around(LADDER), 133)
    with pytest.raises(GeometryError) as caught:
        find_graph(density, settings(density), ports(("a", "in", 40, 30), ("b", "out", 51.5, 60)))
    assert caught.value.code == "port-off-channel"
    assert "[40, 30]" in caught.value.where and "51.5" in caught.value.do and "86.5" in caught.value.do
    with pytest.raises(GeometryError) as caught:
        find_graph(density, settings(density), ports(("a", "in", 51.5, 60), ("b", "out", 51.0, 60)))
    assert caught.value.code == "ports-on-one-node"


def test_a_strip_that_does_not_repeat_cannot_be_folded():
    web = Web()
    ends = [web.add_joint(Joint(np.array([x, 5.0]), 1.0)) for x in (0.0, 12.0)]
    place = np.column_stack([np.linspace(0, 12, 30), np.full(30, 5.0)])
    web.add_run(Run(*ends, place, np.ones(30), np.ones(30, dtype=bool)))
    with pytest.raises(GeometryError) as caught:
        fold(web, 20.0, 5.0, 8.0)
    assert caught.value.code == "seam-not-traced"


def test_normalising_moves_whole_turns_and_keeps_every_run():
    web = Web()
    ends = [web.add_joint(Joint(np.array([x, 5.0]), 1.0)) for x in (3.0, 27.0)]
    place = np.column_stack([np.linspace(3, 47, 30), np.full(30, 5.0)])
    key = web.add_run(Run(*ends, place, np.ones(30), None, 20.0))
    normalise(web, 20.0, 18.5)
    run = web.runs[key]
    assert [float(web.joints[end].place_mm[0]) for end in ends] == [1.5, 5.5]
    assert run.shift_mm == 40.0 and run.length_mm == pytest.approx(44.0)
    np.testing.assert_allclose(run.place_mm[:, 0], place[:, 0] - 1.5)
    back = run.reversed()
    assert back.place_mm[0, 0] == 5.5 and back.place_mm[-1, 0] == pytest.approx(1.5 - 40.0)


def test_a_gap_across_the_seam_is_suggested_and_built():
    """A ring around the sheet with a grey gap from x = 95 over the seam to x = 5."""
    lines = [([(5, 30), (95, 30)], 5.0), ([(50, 0), (50, 30)], 4.0), ([(70, 30), (70, 60)], 4.0)]
    full = drawn(lines, (W, H), 0.5)
    neck = around([([(85, 30), (115, 30)], 4.0)])
    density = replace(full, value=np.maximum(full.value, 0.4 * neck.value), seam=Seam.JOINED)
    named = ports(("a", "in", 50, 0), ("b", "out", 70, 60))
    graph = make_graph(density, settings(density, seam=Seam.JOINED), named)
    (bridge,) = graph.bridges
    assert bridge.likely and bridge.lowest_density == pytest.approx(0.4, abs=0.02)
    assert min(bridge.middle_mm[0] % W, W - bridge.middle_mm[0] % W) < 0.5
    assert bridge.middle_mm[1] == pytest.approx(30, abs=0.5)
    accepted = (AcceptSettings(bridge=True, at_mm=(0.0, 30.0)),)
    joined = make_graph(density, settings(density, seam=Seam.JOINED), named, accepts=accepted)
    index = {node.id: k for k, node in enumerate(joined.nodes)}
    loops = count_loops(len(joined.nodes), [(index[b.start], index[b.end]) for b in joined.branches])
    assert loops == (1, 1) and not joined.dead_ends
    total = sum(branch.length_mm for branch in joined.branches)
    assert total == pytest.approx(W + 2 * 30, abs=1.0)
    back = make_graph(
        turned(density, 37),
        settings(density, seam=Seam.JOINED),
        ports(("a", "in", 68.5, 0), ("b", "out", 88.5, 60)),
        accepts=(AcceptSettings(bridge="G1"),),
    )
    assert sum(branch.length_mm for branch in back.branches) == pytest.approx(total, abs=1e-6)


def test_a_trim_on_a_joined_seam_keeps_the_rest():
    density = around([*LADDER, ([(95, 45), (112, 30)], 3.5)])
    named = ports(("a", "in", 20, 0), ("b", "out", 85, 60))
    graph = make_graph(density, settings(density, seam=Seam.JOINED), named)
    (end,) = graph.dead_ends
    assert end.sheet_mm[0] % W == pytest.approx(13.3, abs=1.0)
    accepted = (AcceptSettings(trim=True, at_mm=(end.sheet_mm[0] % W, end.sheet_mm[1])),)
    trimmed = make_graph(density, settings(density, seam=Seam.JOINED), named, accepts=accepted)
    assert not trimmed.dead_ends and len(trimmed.branches) == len(graph.branches) - 2
