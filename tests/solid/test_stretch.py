"""Where a channel runs alone: found as brute force finds it, and one closed wall with what the field makes."""

import dataclasses

import numpy as np
import pytest

from morph.body.section import SectionRule
from morph.core.progress import SILENT
from morph.geometry.mesh import measure_condition, mesh_volume_mm3
from morph.kernels.swept_ball import piece_distance
from morph.settings.job import SectionShape
from morph.solid import centreline, channel, stretch
from morph.solid.channel import make_channel_solid
from morph.solid.field import list_pieces, sample_field
from morph.solid.stretch import LEAST_CELLS, find_stretches
from morph.solid.sweep import make_sweep
from tests.flow import tubes
from tests.solid import plans
from tests.solid.exact import exact_field, spread_points
from tests.solid.nets import random_net

H = 0.3


def roofed(plan):
    return dataclasses.replace(plan, section=SectionRule(SectionShape.ROOFED, 47.0))


def stretches_of(plan):
    sweep = make_sweep(plan)
    return sweep, find_stretches(plan, sweep, list_pieces(sweep, H, SILENT), H, SILENT)


@pytest.mark.parametrize("shape", ["round", "roofed"])
def test_no_ring_is_near_another_branch(shape):
    plan = plans.ladder() if shape == "round" else roofed(plans.ladder())
    sweep, found = stretches_of(plan)
    assert len(found.sides) >= (12 if shape == "round" else 6)  # roofs of neighbouring uprights and rungs come nearer
    for s in range(len(found.sides)):
        n = found.sides[s] * found.rings[s]
        rows = found.points[found.offset[s] : found.offset[s] + n]
        of = np.array([[piece_distance(*p, sweep.pieces, i) for i in range(len(sweep.pieces))] for p in rows[::37]])
        owner = np.unique(sweep.along[of.argmin(axis=1), 0])
        assert len(owner) == 1
        assert of[:, sweep.along[:, 0] != owner[0]].min() > sweep.blend_mm
        middle = 0.5 * (found.centre[2 * s] + found.centre[2 * s + 1])
        assert np.isfinite(middle).all()
        assert np.linalg.norm(found.centre[2 * s] - found.centre[2 * s + 1]) >= LEAST_CELLS * H * 0.9


def test_the_field_is_sampled_as_ever_where_rings_do_not_make_the_wall():
    plan = roofed(plans.tee())
    sweep, found = stretches_of(plan)
    whole = sample_field(sweep, H, SILENT)
    part = sample_field(sweep, H, SILENT, list_pieces(sweep, H, SILENT), found.end, found.field_planes(H))
    assert len(part.keys) < 0.8 * len(whole.keys)
    at = np.searchsorted(whole.keys, part.keys)
    assert (whole.keys[at] == part.keys).all()
    kept = part.values < 1e8
    assert (part.values[kept] == whole.values[at][kept]).all()


@pytest.mark.parametrize("shape", ["round", "roofed"])
def test_stitched_and_field_only_walls_are_the_same_body(shape, monkeypatch):
    plan = plans.ladder() if shape == "round" else roofed(plans.ladder())
    sweep = make_sweep(plan)
    stitched = make_channel_solid(plan, plans.cylinder_blank(), H)
    monkeypatch.setattr(channel, "stitch", lambda *given: set(range(len(given[-1].sides))))
    alone = make_channel_solid(plan, plans.cylinder_blank(), H)
    assert stitched.triangles_before < 0.6 * alone.triangles_before
    one, two = measure_condition(stitched.swept), measure_condition(alone.swept)
    assert (one.closed, one.bodies, one.genus) == (two.closed, two.bodies, two.genus) == (True, 1, 3)
    assert mesh_volume_mm3(stitched.trimmed) == pytest.approx(mesh_volume_mm3(alone.trimmed), rel=5e-4)
    for solid in (stitched, alone):
        points, _ = spread_points(solid.swept, 8000)
        assert np.quantile(np.abs(exact_field(sweep, points)), 0.999) < 0.018


def test_hardly_any_net_falls_back_to_the_field_alone(monkeypatch):
    """Twelve nets, two shapes each: the rim fits its ring and the result is sound."""
    fallen, original = [], channel._field_wall
    monkeypatch.setattr(channel, "_field_wall", lambda *given: fallen.append(1) or original(*given))
    for seed in range(6):
        plan, blank, _, _ = random_net(200 + seed)
        for own in (plan, roofed(plan)):
            make_channel_solid(own, blank, 0.4)
    print(f"{len(fallen)} of 12 fell back")
    assert len(fallen) <= 1


def test_a_channel_too_short_for_a_stretch_is_left_to_the_field():
    point = np.array([30.0, 20.0, 15.0])
    for far in (0.0, 2.0):
        plan = plans.plan_of([plans.branch("B1", "N1", "N2", [point, point + np.array([far, 0.0, 0.0])], 6.0)])
        _, found = stretches_of(plan)
        assert len(found.sides) == 0 and len(found.planes) == 0


def test_arched_channels_are_left_to_the_field():
    plan = dataclasses.replace(plans.tee(), section=SectionRule(SectionShape.ARCHED, 45.0))
    assert len(stretches_of(plan)[1].sides) == 0


def test_stretches_that_do_not_fit_are_left_to_the_field(monkeypatch):
    """The first two are refused once: the wall is made anew without them, and stays closed."""
    plan, seen, original = roofed(plans.ladder()), [], channel.stitch

    def refuse(*given):
        seen.append(given[-1])
        return {0, 1} if len(seen) == 1 else original(*given)

    monkeypatch.setattr(channel, "stitch", refuse)
    solid = make_channel_solid(plan, plans.cylinder_blank(), H)
    condition = measure_condition(solid.swept)
    assert (condition.closed, condition.bodies, condition.genus) == (True, 1, 3)
    first, second = seen
    assert len(second.sides) == len(first.sides) - 2 and second.offset[0] == first.offset[2]
    assert (second.planes == first.planes[4:]).all() and (second.ring(0) == first.ring(4)).all()
    assert (second.end[first.of < 2] == -1).all()
    rest = first.end >= 4
    assert (second.end[rest] == first.end[rest] - 4).all()
    assert (second.end[(first.end == -2) & (first.of >= 2)] == -2).all()


class _Unfilled:
    """numpy whose fresh arrays hold NaN instead of whatever was in memory."""

    def __getattr__(self, name):
        return getattr(np, name)

    @staticmethod
    def empty(shape, dtype=float):
        return np.full(shape, np.nan if np.dtype(dtype).kind == "f" else -(10**9), dtype)


@pytest.mark.parametrize("shape", ["round", "roofed"])
def test_no_point_of_a_ring_is_left_unwritten(shape, monkeypatch):
    """Bowed tapered branches that fork: every array made for frames and points is filled, and every point is finite."""
    plan = tubes.unequal_wye()[0] if shape == "round" else roofed(tubes.unequal_wye()[0])
    monkeypatch.setattr(stretch, "np", _Unfilled())
    monkeypatch.setattr(centreline, "np", _Unfilled())
    _, found = stretches_of(plan)
    assert len(found.sides) == 5 and len(found.points) == (found.sides * found.rings).sum()
    assert np.isfinite(found.points).all()
    samples = centreline.frame_samples(centreline.list_samples(plan), plan)
    assert np.isfinite(samples.side).all() and np.isfinite(samples.turn).all()
