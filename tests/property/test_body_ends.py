"""Random jobs with threads and seal grooves: every end legal by dense points, or refused with a reason."""

import dataclasses

import numpy as np
import pytest

from morph.body.hole import distance_to_hole_mm
from morph.body.plan import BranchKind
from morph.core.errors import MorphError
from morph.settings.job import FaceSealEnd, PlainEnd, ThreadEnd
from tests.property.test_body_leads import random_scene

SEEDS = range(20)
WALL_MM = 3.0 + 0.2
"""The service wall and the bands of the test profile: 0.1 mm position, half of 0.2 mm bore."""

REASONS = {"lead-blocked", "end-no-place", "end-no-straight", "land-not-flat", "groove-too-near-bore"}
REFUSED = []
REFUSED_MOST = 2
"""Two of these jobs have round port faces only."""


def with_ends(scene, rng):
    kinds = [
        PlainEnd(),
        ThreadEnd("G1/8", thread_depth_mm=8.0),
        ThreadEnd("M10x1", thread_depth_mm=10.0),
        ThreadEnd("M8", thread_depth_mm=8.0),
        FaceSealEnd(12.0, 15.0, 1.4, 18.0),
    ]
    ends = {node.port: {"end": kinds[int(rng.integers(0, 5))]} for node in scene.graph.nodes if node.port}
    return dataclasses.replace(scene, exits=ends)


def cut_points(exit_):
    first = np.cross(exit_.leave, [0.3, 0.5, 0.8])
    first /= np.linalg.norm(first)
    u = np.linspace(0.0, 2.0 * np.pi, 90, endpoint=False)
    ring = np.cos(u)[:, None] * first + np.sin(u)[:, None] * np.cross(exit_.leave, first)
    depths = np.linspace(0.0, exit_.finish.cut_depth_mm, 60)
    rim = exit_.xyz_mm + 0.5 * exit_.finish.cut_mm * ring
    land = exit_.xyz_mm + 0.5 * exit_.finish.land_mm * ring
    return (rim[None] - depths[:, None, None] * exit_.leave).reshape(-1, 3), land


@pytest.mark.parametrize("seed", SEEDS)
def test_ends_of_a_random_job_are_legal(seed):
    scene = with_ends(random_scene(seed), np.random.default_rng(7000 + seed))
    try:
        plan = scene.plan()
    except MorphError as error:
        assert error.code in REASONS and "[[port]]" in error.where, error
        REFUSED.append((seed, error.code))
        assert len(REFUSED) <= REFUSED_MOST, REFUSED
        return
    cuts = {e.port: e.finish.cut(e.port, e.xyz_mm, e.leave, 0.0) for e in plan.exits}
    leads = {branch.id: branch for branch in plan.branches if branch.kind is BranchKind.LEAD}
    for exit_ in (e for e in plan.exits if not e.finish.is_plain):
        points, land = cut_points(exit_)
        for face in scene.blank.faces:
            if face.name != exit_.face:
                assert face.distance_mm(points).min() >= WALL_MM - 0.01
                assert face.distance_mm(land).min() >= -0.02
            else:
                np.testing.assert_allclose(face.distance_mm(land), 0.0, atol=1e-9)
        for hole in scene.blank.holes:
            assert distance_to_hole_mm(hole, points).min() >= WALL_MM - 0.02
        for other in plan.exits:
            if other.port == exit_.port:
                continue
            for cut in cuts[other.port]:
                assert distance_to_hole_mm(cut, points).min() >= WALL_MM - 0.02
            # the other port's lead keeps its wall to this cut
            lead = leads[other.lead]
            near = distance_to_hole_mm(cuts[exit_.port][0], lead.xyz_mm) - 0.5 * lead.bore_mm
            assert near.min() >= WALL_MM - 0.05, (exit_.port, other.port)
            if other.face == exit_.face:
                lands = exit_.finish.land_mm + max(other.finish.land_mm, other.bore_mm)
                assert np.linalg.norm(exit_.xyz_mm - other.xyz_mm) >= 0.5 * lands - 1e-6
        lead = leads[exit_.lead]
        arc = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(lead.xyz_mm, axis=0), axis=1))])
        straight = lead.xyz_mm[arc[-1] - arc <= exit_.finish.cut_depth_mm] - exit_.xyz_mm
        assert np.linalg.norm(np.cross(straight, exit_.leave), axis=1).max() < 1e-6
