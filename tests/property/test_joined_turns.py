"""Random full wraps: turning the image by whole columns turns the graph, to 1e-6 mm."""

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter

from morph.layout.density import Density
from morph.layout.extract import find_graph
from morph.layout.graph import count_loops
from morph.settings.job import LayoutSettings, PortSettings, Role, Samples, Seam

SEEDS = [0, 2, 3, 11, 25, 34]
PITCH_MM = 0.5


def worms(seed):
    """Channels along the zero lines of a smooth random field that repeats along x."""
    rng = np.random.default_rng(seed)
    rows, columns = int(rng.integers(50, 110)), int(rng.integers(90, 220))
    field = gaussian_filter(rng.normal(size=(rows, columns)), rng.uniform(2.2, 4.5), mode=("reflect", "wrap"))
    value = np.clip(0.5 + 0.5 * (0.55 - np.abs(field / field.std())) / 0.35, 0.0, 1.0)
    return value, int(rng.integers(1, columns))


def graph_of(value, columns):
    """The graph of the image turned by `columns`, with a port where a channel meets the bottom and one at the top."""
    size_mm = (value.shape[1] * PITCH_MM, value.shape[0] * PITCH_MM)
    low, high = np.flatnonzero(value[1] > 0.9), np.flatnonzero(value[-2] > 0.9)
    places = [(row[len(row) // 2] + 0.5 + columns) * PITCH_MM % size_mm[0] for row in (low, high)]
    ports = (
        PortSettings("in", Role.IN, (places[0], 0.0)),
        PortSettings("out", Role.OUT, (places[1], size_mm[1])),
    )
    moved = Density(np.roll(value, columns, axis=1), size_mm, Samples.CELLS, Seam.JOINED, "worms", "0")
    return find_graph(moved, LayoutSettings(image=None, size_mm=size_mm, seam=Seam.JOINED), ports)


def nodes_of(graph, shift_mm):
    places = np.array([node.sheet_mm for node in graph.nodes + graph.loose_nodes])
    places[:, 0] = (places[:, 0] - shift_mm + 1e-3) % graph.size_mm[0]
    return places[np.lexsort(np.round(places, 4).T)]


@pytest.mark.parametrize("seed", SEEDS)
def test_the_graph_turns_with_the_image(seed):
    value, columns = worms(seed)
    one, two = graph_of(value, 0), graph_of(value, columns)
    np.testing.assert_allclose(nodes_of(two, columns * PITCH_MM), nodes_of(one, 0.0), atol=1e-6)
    lengths = [sorted(b.length_mm for b in g.branches + g.loose_branches) for g in (one, two)]
    np.testing.assert_allclose(lengths[0], lengths[1], atol=1e-6)
    assert one.area_ratio == pytest.approx(two.area_ratio, abs=1e-12)


@pytest.mark.parametrize("seed", SEEDS)
def test_pieces_and_loops_are_those_of_the_picture_around(seed):
    graph = graph_of(worms(seed)[0], 0)
    nodes = graph.nodes + graph.loose_nodes
    number = {node.id: k for k, node in enumerate(nodes)}
    ends = [(number[b.start], number[b.end]) for b in graph.branches + graph.loose_branches]
    middle = next(level for level in graph.levels if level.level == graph.level)
    assert count_loops(len(nodes), ends) == (middle.pieces, middle.holes)
