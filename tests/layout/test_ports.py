"""Ports: what the frame shows, and every way in which declared ports can be wrong."""

import pytest

from morph.core.errors import MorphError
from morph.layout.extract import find_graph, make_graph
from morph.layout.frame import RunKind, Side
from morph.layout.ports import find_port_candidates
from tests.layout.drawing import drawn, ports, ring, settings

pytestmark = pytest.mark.quick

SIZE_MM = (60.0, 40.0)
STRAIGHT = drawn([([(-9, 20), (70, 20)], 4)], SIZE_MM, 0.5)


def refused(density, declared, code):
    with pytest.raises(MorphError) as caught:
        make_graph(density, settings(density), declared)
    assert caught.value.code == code
    return caught.value


def test_candidates_have_place_side_width_and_kind():
    density = drawn([([(-9, 20), (70, 20)], 4), ([(20, 20), (20, 60)], 6), ([(32, 0.5), (56, 0.5)], 4)], SIZE_MM, 0.5)
    found = {candidate.side: candidate for candidate in find_port_candidates(density, 0.5)}
    assert set(found) == set(Side)
    assert found[Side.LEFT].sheet_mm == pytest.approx((0, 20), abs=0.1)
    assert found[Side.RIGHT].sheet_mm == pytest.approx((60, 20), abs=0.1)
    assert found[Side.TOP].sheet_mm == pytest.approx((20, 40), abs=0.1)
    assert found[Side.TOP].width_mm == pytest.approx(6, abs=0.5)
    assert found[Side.TOP].kind is RunKind.CUT
    assert found[Side.BOTTOM].kind is RunKind.CONTACT
    assert found[Side.BOTTOM].sheet_mm == pytest.approx((44, 0), abs=0.5)


def test_a_round_body_that_touches_the_frame_is_a_wall_contact():
    density = drawn([([(30, 9), (30.1, 9)], 20), ([(30, 9), (30, 60)], 4)], SIZE_MM, 0.5)
    kinds = {c.side: c.kind for c in find_port_candidates(density, 0.5)}
    assert kinds == {Side.BOTTOM: RunKind.CONTACT, Side.TOP: RunKind.CUT}


def test_no_port_at_all():
    refused(STRAIGHT, (), "port-missing")


@pytest.mark.parametrize("place", [(-0.1, 20), (60.1, 20), (0, -1), (30, 41)])
def test_a_port_off_the_sheet(place):
    refused(STRAIGHT, ports(("a", "in", *place), ("b", "out", 60, 20)), "port-outside-sheet")


@pytest.mark.parametrize("second", [("a", "out", 60, 20), ("b", "out", 0, 20)])
def test_ports_declared_twice(second):
    refused(STRAIGHT, ports(("a", "in", 0, 20), second), "port-duplicate")


def test_a_port_off_every_channel_lists_where_channels_meet_the_frame():
    error = refused(STRAIGHT, ports(("a", "in", 0, 30), ("b", "out", 60, 20)), "port-off-channel")
    assert "[0.0, 20.0] (left, 4.0 mm wide, cut by frame)" in error.do
    assert "[60.0, 20.0] (right" in error.do
    assert "10.0 mm away" in error.found and '"a"' in error.where


def test_a_port_within_one_bore_is_taken_and_just_beyond_is_not():
    make_graph(STRAIGHT, settings(STRAIGHT), ports(("a", "in", 0, 23.8), ("b", "out", 60, 20)))
    refused(STRAIGHT, ports(("a", "in", 0, 24.4), ("b", "out", 60, 20)), "port-off-channel")


def test_two_ports_on_one_end():
    declared = ports(("a", "in", 0, 20), ("b", "out", 60, 20), ("c", "out", 60, 21))
    error = refused(STRAIGHT, declared, "ports-on-one-node")
    assert '"b"' in error.found and '"c"' in error.found


@pytest.mark.parametrize("roles", [("in", "in"), ("out", "access"), ("access", "access"), ("in", "access")])
def test_a_piece_without_a_way_in_or_out(roles):
    declared = ports(("a", roles[0], 0, 20), ("b", roles[1], 60, 20))
    error = refused(STRAIGHT, declared, "piece-without-in-or-out")
    assert "a (" in error.found and "b (" in error.found
    assert len(find_graph(STRAIGHT, settings(STRAIGHT), declared).branches) == 1


def test_each_piece_needs_its_own_way_in_and_out():
    density = drawn([([(-9, 10), (70, 10)], 4), ([(-9, 30), (70, 30)], 4)], SIZE_MM, 0.5)
    names = ports(("a", "in", 0, 10), ("b", "in", 60, 10), ("c", "out", 0, 30), ("d", "out", 60, 30))
    assert "a (in), b (in)" in refused(density, names, "piece-without-in-or-out").found


def test_a_cut_piece_names_the_suggestion_that_would_join_it():
    grey = drawn([([(-9, 20), (27, 20)], 4), ([(33, 20), (70, 20)], 4)], SIZE_MM, 0.5)
    import numpy as np

    from morph.layout.density import Density

    neck = drawn([([(25, 20), (35, 20)], 4)], SIZE_MM, 0.5)
    value = np.maximum(grey.value, 0.4 * neck.value)
    density = Density(value, SIZE_MM, grey.samples, grey.seam, "d", "0")
    error = refused(density, ports(("a", "in", 0, 20), ("b", "out", 60, 20)), "piece-without-in-or-out")
    assert "G1" in error.do


def test_a_corner_opening_is_one_opening():
    density = drawn([([(-9, -9), (30, 30), (70, 30)], 6)], SIZE_MM, 0.5)
    graph = make_graph(density, settings(density), ports(("a", "in", 0, 1.5), ("b", "out", 60, 30)))
    assert len(graph.branches) == 1 and len(graph.nodes) == 2


def test_a_ring_with_one_port_is_refused_as_without_a_way_out():
    density = drawn([(ring((30, 20), 12), 4)], SIZE_MM, 0.5)
    refused(density, ports(("a", "in", 18, 20)), "piece-without-in-or-out")
