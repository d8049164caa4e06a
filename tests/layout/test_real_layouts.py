"""Real optimiser layouts: sensible graphs, every loop of the image, and honest notices."""

from pathlib import Path

import numpy as np
import pytest

from morph.layout.density import make_density
from morph.layout.extract import make_graph
from morph.layout.fit import curvature_per_mm
from morph.layout.graph import count_loops
from morph.layout.level import make_picture
from morph.settings.job import LayoutSettings, PortSettings, Role, Rows

pytestmark = pytest.mark.quick

DATA = Path(__file__).parent.parent / "data" / "layouts"
TWO_FEEDS = (("in", "L", 0.18), ("in", "T", 0.85), ("out", "B", 0.69))
CRESCENT = (("in", "B", 0.27), ("out", "R", 0.78))
SPLIT = (("in", "T", 0.48), ("out", "L", 0.13), ("out", "R", 0.35), ("out", "B", 0.74))
LAYOUTS = {
    "s0_crescent_48x64_R1.5_b0": ((88.0, 66.0), CRESCENT),
    "s2_twofeeds_64x96_R1.6_b0": ((90.0, 60.0), TWO_FEEDS),
    "s3_split_96x128_R2.0_b0": ((96.0, 72.0), SPLIT),
    "s5_crescent_96x128_R1.5_b2": ((96.0, 72.0), CRESCENT),
    "s6_twofeeds_128x192_R2.0_b2": ((120.0, 80.0), TWO_FEEDS),
}


def load(name):
    size_mm, declared = LAYOUTS[name]
    width, height = size_mm
    place = {"L": lambda f: (0.0, f * height), "R": lambda f: (width, f * height), "B": lambda f: (f * width, 0.0), "T": lambda f: (f * width, height)}  # fmt: skip
    ports = tuple(PortSettings(f"{s}{i}", Role(role), place[s](f)) for i, (role, s, f) in enumerate(declared))
    settings = LayoutSettings(DATA / f"{name}.npy", size_mm, rows=Rows.BOTTOM_UP)
    return make_density(settings), settings, ports


@pytest.fixture(scope="module", params=sorted(LAYOUTS))
def layout(request):
    density, settings, ports = load(request.param)
    return density, ports, make_graph(density, settings, ports)


def test_it_is_one_circuit_with_all_the_images_loops(layout):
    density, ports, graph = layout
    index = {node.id: i for i, node in enumerate(graph.nodes)}
    found = count_loops(len(index), [(index[b.start], index[b.end]) for b in graph.branches])
    picture = make_picture(density, 0.5, np.array([port.at_mm for port in ports]))
    assert found == (1, picture.betti[1]) and picture.betti[0] == 1
    assert {node.port for node in graph.nodes} - {None} == {port.name for port in ports}
    assert "topology-differs" not in {notice.code for notice in graph.notices}


def test_ports_lie_on_the_frame_and_the_graph_on_the_sheet(layout):
    density, _, graph = layout
    width, height = density.size_mm
    for node in graph.nodes:
        x, y = node.sheet_mm
        assert -1e-9 <= x <= width + 1e-9 and -1e-9 <= y <= height + 1e-9
        if node.port:
            assert min(x, y, width - x, height - y) == 0.0


def test_centrelines_run_in_coolant_and_bores_add_up_to_its_area(layout):
    from scipy.ndimage import map_coordinates

    density, _, graph = layout
    area, inside, total = 0.0, 0, 0
    for branch in graph.branches:
        at = branch.sheet_mm / density.pitch_mm - 0.5
        value = map_coordinates(density.value, at[:, ::-1].T, order=1, mode="nearest")
        inside += np.count_nonzero(value > 0.5)
        total += len(value)
        area += branch.length_mm * float(branch.bore_mm.mean())
    assert inside / total > 0.985
    coolant = graph.area_ratio * density.size_mm[0] * density.size_mm[1]
    assert 0.85 * coolant < area < 1.6 * coolant  # junction discs count more than once


def test_fits_keep_their_bound_and_bends_stay_wide(layout):
    _, _, graph = layout
    bends = []
    for branch in graph.branches:
        assert branch.deviation_mm <= 0.10 * branch.bore_mm.max() * 1.05
        bends.append(float((curvature_per_mm(branch.curve, branch.parameter) * branch.bore_mm).max()))
    assert np.median(bends) < 1.0


def test_dead_ends_are_all_named(layout):
    _, _, graph = layout
    blind = [node for node in graph.nodes if node.kind.value == "dead-end"]
    named = {notice.sheet_mm for notice in graph.notices if notice.code == "dead-end"}
    assert {tuple(node.sheet_mm) for node in blind} == named


def test_the_level_decides_the_split_layout():
    density, settings, ports = load("s3_split_96x128_R2.0_b0")
    graph = make_graph(density, settings, ports)
    assert [(c.pieces, c.holes) for c in graph.levels] == [(1, 2), (1, 1), (1, 0)]
    assert "level-decides" in {notice.code for notice in graph.notices}
