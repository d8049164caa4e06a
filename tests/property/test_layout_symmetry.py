"""Layout: a mirrored, turned or transposed image gives the mirrored, turned or transposed graph; the same input the same bytes."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as budget
from hypothesis import strategies as st

from morph.core.fingerprint import fingerprint
from morph.layout.density import Density
from morph.layout.extract import find_graph, make_graph
from morph.settings.job import PortSettings, Samples
from tests.layout.cases import inputs
from tests.layout.drawing import drawn, ports, settings
from tests.layout.synthetic import make_case

MOVES = {
    "left-right": (lambda v: v[:, ::-1], lambda p, w, h: (w - p[0], p[1])),
    "up-down": (lambda v: v[::-1], lambda p, w, h: (p[0], h - p[1])),
    "turned": (lambda v: v[::-1, ::-1], lambda p, w, h: (w - p[0], h - p[1])),
    "transposed": (lambda v: v.T, lambda p, w, h: (p[1], p[0])),
}
THINNING_PX = 1.0
"""Thinning prefers a side, so a moved image may move a junction by part of a pixel."""


@pytest.mark.parametrize("move", sorted(MOVES))
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_moved_image_gives_the_moved_graph(move, seed):
    density, setting, declared = inputs(make_case(seed, "clean"))
    turn, place = MOVES[move]
    width, height = density.size_mm
    size_mm = (height, width) if move == "transposed" else (width, height)
    moved = Density(turn(density.value), size_mm, density.samples, density.seam, density.source, density.content)
    there = tuple(PortSettings(p.name, p.role, place(p.at_mm, width, height)) for p in declared)
    one, two = find_graph(density, setting, declared), find_graph(moved, setting, there)
    assert len(one.nodes) == len(two.nodes) and len(one.branches) == len(two.branches)
    wanted = np.array([place(n.sheet_mm, width, height) for n in one.nodes])
    found = np.array([n.sheet_mm for n in two.nodes])
    away = np.hypot(*(wanted[:, None] - found[None]).transpose(2, 0, 1)).min(axis=1)
    assert away.max() < THINNING_PX * density.pitch_mm[0]
    lengths = lambda graph: np.sort([b.length_mm for b in graph.branches])  # noqa: E731
    np.testing.assert_allclose(lengths(one), lengths(two), rtol=0.02, atol=2 * density.pitch_mm[0])


@pytest.mark.parametrize("mode", ["noise", "everything"])
def test_the_same_input_gives_the_same_bytes(mode):
    case = make_case(4, mode)
    assert fingerprint(find_graph(*inputs(case))) == fingerprint(find_graph(*inputs(case)))


@budget(max_examples=25, deadline=None, derandomize=True)
@given(
    left=st.floats(8, 32), right=st.floats(8, 32), width=st.floats(2.5, 6.0), samples=st.sampled_from(list(Samples)),
    scale=st.floats(0.3, 3.0),
)  # fmt: skip
def test_any_straight_channel_has_its_length_and_bore(left, right, width, samples, scale):
    """Closed form: from (0, left) to (60, right), bore `width`, at any scale of the sheet."""
    drawing = drawn(
        [([(-15, left - (right - left) / 4), (75, right + (right - left) / 4)], width)], (60, 40), 0.5, samples
    )
    size_mm = (60 * scale, 40 * scale)
    density = Density(drawing.value, size_mm, samples, drawing.seam, "d", "0")
    declared = ports(("a", "in", 0, left * scale), ("b", "out", 60 * scale, right * scale))
    graph = make_graph(density, settings(density), declared)
    (branch,) = graph.branches
    pixel = 0.5 * scale
    assert branch.length_mm == pytest.approx(scale * np.hypot(60, right - left), abs=0.3 * pixel)
    assert branch.bore_mm.mean() == pytest.approx(width * scale, abs=0.1 * pixel)
    ends = {node.port: node.sheet_mm for node in graph.nodes}
    assert tuple(ends["a"]) == pytest.approx((0, left * scale), abs=0.35 * pixel)
    assert tuple(ends["b"]) == pytest.approx((60 * scale, right * scale), abs=0.35 * pixel)


@budget(max_examples=15, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10**6))
def test_any_picture_gives_a_graph_with_its_pieces_and_loops_or_says_so(seed):
    """Random smooth blobs: whatever the picture, pieces and loops agree with it, or a notice says they do not."""
    from scipy.ndimage import gaussian_filter

    from morph.core.errors import MorphError
    from morph.layout.graph import count_loops
    from morph.layout.level import make_picture

    rng = np.random.default_rng(seed)
    value = gaussian_filter(rng.normal(size=(70, 90)), rng.uniform(2, 4))
    value = np.clip(0.5 + 0.5 * value / np.abs(value).max() + 0.02, 0, 1)
    density = Density(value, (90.0, 70.0), Samples.CELLS, drawn([], (8, 8), 1.0).seam, "d", "0")
    mask = make_picture(density, 0.5, np.empty((0, 2))).mask
    row, column = np.argwhere(mask)[len(np.argwhere(mask)) // 2]
    pitch = 90.0 / mask.shape[1]
    declared = ports(("a", "in", (column + 0.5) * pitch, (row + 0.5) * pitch))
    try:
        graph = find_graph(density, settings(density), declared)
    except MorphError as error:
        assert error.code in {"port-off-channel"}
        return
    index = {n.id: i for i, n in enumerate(graph.nodes + graph.loose_nodes)}
    branches = graph.branches + graph.loose_branches
    loops = count_loops(len(index), [(index[b.start], index[b.end]) for b in branches])[1]
    picture = make_picture(density, 0.5, np.array([declared[0].at_mm]))
    assert loops == picture.betti[1] or "topology-differs" in {n.code for n in graph.notices}
