"""Mirrored halves: exactly symmetric, the same as the doubled image, and honest where they cannot be."""

from dataclasses import replace

import numpy as np
import pytest

from morph.core.errors import SettingError
from morph.layout.density import make_density
from morph.layout.extract import find_graph, make_graph
from morph.layout.mirror import make_mirror
from morph.settings.job import LayoutSettings, MirrorAt, PortSettings, Role, Rows, Samples, Seam
from tests.layout.cases import inputs
from tests.layout.drawing import drawn, ports, settings
from tests.layout.synthetic import MODES, make_case

pytestmark = pytest.mark.quick

EXACT_MM = 1e-9
HALF = [
    ([(-9, 20), (30, 20), (60, 20)], 5.0),
    ([(30, 20), (30, 32), (60, 32)], 4.0),
    ([(15, 20), (22, 8), (60, 8)], 3.5),
]
"""Three channels that cross the right edge of a 50 x 40 sheet at a right angle; two junctions at x = 15 and 30."""


def saved(tmp_path, value, name="half.npy"):
    np.save(tmp_path / name, value)
    return tmp_path / name


def mirrored_layout(tmp_path, mirror_at, samples=Samples.CELLS):
    """The half above with its mirror at `mirror_at` (turned and flipped to suit), and ports on the doubled sheet."""
    value = np.asarray(drawn(HALF, (50.0, 40.0), 0.5, samples).value)
    if mirror_at in (MirrorAt.LEFT, MirrorAt.BOTTOM):
        value = value[:, ::-1]
    if mirror_at in (MirrorAt.BOTTOM, MirrorAt.TOP):
        value = value.T
    upright = mirror_at in (MirrorAt.BOTTOM, MirrorAt.TOP)
    size_mm = (40.0, 50.0) if upright else (50.0, 40.0)
    image = saved(tmp_path, value)
    layout = LayoutSettings(image, size_mm, rows=Rows.BOTTOM_UP, samples=samples, mirror_at=mirror_at)
    places = [(20.0, 0.0), (20.0, 100.0)] if upright else [(0.0, 20.0), (100.0, 20.0)]
    declared = tuple(PortSettings(n, r, p) for n, r, p in zip("ab", (Role.IN, Role.OUT), places, strict=True))
    return make_density(layout), layout, declared


def asymmetry_mm(graph, mirror_at):
    """The largest distance of a reflected node, sample or bore from its nearest partner."""
    from scipy.spatial import cKDTree

    mirror = make_mirror(graph, mirror_at)
    place = np.array([node.sheet_mm for node in graph.nodes + graph.loose_nodes])
    every = graph.branches + graph.loose_branches
    line = np.vstack([branch.sheet_mm for branch in every])
    bore = np.concatenate([branch.bore_mm for branch in every])
    worst = cKDTree(place).query(mirror.reflect(place))[0].max()
    away, index = cKDTree(np.column_stack([line, bore])).query(np.column_stack([mirror.reflect(line), bore]))
    return max(float(worst), float(away.max())), index


@pytest.mark.parametrize("samples", list(Samples))
@pytest.mark.parametrize("mirror_at", [edge for edge in MirrorAt if edge is not MirrorAt.NONE])
def test_a_mirrored_half_is_exactly_symmetric(tmp_path, mirror_at, samples):
    density, layout, declared = mirrored_layout(tmp_path, mirror_at, samples)
    graph = make_graph(density, layout, declared)
    assert graph.size_mm == ((100.0, 40.0) if mirror_at in (MirrorAt.LEFT, MirrorAt.RIGHT) else (40.0, 100.0))
    assert asymmetry_mm(graph, mirror_at)[0] < EXACT_MM
    assert "mirror-not-exact" not in {notice.code for notice in graph.notices}
    kinds = sorted(node.kind.value for node in graph.nodes)
    assert kinds == ["junction"] * 4 + ["port"] * 2 and len(graph.branches) == 7
    axis = 0 if mirror_at in (MirrorAt.LEFT, MirrorAt.RIGHT) else 1
    crossing = [b for b in graph.branches if b.sheet_mm[:, axis].min() < 50 < b.sheet_mm[:, axis].max()]
    assert len(crossing) == 3
    for branch in crossing:
        np.testing.assert_allclose(branch.bore_mm, branch.bore_mm[::-1], atol=1e-12)
        step = np.diff(branch.sheet_mm, axis=0)
        middle = step[len(step) // 2]
        assert abs(middle[1 - axis]) < 1e-3 * abs(middle[axis]), "it crosses the line square"


def test_it_is_the_graph_of_the_doubled_image(tmp_path):
    density, layout, declared = mirrored_layout(tmp_path, MirrorAt.RIGHT)
    mirrored = make_graph(density, layout, declared)
    both = np.hstack([density.value[:, :100], density.value[:, :100][:, ::-1]])
    whole = LayoutSettings(saved(tmp_path, both, "both.npy"), (100.0, 40.0), rows=Rows.BOTTOM_UP)
    plain = make_graph(make_density(whole), whole, declared)
    assert [(b.id, b.start, b.end) for b in mirrored.branches] == [(b.id, b.start, b.end) for b in plain.branches]
    for one, two in zip(mirrored.branches, plain.branches, strict=True):
        assert one.length_mm == pytest.approx(two.length_mm, abs=0.1)
        away = np.linalg.norm(one.sheet_mm[:, None] - two.sheet_mm[None], axis=2).min(axis=1)
        across = np.sqrt(
            np.maximum(0.0, away**2 - (0.5 * float(np.linalg.norm(np.diff(two.sheet_mm, axis=0), axis=1).max())) ** 2)
        )
        assert across.max() < 0.1, "a fifth of a pixel"


def test_flipping_the_half_flips_the_graph(tmp_path):
    """The half with its mirror on the right, and the flipped half with its mirror on the left, are one layout."""
    right = make_graph(*mirrored_layout(tmp_path, MirrorAt.RIGHT))
    left = make_graph(*mirrored_layout(tmp_path, MirrorAt.LEFT))
    for one, two in zip(right.nodes, left.nodes, strict=True):
        np.testing.assert_allclose(one.sheet_mm, two.sheet_mm, atol=0.1)


def test_a_channel_on_the_mirror_line_lies_exactly_on_it(tmp_path):
    lines = [([(-9, 20), (50, 20)], 5.0), ([(50, -9), (50, 50)], 6.0)]
    value = np.asarray(drawn(lines, (50.0, 40.0), 0.5).value)
    layout = LayoutSettings(saved(tmp_path, value), (50.0, 40.0), rows=Rows.BOTTOM_UP, mirror_at=MirrorAt.RIGHT)
    declared = ports(("a", "in", 0, 20), ("b", "out", 100, 20), ("c", "out", 50, 0), ("d", "out", 50, 40))
    graph = make_graph(make_density(layout), layout, declared)
    assert asymmetry_mm(graph, MirrorAt.RIGHT)[0] < EXACT_MM
    on_line = [b for b in graph.branches if np.ptp(b.sheet_mm[:, 0]) < 1e-9]
    assert len(on_line) == 2 and all(b.sheet_mm[0, 0] == pytest.approx(50, abs=1e-12) for b in on_line)


def test_a_port_on_one_side_within_a_channel_is_told(tmp_path):
    density, layout, declared = mirrored_layout(tmp_path, MirrorAt.RIGHT)
    graph = make_graph(density, layout, (*declared, PortSettings("c", Role.ACCESS, (40.0, 32.0))))
    (notice,) = [notice for notice in graph.notices if notice.code == "mirror-not-exact"]
    assert "declared on one side only" in notice.text


def test_a_mirrored_half_may_close_around_a_seam(tmp_path):
    lines = [([(-9, 20), (60, 20)], 5.0), ([(25, 20), (25, 50)], 4.0), ([(25, -9), (25, 20)], 4.0)]
    value = np.asarray(drawn(lines, (50.0, 40.0), 0.5).value)
    image = saved(tmp_path, value)
    layout = LayoutSettings(image, (50.0, 40.0), rows=Rows.BOTTOM_UP, mirror_at=MirrorAt.RIGHT, seam=Seam.JOINED)
    declared = ports(("a", "in", 25, 0), ("b", "out", 75, 0), ("c", "out", 25, 40), ("d", "out", 75, 40))
    graph = make_graph(make_density(layout), layout, declared)
    assert len(graph.branches) == 6
    mirror = make_mirror(graph, MirrorAt.RIGHT)
    place = np.array([node.sheet_mm for node in graph.nodes])
    away = np.linalg.norm(mirror.apart(mirror.reflect(place)[:, None], place[None]), axis=2).min(axis=1)
    assert away.max() < EXACT_MM


@pytest.mark.parametrize("mode", ["clean", "everything"])
def test_ugly_halves_are_exactly_symmetric(mode):
    for seed in (3, 4):
        graph, mirror_at = mirrored_case(make_case(seed, mode), MirrorAt.RIGHT)
        assert asymmetry_mm(graph, mirror_at)[0] < EXACT_MM
        assert "mirror-not-exact" not in {notice.code for notice in graph.notices}


def mirrored_case(case, mirror_at):
    """The graph of a synthetic case taken as the half at `mirror_at`, each port with its mirror image."""
    from morph.layout.density import _mirrored

    density, layout, declared = inputs(case)
    layout = replace(layout, mirror_at=mirror_at)
    value, size_mm = _mirrored(density.value, layout, Samples.CELLS)
    axis = 0 if mirror_at in (MirrorAt.LEFT, MirrorAt.RIGHT) else 1
    line = layout.size_mm[axis]
    doubled = []
    for port in declared:
        at = list(port.at_mm)
        if mirror_at in (MirrorAt.LEFT, MirrorAt.BOTTOM):
            at[axis] += line
        twin = list(at)
        twin[axis] = 2 * line - at[axis]
        doubled.append(replace(port, at_mm=tuple(at)))
        if abs(twin[axis] - at[axis]) > 1.0:
            doubled.append(replace(port, name=f"{port.name}-twin", at_mm=tuple(twin)))
    return find_graph(replace(density, value=value, size_mm=size_mm), layout, tuple(doubled)), mirror_at


@pytest.mark.slow
def test_360_ugly_halves_are_exactly_symmetric():
    edges = [edge for edge in MirrorAt if edge is not MirrorAt.NONE]
    told, worst = [], 0.0
    for number, (mode, seed) in enumerate((mode, seed) for mode in MODES for seed in range(501, 537)):
        graph, mirror_at = mirrored_case(make_case(seed, mode), edges[number % 4])
        if "mirror-not-exact" in {notice.code for notice in graph.notices}:
            told.append((mode, seed))
        else:
            worst = max(worst, asymmetry_mm(graph, mirror_at)[0])
    assert worst < EXACT_MM
    assert len(told) <= 7, told


def test_a_crop_is_the_cut_image(tmp_path):
    density = drawn(HALF, (50.0, 40.0), 0.5)
    image = saved(tmp_path, np.asarray(density.value))
    crop = LayoutSettings(image, (50.0, 40.0), rows=Rows.BOTTOM_UP, crop_mm=(5.0, 2.0, 45.0, 38.0))
    cut = make_density(crop)
    np.testing.assert_array_equal(cut.value, density.value[4:76, 10:90])
    assert cut.size_mm == (40.0, 36.0) and cut.pitch_mm == density.pitch_mm and not cut.notices
    top_down = replace(crop, image=saved(tmp_path, np.asarray(density.value)[::-1], "top.npy"), rows=Rows.TOP_DOWN)
    np.testing.assert_array_equal(make_density(top_down).value, cut.value)


def test_a_crop_between_pixels_is_rounded_and_told(tmp_path):
    nodes = drawn(HALF, (50.0, 40.0), 0.5, Samples.NODES)
    image = saved(tmp_path, np.asarray(nodes.value))
    layout = LayoutSettings(
        image, (50.0, 40.0), rows=Rows.BOTTOM_UP, samples=Samples.NODES, crop_mm=(0.0, 0.0, 40.2, 40.0)
    )
    cut = make_density(layout)
    assert cut.value.shape == (81, 81) and cut.size_mm == (40.0, 40.0)
    (notice,) = cut.notices
    assert notice.code == "crop-rounded" and "40.0000" in notice.text
    declared = ports(("a", "in", 0, 20), ("b", "out", 40.2, 20), ("c", "out", 40.2, 32), ("d", "out", 40.2, 8))
    graph = make_graph(cut, layout, declared)
    assert "crop-rounded" in {item.code for item in graph.notices}
    assert {node.port for node in graph.nodes} >= {"a", "b", "c", "d"}


def test_a_crop_with_too_few_values_is_refused(tmp_path):
    image = saved(tmp_path, np.asarray(drawn(HALF, (50.0, 40.0), 0.5).value))
    layout = LayoutSettings(image, (50.0, 40.0), crop_mm=(5.0, 2.0, 8.0, 38.0))
    with pytest.raises(SettingError) as caught:
        make_density(layout)
    assert caught.value.code == "crop-too-small"


def test_a_crop_may_be_mirrored(tmp_path):
    density = drawn(HALF, (50.0, 40.0), 0.5)
    image = saved(tmp_path, np.asarray(density.value))
    layout = LayoutSettings(
        image, (50.0, 40.0), rows=Rows.BOTTOM_UP, crop_mm=(0.0, 0.0, 45.0, 40.0), mirror_at=MirrorAt.RIGHT
    )
    assert layout.sheet_mm == (90.0, 40.0) == make_density(layout).size_mm
    graph = make_graph(make_density(layout), layout, ports(("a", "in", 0, 20), ("b", "out", 90, 20)))
    assert asymmetry_mm(graph, MirrorAt.RIGHT)[0] < EXACT_MM


def test_settings_of_a_drawing_are_not_touched():
    density = drawn(HALF, (50.0, 40.0), 0.5)
    assert settings(density).sheet_mm == (50.0, 40.0)
