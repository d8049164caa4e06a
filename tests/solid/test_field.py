"""Resolution, predictions, the sweep's pieces, and the slab runner."""

import dataclasses
import itertools

import numpy as np
import pytest

from morph.core.errors import GeometryError
from morph.core.progress import SILENT
from morph.geometry.slabs import run_slabs
from morph.settings.job import QualitySettings
from morph.solid.field import BYTES_PER_TRIANGLE, MOST_BYTES, MOST_TRIANGLES, choose_h_mm, predict_triangles
from morph.solid.sweep import make_sweep
from tests.solid import plans

pytestmark = pytest.mark.quick


@pytest.mark.parametrize(("bore", "h"), [(1.0, 0.15), (1.8, 0.15), (3.0, 0.25), (3.6, 0.30), (9.0, 0.30)])
def test_h_is_a_twelfth_of_the_bore_between_bounds(bore, h):
    assert choose_h_mm(plans.straight_pipe(bore), QualitySettings()) == pytest.approx(h)


def test_the_smallest_bore_of_any_branch_decides():
    plan = plans.tee(bore_mm=4.8)
    thin = dataclasses.replace(plan.branches[2], bore_mm=np.linspace(4.8, 2.4, len(plan.branches[2].bore_mm)))
    plan = dataclasses.replace(plan, branches=(*plan.branches[:2], thin, *plan.branches[3:]))
    assert choose_h_mm(plan, QualitySettings()) == pytest.approx(0.2)
    assert choose_h_mm(plan, QualitySettings(h_mm=0.4)) == 0.4


def test_a_bore_below_four_cells_is_refused():
    with pytest.raises(GeometryError) as caught:
        choose_h_mm(plans.straight_pipe(0.5), QualitySettings())
    assert caught.value.code == "bore-below-resolution" and "0.5 mm" in caught.value.found
    with pytest.raises(GeometryError) as caught:
        choose_h_mm(plans.straight_pipe(6.0), QualitySettings(h_mm=1.6))
    assert "B1" in caught.value.where and "6.4 mm" in caught.value.expected


def test_a_solid_too_large_is_refused_before_any_work():
    with pytest.raises(GeometryError) as caught:
        choose_h_mm(plans.ladder(), QualitySettings(h_mm=0.005))
    assert caught.value.code == "solid-too-large"
    wanted = float(caught.value.do.split("h_mm to ")[1].split(" mm")[0])
    most = min(MOST_TRIANGLES, MOST_BYTES / BYTES_PER_TRIANGLE)
    assert 0.8 * most < predict_triangles(plans.ladder(), wanted) <= most
    assert choose_h_mm(plans.ladder(), QualitySettings(h_mm=wanted)) == wanted


def test_the_prediction_is_three_areas_over_h_squared():
    assert predict_triangles(plans.straight_pipe(6.0), 0.3) == pytest.approx(3 * np.pi * 6 * (60 + 12) / 0.09)


def test_pieces_cover_the_branches_and_their_overshoot():
    plan = plans.straight_pipe(6.0, stock_mm=1.5)
    sweep = make_sweep(plan)
    assert sweep.pieces[:, 6].sum() == pytest.approx(60.0 + 2 * 7.5)
    assert sweep.pieces[:, 7] == pytest.approx(3.0)
    ends = np.concatenate([sweep.pieces[:, 0], sweep.pieces[:, 0] + sweep.pieces[:, 3] * sweep.pieces[:, 6]])
    assert (ends.min(), ends.max()) == pytest.approx((-7.5, 67.5))
    assert (np.diff(sweep.owner[:, 0]) >= 0).all()
    assert len(np.unique(sweep.owner[:, 0])) == 6


def test_each_half_belongs_to_the_node_it_starts_from():
    plan = plans.ring()
    sweep = make_sweep(plan)
    for run in np.unique(sweep.owner[:, 0]):
        rows = sweep.owner[:, 0] == run
        node = sweep.owner[rows, 1]
        assert len(set(node.tolist())) == 1
        ends = sweep.pieces[rows][:, :3]
        reach = np.linalg.norm(ends - sweep.nodes[node[0], :3], axis=1).min()
        assert reach < 1e-9 or plan.nodes[node[0]].id.startswith("X")


def test_repeated_samples_and_single_points_are_harmless():
    point = (30.0, 20.0, 15.0)
    still = plans.branch("B1", "N1", "N1", [point, point], 4.0)
    sweep = make_sweep(plans.plan_of([still]))
    assert (sweep.pieces[:, 6] == 0.0).all() and np.isfinite(sweep.pieces).all()
    twice = plans.branch("B1", "N1", "N2", [point, point, (40, 20, 15), (40, 20, 15)], [4.0, 4.0, 5.0, 5.0])
    assert make_sweep(plans.plan_of([twice])).pieces[:, 6].sum() == pytest.approx(10.0)


@pytest.mark.parametrize(("n", "slab", "workers"), [(10, 3, 1), (10, 3, 2), (0, 3, 2), (2, 5, 2), (9, 3, 4)])
def test_slabs_cover_every_item_once_and_report(monkeypatch, n, slab, workers):
    monkeypatch.setattr("morph.kernels.workers.worker_count", lambda: workers)
    done, told = np.zeros(n, int), []

    class Watch:
        def step(self, stage, part, total):
            told.append((stage, part, total))

    def work(first, last):
        done[first:last] += 1

    run_slabs("name", n, slab, work, Watch())
    assert (done == 1).all()
    assert [t[1] for t in told] == sorted(t[1] for t in told)
    assert all(a[1] < b[1] for a, b in itertools.pairwise(told))
    if n:
        assert told[-1] == ("name", n, n)


def test_an_error_in_a_slab_comes_through(monkeypatch):
    monkeypatch.setattr("morph.kernels.workers.worker_count", lambda: 2)

    def work(first, last):
        if first == 4:
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        run_slabs("name", 10, 2, work, SILENT)
