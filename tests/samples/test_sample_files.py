"""The samples themselves: their figures from an outside route, their course, and that they read as jobs.

Only the test that makes the outside figures again (skan compiles for seconds) is not quick.
"""

import json
from pathlib import Path

import numpy as np
import pytest
from expected import expected_figures
from scenarios import SCENARIOS

SAMPLES = Path(__file__).resolve().parents[2] / "samples"
NAMES = sorted(path.parent.name for path in SAMPLES.glob("*/job.toml"))


def expected(name):
    return json.loads((SAMPLES / name / "expected.json").read_text(encoding="utf-8"))


def graph_of(name):
    from morph.layout.density import make_density
    from morph.layout.extract import make_graph
    from morph.settings.read_job import read_job

    job = read_job(SAMPLES / name / "job.toml")
    return make_graph(make_density(job.layout), job.layout, job.ports)


@pytest.mark.quick
def test_there_is_a_small_sample_and_a_rich_one():
    assert sorted(SCENARIOS) == NAMES
    figures = {name: expected(name) for name in NAMES}
    assert 4 <= figures["tealight-cup"]["branches"]["value"] <= 8
    assert figures["tealight-cup"]["loops"]["value"] in {1, 2}
    assert figures["lantern-sleeve"]["branches"]["value"] >= 20
    assert figures["lantern-sleeve"]["loops"]["value"] >= 3


@pytest.mark.parametrize("name", NAMES)
def test_expected_figures_are_those_of_the_committed_image(name):
    assert expected_figures(SAMPLES / name) == expected(name)


@pytest.mark.quick
@pytest.mark.parametrize("name", NAMES)
def test_image_is_a_density_on_the_scenarios_grid(name):
    image = np.load(SAMPLES / name / "density.npy", allow_pickle=False)
    grid = SCENARIOS[name].grid
    assert image.shape == (grid.rows, grid.columns)
    assert image.dtype == np.float32
    assert image.min() >= 0.0
    assert image.max() <= 1.0


@pytest.mark.quick
@pytest.mark.parametrize("name", NAMES)
def test_recorded_objective_fell_by_a_fifth_within_the_limits(name):
    course = json.loads((SAMPLES / name / "descent.json").read_text(encoding="utf-8"))
    assert course["objective_fall_ratio"] >= 0.2
    assert course["objective_fall_ratio"] == pytest.approx(
        1.0 - course["objective_last"] / course["objective_first"], abs=1e-5
    )
    assert max(course["limits_last"]) <= 0.01
    assert len(course["course"]) == SCENARIOS[name].steps


@pytest.mark.quick
@pytest.mark.parametrize("name", NAMES)
def test_graph_agrees_with_the_outside_route(name):
    """Outside: scikit-image labels and Euler number, skan on scikit-image's thinning (tolerances in the file)."""
    from morph.layout.graph import NodeKind, count_loops

    wanted, graph = expected(name), graph_of(name)
    number = {node.id: index for index, node in enumerate(graph.nodes)}
    pieces, loops = count_loops(len(number), [(number[b.start], number[b.end]) for b in graph.branches])
    kinds = [node.kind for node in graph.nodes]
    dropped_pieces = sum(1 for drop in graph.dropped if drop.reason in {"island", "piece without a port"})
    assert pieces + dropped_pieces == wanted["pieces"]["value"]
    assert loops == wanted["loops"]["value"]
    assert kinds.count(NodeKind.PORT) == wanted["frame_ends"]["value"]
    assert kinds.count(NodeKind.DEAD_END) == wanted["dead_ends_of_circuits"]["value"]
    assert abs(len(graph.branches) - wanted["branches"]["value"]) <= wanted["branches"]["tolerance"]
    length = sum(branch.length_mm for branch in graph.branches)
    assert length == pytest.approx(wanted["centreline_mm"]["value"], rel=wanted["centreline_mm"]["tolerance_ratio"])
    assert graph.area_ratio == pytest.approx(wanted["area_ratio"]["value"], rel=wanted["area_ratio"]["tolerance_ratio"])
