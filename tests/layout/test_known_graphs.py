"""Graphs of drawings whose nodes, lengths and bores are known by hand."""

import math

import numpy as np
import pytest

from morph.geometry.curve import curve_at
from morph.layout.extract import find_graph, make_graph
from morph.layout.fit import curvature_per_mm
from morph.layout.graph import DropReason, NodeKind
from morph.settings.job import Samples
from tests.layout.drawing import drawn, ports, ring, settings

pytestmark = pytest.mark.quick

PITCH_MM = 0.5
SIZE_MM = (60.0, 40.0)
STRAIGHT = [([(-9, 20), (70, 20)], 4)]
BOTH = ports(("a", "in", 0, 20), ("b", "out", 60, 20))
ON_PIXEL_MM = 0.05 * PITCH_MM


def graph_of(lines, declared, size_mm=SIZE_MM, pitch_mm=PITCH_MM, samples=Samples.CELLS):
    density = drawn(lines, size_mm, pitch_mm, samples)
    return make_graph(density, settings(density), declared)


def nodes_of(graph, kind):
    return sorted(tuple(node.sheet_mm) for node in graph.nodes if node.kind is kind)


@pytest.mark.parametrize("samples", list(Samples))
@pytest.mark.parametrize("shift_mm", [0.0, 0.13, 0.37])
def test_a_straight_channel(samples, shift_mm):
    y = 20 + shift_mm
    graph = graph_of([([(-9, y), (70, y)], 4)], BOTH, samples=samples)
    (branch,) = graph.branches
    assert [node.port for node in graph.nodes] == ["a", "b"]
    np.testing.assert_allclose([node.sheet_mm for node in graph.nodes], [(0, y), (60, y)], atol=ON_PIXEL_MM)
    assert graph.nodes[0].sheet_mm[0] == 0.0 and graph.nodes[1].sheet_mm[0] == 60.0
    assert branch.length_mm == pytest.approx(60, abs=1e-3)
    np.testing.assert_allclose(branch.bore_mm, 4, atol=2 * ON_PIXEL_MM)
    assert graph.area_ratio == pytest.approx(4 / 40, abs=0.003)


def test_pixels_that_are_not_square_still_measure_in_mm():
    density = drawn(STRAIGHT, SIZE_MM, PITCH_MM)
    from morph.layout.density import Density

    wide = Density(density.value, (60.5, 40.0), density.samples, density.seam, "d", "0")
    declared = ports(("a", "in", 0, 20), ("b", "out", 60.5, 20))
    (branch,) = make_graph(wide, settings(wide), declared).branches
    assert branch.length_mm == pytest.approx(60.5, abs=1e-3)
    assert branch.bore_mm.mean() == pytest.approx(4, abs=ON_PIXEL_MM)


def test_a_slanted_channel_is_carried_on_along_its_own_direction():
    graph = graph_of([([(-9, 12), (69, 28)], 4)], ports(("a", "in", 0, 14), ("b", "out", 60, 26)))
    slope = 16 / 78
    assert nodes_of(graph, NodeKind.PORT) == [
        pytest.approx((0, 12 + 9 * slope), abs=0.25 * PITCH_MM),
        pytest.approx((60, 12 + 69 * slope), abs=0.25 * PITCH_MM),
    ]
    (branch,) = graph.branches
    assert branch.length_mm == pytest.approx(60 * math.hypot(1, slope), abs=0.06)
    np.testing.assert_allclose(branch.bore_mm, 4, atol=0.2 * PITCH_MM)


@pytest.mark.parametrize(("stem_mm", "angle_deg"), [(4, 90), (4, 60), (2.5, 90), (2.5, 60)])
def test_a_tee_keeps_its_bores_and_puts_the_junction_on_the_axis(stem_mm, angle_deg):
    reach = 40 / math.tan(math.radians(angle_deg))
    end = (30 + reach, 60)
    top = 30 + 20 / math.tan(math.radians(angle_deg))
    graph = graph_of([*STRAIGHT, ([(30, 20), end], stem_mm)], BOTH + ports(("c", "out", top, 40)))
    ((x, y),) = nodes_of(graph, NodeKind.JUNCTION)
    assert (x, y) == pytest.approx((30, 20), abs=0.6 * PITCH_MM)
    for branch in graph.branches:
        wanted = stem_mm if "c" in {n.port for n in graph.nodes if n.id in (branch.start, branch.end)} else 4
        assert branch.bore_mm.max() < wanted * 1.04, "the junction disc must not widen a bore"
        assert branch.bore_mm.min() > wanted * 0.96


def test_the_straighter_pair_shares_its_tangent():
    lines = [([(-9, 20), (30, 20), (70, 24)], 4), ([(30, 20), (40, 60)], 4)]
    declared = ports(("a", "in", 0, 20), ("b", "out", 60, 23), ("c", "out", 35, 40))
    graph = graph_of(lines, declared)
    (junction,) = [node for node in graph.nodes if node.kind is NodeKind.JUNCTION]
    away = {}
    for branch in graph.branches:
        at_start = branch.start == junction.id
        parameter = branch.parameter[[0]] if at_start else branch.parameter[[-1]]
        tangent = curve_at(branch.curve, parameter, 1)[0] * (1 if at_start else -1)
        other = branch.end if at_start else branch.start
        name = next(node.port for node in graph.nodes if node.id == other)
        away[name] = tangent / np.hypot(*tangent)
    assert away["a"] @ away["b"] == pytest.approx(-1, abs=1e-9)


def test_a_ring_has_two_half_circles_between_its_leads():
    lines = [(ring((30, 20), 12), 4), ([(-9, 20), (18, 20)], 4), ([(42, 20), (70, 20)], 4)]
    graph = graph_of(lines, BOTH)
    assert len(graph.branches) == 4 and len(graph.nodes) == 4
    halves = [b for b in graph.branches if b.length_mm > 30]
    assert len(halves) == 2
    for branch in halves:
        assert branch.length_mm == pytest.approx(math.pi * 12, rel=0.01)
        middle = branch.sheet_mm[len(branch.sheet_mm) // 4 : 3 * len(branch.sheet_mm) // 4]
        np.testing.assert_allclose(np.hypot(*(middle - [30, 20]).T), 12, atol=0.1 * PITCH_MM)
        curvature = curvature_per_mm(
            branch.curve, branch.parameter[len(branch.parameter) // 4 : len(branch.parameter) // 2]
        )
        np.testing.assert_allclose(curvature, 1 / 12, rtol=0.1)


def test_ports_within_a_ring_split_it():
    graph = graph_of([(ring((30, 20), 12), 4)], ports(("a", "in", 18, 20), ("b", "out", 42, 20)))
    assert [node.kind for node in graph.nodes] == [NodeKind.PORT, NodeKind.PORT]
    assert len(graph.branches) == 2
    for branch in graph.branches:
        assert branch.length_mm == pytest.approx(math.pi * 12, rel=0.02)


def test_a_port_within_a_channel_splits_it_smoothly():
    graph = graph_of(STRAIGHT, BOTH + ports(("m", "access", 33, 21)))
    assert len(graph.branches) == 2
    (middle,) = [node for node in graph.nodes if node.port == "m"]
    assert tuple(middle.sheet_mm) == pytest.approx((33, 20), abs=PITCH_MM)


def test_a_port_on_a_junction_becomes_the_junction():
    lines = [*STRAIGHT, ([(30, 20), (30, 60)], 4)]
    graph = graph_of(lines, BOTH + ports(("c", "out", 30, 40), ("j", "access", 30, 20)))
    (node,) = [node for node in graph.nodes if node.port == "j"]
    assert sum(node.id in (b.start, b.end) for b in graph.branches) == 3


@pytest.mark.parametrize(("declared_x", "wanted_x"), [(9, 9), (11.5, 11.5), (7.6, 7.6)])
def test_a_port_near_a_blind_end_extends_or_trims_it(declared_x, wanted_x):
    graph = graph_of([([(10, 20), (70, 20)], 4)], ports(("a", "in", declared_x, 20.5), ("b", "out", 60, 20)))
    (node,) = [node for node in graph.nodes if node.port == "a"]
    assert tuple(node.sheet_mm) == pytest.approx((wanted_x, 20), abs=0.6 * PITCH_MM)
    assert len(graph.branches) == 1


def test_a_channel_that_stops_short_of_the_frame_reaches_its_port():
    graph = graph_of([([(4, 20), (56, 20)], 4)], BOTH)
    np.testing.assert_allclose([node.sheet_mm for node in graph.nodes], [(0, 20), (60, 20)], atol=0.1 * PITCH_MM)


def test_a_port_on_a_header_along_the_frame_opens_it_there():
    lines = [([(1, -9), (1, 49)], 8), ([(0, 20), (70, 20)], 4)]
    graph = graph_of(lines, ports(("a", "in", 0, 8), ("b", "out", 60, 20)))
    (node,) = [node for node in graph.nodes if node.port == "a"]
    assert node.sheet_mm[0] == 0.0 and node.sheet_mm[1] == pytest.approx(8, abs=1.0)
    assert len(nodes_of(graph, NodeKind.JUNCTION)) == 2


def test_a_blind_branch_is_kept_and_named_with_place_and_length():
    graph = graph_of([*STRAIGHT, ([(30, 20), (30, 32)], 4)], BOTH)
    ((x, y),) = nodes_of(graph, NodeKind.DEAD_END)
    assert x == pytest.approx(30, abs=0.1 * PITCH_MM)
    assert 31 < y < 33  # the cap's centre is at 32, its end wall at 34
    (notice,) = [n for n in graph.notices if n.code == "dead-end"]
    assert notice.sheet_mm == pytest.approx((x, y)) and "11." in notice.text and notice.branch_ids


def test_an_open_end_without_a_port_is_named():
    graph = graph_of([*STRAIGHT, ([(30, 20), (30, 60)], 4)], BOTH)
    (notice,) = [n for n in graph.notices if n.code == "open-end-not-declared"]
    assert notice.sheet_mm == pytest.approx((30, 40), abs=0.1 * PITCH_MM)
    assert nodes_of(graph, NodeKind.DEAD_END) == [pytest.approx((30, 40), abs=0.1 * PITCH_MM)]


def test_a_piece_without_a_port_is_left_out_listed_and_kept_aside():
    lines = [([(-9, 10), (70, 10)], 4), ([(10, 30), (50, 30)], 4)]
    graph = graph_of(lines, ports(("a", "in", 0, 10), ("b", "out", 60, 10)))
    (dropped,) = [d for d in graph.dropped if d.reason is DropReason.NO_PORT]
    assert dropped.sheet_mm == pytest.approx((30, 30), abs=0.5) and dropped.area_mm2 == pytest.approx(160, rel=0.1)
    assert [n.code for n in graph.notices] == ["piece-without-port"]
    assert len(graph.branches) == len(graph.loose_branches) == 1


def test_a_spur_is_pruned_and_listed():
    graph = graph_of([*STRAIGHT, ([(30, 20), (30, 22.6)], 2)], BOTH)
    assert len(graph.branches) == 1
    assert all(d.reason is DropReason.SPUR for d in graph.dropped)


def test_a_plate_is_one_fat_branch_and_named():
    density = drawn([([(28, 20), (32, 20)], 22), *STRAIGHT], SIZE_MM, PITCH_MM)
    graph = find_graph(density, settings(density), BOTH)
    assert len(graph.branches) <= 5, "no hairball"
    blob = drawn([([(4, 20), (8, 20)], 30)], SIZE_MM, PITCH_MM)
    fat = find_graph(blob, settings(blob), ports(("a", "in", 0, 20)))
    assert len(fat.branches) <= 3
    assert "wide-region" in {n.code for n in fat.notices}


@pytest.mark.parametrize("width_px", [1.6, 2.0, 3.0])
def test_thin_channels_are_traced_on_a_finer_grid(width_px):
    width = width_px * PITCH_MM
    graph = graph_of([([(-9, 10), (70, 24)], width)], ports(("a", "in", 0, 11.6), ("b", "out", 60, 22.2)))
    (branch,) = graph.branches
    assert branch.length_mm == pytest.approx(60 * math.hypot(1, 14 / 79), rel=0.002)
    np.testing.assert_allclose(branch.bore_mm, width, atol=0.35 * PITCH_MM)


def test_samples_are_dense_end_on_nodes_and_lengths_are_by_quadrature():
    lines = [(ring((30, 20), 12), 4), ([(-9, 20), (18, 20)], 3), ([(42, 20), (70, 20)], 6)]
    graph = graph_of(lines, BOTH)
    place = {node.id: node.sheet_mm for node in graph.nodes}
    for branch in graph.branches:
        gap = np.hypot(*np.diff(branch.sheet_mm, axis=0).T)
        assert gap.max() <= min(branch.bore_mm.min() / 4, 1.0) + 1e-9
        np.testing.assert_allclose(curve_at(branch.curve, branch.parameter), branch.sheet_mm, atol=1e-9)
        np.testing.assert_array_equal(branch.sheet_mm[0], place[branch.start])
        np.testing.assert_array_equal(branch.sheet_mm[-1], place[branch.end])
        assert (np.diff(branch.parameter) > 0).all()
        fine = curve_at(branch.curve, np.linspace(*branch.parameter[[0, -1]], 200001))
        assert branch.length_mm == pytest.approx(np.hypot(*np.diff(fine, axis=0).T).sum(), rel=1e-7)


def test_ids_are_numbered_by_place():
    lines = [*STRAIGHT, ([(30, -9), (30, 60)], 4)]
    graph = graph_of(lines, BOTH + ports(("c", "out", 30, 40), ("d", "in", 30, 0)))
    key = [(round(n.sheet_mm[1], 1), round(n.sheet_mm[0], 1)) for n in graph.nodes]
    assert key == sorted(key) and [n.id for n in graph.nodes] == [f"N{i}" for i in range(1, 6)]
    middle = [b.sheet_mm[len(b.sheet_mm) // 2] for b in graph.branches]
    key = [(round(y, 1), round(x, 1)) for x, y in middle]
    assert key == sorted(key)
