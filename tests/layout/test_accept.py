"""Accepted suggestions: by id, by place, and every way in which that can fail."""

import numpy as np
import pytest

from morph.core.errors import SettingError
from morph.layout.accept import accept
from morph.layout.density import Density
from morph.layout.extract import find_graph, graph_pieces, make_graph
from morph.layout.graph import Ahead, DropReason
from morph.settings.job import AcceptSettings
from tests.layout.drawing import drawn, ports, settings

pytestmark = pytest.mark.quick

SIZE_MM, PITCH_MM, GREY = (90.0, 60.0), 0.5, 0.38
PORTS = ports(("a", "in", 0, 30), ("b", "out", 90, 30))
LINES = [
    ([(-9, 30), (38, 30)], 5.0),
    ([(52, 30), (100, 30)], 5.0),
    ([(20, 30), (20, 45)], 4.0),
    ([(70, 30), (70, 12)], 4.0),
]
"""One channel cut by a grey gap between x = 40.5 and 49.5, and two branches that end blind at (20, 47) and (70, 10)."""
NECK = [([(34, 30), (56, 30)], 3.0)]
"""The grey way is 3 mm wide, narrower than the channel."""


@pytest.fixture(scope="module")
def found():
    full, neck = drawn(LINES, SIZE_MM, PITCH_MM), drawn(NECK, SIZE_MM, PITCH_MM)
    value = np.maximum(full.value, GREY * neck.value)
    density = Density(value, SIZE_MM, full.samples, full.seam, "gap.npy", "0" * 16)
    return density, find_graph(density, settings(density), PORTS)


def refused(graph, code, *accepts):
    with pytest.raises(SettingError) as caught:
        accept(graph, accepts)
    assert caught.value.code == code
    return caught.value


def test_both_blocked_channels_and_the_gap_are_named_with_their_place(found):
    """The place is where the coolant ends: the tip of the round end as drawn."""
    _, graph = found
    ends = {end.id: end for end in graph.dead_ends}
    wanted = {"D1": ((70, 10), 4.0), "D2": ((40.5, 30), 5.0), "D3": ((49.5, 30), 5.0), "D4": ((20, 47), 4.0)}
    assert set(ends) == set(wanted)
    for name, (place, bore_mm) in wanted.items():
        assert np.hypot(*np.subtract(ends[name].sheet_mm, place)) <= PITCH_MM, name
        assert ends[name].bore_mm == pytest.approx(bore_mm, abs=0.3)
    assert ends["D4"].length_mm == pytest.approx(15, abs=1.5)
    assert ends["D1"].length_mm == pytest.approx(18, abs=1.5)
    assert ends["D1"].ahead is Ahead.SOLID and ends["D4"].ahead is Ahead.SOLID
    for name, other in (("D2", "D3"), ("D3", "D2")):
        assert ends[name].ahead is Ahead.GREY and ends[name].bridge == "G1"
        assert ends[name].onto == ends[other].node
        assert ends[name].gap_mm == pytest.approx(9, abs=2 * PITCH_MM)  # a pixel at either end
        assert ends[name].lowest_density == pytest.approx(GREY, abs=0.02)
    assert np.hypot(*np.subtract(graph.bridges[0].middle_mm, (45, 30))) <= PITCH_MM


def test_an_accepted_gap_joins_the_ports_with_the_grey_bore(found):
    density, graph = found
    assert len(graph_pieces(graph)) == 2
    joined = make_graph(density, settings(density), PORTS, accepts=(AcceptSettings(bridge="G1"),))
    assert sorted(graph_pieces(joined)[0]) == ["a", "b"]
    (through,) = [b for b in joined.branches if b.sheet_mm[:, 0].min() < 45 < b.sheet_mm[:, 0].max()]
    middle = np.interp(45, through.sheet_mm[:, 0], through.bore_mm)
    assert middle == pytest.approx(3.0, abs=0.3)
    assert {n.code for n in joined.notices} >= {"bridge-built"}
    assert joined.accepted[0].id == "G1" and joined.accepted[0].what == "bridge"


def test_an_accepted_bridge_has_at_least_the_process_minimum(found):
    density, _ = found
    joined = make_graph(density, settings(density), PORTS, accepts=(AcceptSettings(bridge="G1"),), least_bore_mm=4.5)
    (through,) = [b for b in joined.branches if b.sheet_mm[:, 0].min() < 45 < b.sheet_mm[:, 0].max()]
    assert through.bore_mm.min() > 4.3


@pytest.mark.parametrize(
    "choice",
    [
        AcceptSettings(trim="D4"),
        AcceptSettings(trim=True, at_mm=(20.0, 46.0)),
        AcceptSettings(trim="D4", at_mm=(20.0, 45.0)),
    ],
)
def test_a_trimmed_dead_end_is_gone_and_told(found, choice):
    _, graph = found
    trimmed = accept(graph, (choice,))
    assert [end.id for end in trimmed.dead_ends] == ["D1", "D2", "D3"], "what is left keeps its id"
    assert len(trimmed.branches) == len(graph.branches) - 2
    (gone,) = [item for item in trimmed.dropped if item.reason is DropReason.TRIMMED]
    assert gone.area_mm2 == pytest.approx(15 * 4, rel=0.1)
    assert {n.code for n in trimmed.notices} >= {"dead-end-trimmed"}


def test_bridge_by_place_and_trims_together(found):
    density, _ = found
    choices = (
        AcceptSettings(bridge=True, at_mm=(45.0, 31.0)),
        AcceptSettings(trim="D1"),
        AcceptSettings(trim="D4"),
    )
    graph = make_graph(density, settings(density), PORTS, accepts=choices)
    (branch,) = graph.branches
    assert branch.length_mm == pytest.approx(90, abs=0.1)
    assert not graph.dead_ends and not graph.bridges


def test_ids_that_do_not_exist_list_what_there_is(found):
    _, graph = found
    error = refused(graph, "bridge-unknown", AcceptSettings(bridge="G2"))
    assert "G1 at [45.0, " in error.expected and "mm of grey on to" in error.expected
    error = refused(graph, "trim-unknown", AcceptSettings(trim="D9"))
    assert all(name in error.expected for name in ("D1", "D2", "D3", "D4"))


def test_places_where_nothing_is_offered_are_refused(found):
    _, graph = found
    error = refused(graph, "accept-no-place", AcceptSettings(bridge=True, at_mm=(20.0, 47.0)))
    assert "G1" in error.expected
    refused(graph, "accept-no-place", AcceptSettings(trim=True, at_mm=(45.0, 5.0)))


def test_an_id_that_is_elsewhere_now_is_refused(found):
    _, graph = found
    refused(graph, "accept-moved", AcceptSettings(trim="D1", at_mm=(20.0, 45.0)))


def test_a_place_between_two_is_refused(found):
    _, graph = found
    middle = tuple(float(v) for v in np.mean([graph.dead_ends[1].sheet_mm, graph.dead_ends[2].sheet_mm], axis=0))
    refused(graph, "accept-ambiguous", AcceptSettings(trim=True, at_mm=middle))


def test_twice_and_against_each_other_is_refused(found):
    _, graph = found
    refused(graph, "accept-twice", AcceptSettings(bridge="G1"), AcceptSettings(bridge=True, at_mm=(45.0, 30.0)))
    refused(graph, "accept-conflict", AcceptSettings(bridge="G1"), AcceptSettings(trim="D3"))


def test_a_trim_that_takes_the_port_along_is_refused():
    density = drawn([([(-9, 20), (25, 20)], 4), ([(-9, 32), (70, 32)], 4)], (60, 40), 0.5)
    declared = ports(("a", "in", 0, 20), ("b", "in", 0, 32), ("c", "out", 60, 32))
    graph = find_graph(density, settings(density), declared)
    refused(graph, "trim-takes-port", AcceptSettings(trim="D1"))


def test_nothing_accepted_changes_nothing(found):
    _, graph = found
    assert accept(graph, ()) is graph
