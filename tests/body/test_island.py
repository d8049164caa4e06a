"""Islands of small loops against inscribed circles worked out by hand."""

import math

import numpy as np
import pytest

from morph.body.island import measure_island, small_loops
from morph.body.neighbour import make_network
from tests.body.test_neighbour import strand

pytestmark = pytest.mark.quick


def eye(half_width, length=12.0, bore=3.0):
    """Two arcs between the same nodes, `half_width` off the middle."""
    t = np.linspace(0.0, np.pi, 40)
    arms = [[(length * s / np.pi, sign * half_width * np.sin(s), 0) for s in t] for sign in (1, -1)]
    return make_network([strand(n, 0, 1, a, bore, 0.3) for n, a in zip("AB", arms, strict=True)], 2)


def triangle(side, bore=2.0):
    corners = [(0, 0, 0), (side, 0, 0), (side / 2, side * math.sqrt(3) / 2, 0)]
    ends = [(0, 1), (1, 2), (2, 0)]
    return make_network(
        [strand(f"T{k}", a, b, [corners[a], corners[b]], bore, 0.2) for k, (a, b) in enumerate(ends)], 3
    )


def test_an_eye_is_one_small_loop():
    assert small_loops(eye(3.0), 40.0) == [(0, 1)]
    assert small_loops(eye(3.0), 20.0) == []


def test_the_island_of_an_eye_is_as_wide_as_its_middle():
    island = measure_island(eye(3.0), (0, 1))
    # At the middle the arms are 6 mm apart; the inscribed circle of so flat a lens is hardly smaller.
    assert 2.5 < island.width_mm <= 3.0
    np.testing.assert_allclose(island.centre_mm, [6.0, 0.0, 0.0], atol=0.6)


def test_a_filled_eye_has_a_negative_island():
    assert measure_island(eye(1.0), (0, 1)).width_mm < 0.0


@pytest.mark.parametrize("side", [6.0, 9.0, 15.0])
def test_the_island_of_a_triangle_is_its_inscribed_circle(side):
    """Inradius of an equilateral triangle: side / (2 sqrt 3); the island is what the bores leave of it."""
    network = triangle(side)
    (loop,) = small_loops(network, 3.1 * side)
    island = measure_island(network, loop)
    assert island.width_mm == pytest.approx(2 * side / (2 * math.sqrt(3)) - 2.0, abs=side / 25)
    np.testing.assert_allclose(island.centre_mm, [side / 2, side / (2 * math.sqrt(3)), 0], atol=side / 20)


def test_loops_longer_than_asked_and_trees_are_not_listed():
    assert small_loops(triangle(9.0), 26.0) == []
    tree = make_network([strand("A", 0, 1, [(0, 0, 0), (9, 0, 0)]), strand("B", 1, 2, [(9, 0, 0), (9, 9, 0)])], 3)
    assert small_loops(tree, 100.0) == []
