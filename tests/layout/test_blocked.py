"""Two blocked channels and a gap, drawn with flat ends so that their places are not a matter of taste; and real images."""

import numpy as np
import pytest

from morph.layout.density import Density
from morph.layout.extract import find_graph, graph_pieces, make_graph
from morph.layout.graph import Ahead
from morph.settings.job import AcceptSettings, LayoutSettings
from morph.settings.job import Samples as Values
from morph.settings.job import Seam as Edge
from tests.layout.drawing import ports
from tests.layout.test_real_layouts import load

pytestmark = pytest.mark.quick

PITCH_MM = 0.5
SIZE_MM = (80.0, 50.0)
BOTH = ports(("a", "in", 0, 15), ("b", "out", 80, 15))
BARS = [(0, 36, 12.5, 17.5), (44, 80, 12.5, 17.5), (18, 22, 15, 36), (58, 62, 15, 32)]
"""x from, x to, y from, y to of full coolant: a channel with a gap, and two branches upwards that end flat."""
GAP = (36, 44, 12.5, 17.5)
GREY = 0.35


@pytest.fixture(scope="module")
def density():
    y, x = np.mgrid[:100, :160] * PITCH_MM + 0.5 * PITCH_MM
    value = np.zeros(x.shape)
    for low_x, high_x, low_y, high_y in BARS:
        value[(x > low_x) & (x < high_x) & (y > low_y) & (y < high_y)] = 1.0
    low_x, high_x, low_y, high_y = GAP
    value[(x > low_x) & (x < high_x) & (y > low_y) & (y < high_y)] = GREY
    return Density(value, SIZE_MM, Values.CELLS, Edge.OPEN, "bars.npy", "0" * 16)


def test_all_three_are_named_at_their_place_and_the_accepted_gap_joins_the_ports(density):
    layout = LayoutSettings(image=None, size_mm=SIZE_MM)
    graph = find_graph(density, layout, BOTH)
    wanted = {(20, 36): Ahead.SOLID, (60, 32): Ahead.SOLID, (36, 15): Ahead.GREY, (44, 15): Ahead.GREY}
    assert len(graph.dead_ends) == 4
    for place, ahead in wanted.items():
        end = min(graph.dead_ends, key=lambda e: np.hypot(*np.subtract(e.sheet_mm, place)))
        assert np.hypot(*np.subtract(end.sheet_mm, place)) <= PITCH_MM and end.ahead is ahead
    (bridge,) = graph.bridges
    assert np.hypot(*np.subtract(bridge.middle_mm, (40, 15))) <= PITCH_MM
    assert bridge.grey_mm == pytest.approx(8, abs=2 * PITCH_MM) and bridge.lowest_density == pytest.approx(
        GREY, abs=0.01
    )
    assert sorted(map(sorted, graph_pieces(graph))) == [["a"], ["b"]]
    joined = make_graph(density, layout, BOTH, accepts=(AcceptSettings(bridge=bridge.id),))
    assert list(map(sorted, graph_pieces(joined))) == [["a", "b"]]


@pytest.mark.parametrize(
    ("name", "places"),
    [
        ("s2_twofeeds_64x96_R1.6_b0", [(22.8, 13.5)]),
        ("s6_twofeeds_128x192_R2.0_b2", [(92.7, 45.5), (74.4, 64.5)]),
    ],
)
def test_real_layouts_name_their_blind_ends(name, places):
    """Places judged by eye on the images: each is the end of a channel that fades out into grey."""
    density, layout, declared = load(name)
    graph = find_graph(density, layout, declared)
    pitch = max(density.pitch_mm)
    assert len(graph.dead_ends) == len(places)
    for place in places:
        assert min(np.hypot(*np.subtract(end.sheet_mm, place)) for end in graph.dead_ends) <= pitch
    for end in graph.dead_ends:
        assert end.ahead is Ahead.GREY and 0 < end.lowest_density < graph.level
        if end.bridge is not None:
            assert end.onto and end.gap_mm > 0
