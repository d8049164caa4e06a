"""Random port sets on cores, shells, cones and boxes: every lead legal by own measures, every refusal confirmed.

Refusals are confirmed by a flood over voxels (a proof), or by random trees of ways that find none
(evidence); a refusal for which a tree finds a way is a false one. An end without a place is confirmed by
places sampled all over the flat port faces; where one is free of faces and holes, channels or other ends took
it, which is not measured. Nor are refusals by other rules: both are counted apart, and confirm nothing.
"""

import time
from collections import Counter

import numpy as np
import pytest
from scipy.spatial import cKDTree

from morph.core.errors import MorphError
from morph.solid.channel import make_channel_solid
from tests.body import end_oracle, lead_oracle
from tests.body.lead_scenes import lead_scene

FEW = (0, 2, 3, 5, 7, 8, 11, 17, 27, 30)
"""Sets of the default run: every body, moods open, fence, given, ends."""

CONFIRMED_LEAST = 0.95
SLOWEST_S = 60.0
"""Processor time of one set on a busy machine."""


def solve(seed):
    """The plan of a set and None, or None and the error; with the processor time."""
    scene, _ = lead_scene(seed)
    begin = time.process_time()
    try:
        return scene, scene.plan(), None, time.process_time() - begin
    except MorphError as error:
        return scene, None, error, time.process_time() - begin


def confirm(scene, error, seed):
    """How a refusal is confirmed: flood, tree, sampled faces, not measured (with its code), or false."""
    assert error.expected and error.do and "[[port]]" in error.where
    if error.code == "end-no-place":
        return "sampled" if end_oracle.samples_find_no_place(scene, error) else f"not measured: {error.code}"
    if error.code != "lead-blocked":
        return f"not measured: {error.code}"
    refusal = lead_oracle.Refusal(scene, error)
    if lead_oracle.flood_finds_none(refusal):
        return "flood"
    found = any(lead_oracle.tree_finds_way(refusal, 10 * seed + k) for k in range(2))
    return "false" if found else "tree"


@pytest.mark.parametrize("seed", FEW)
def test_leads_of_a_few_sets_are_legal(seed):
    scene, plan, error, _ = solve(seed)
    if plan is None:
        assert confirm(scene, error, seed) != "false", error.sentence()
    else:
        assert lead_oracle.lead_faults(scene, plan) == []


@pytest.mark.slow
def test_two_hundred_sets():
    tally, times, faults, false = Counter(), [], {}, []
    for seed in range(200):
        scene, plan, error, seconds = solve(seed)
        times.append(seconds)
        if plan is not None:
            tally["solved"] += 1
            if found := lead_oracle.lead_faults(scene, plan):
                faults[seed] = found
            continue
        how = confirm(scene, error, seed)
        tally[f"refused, {how}"] += 1
        if how == "false":
            false.append((seed, error.sentence()))
    print(dict(tally), "p50 and p95 of", np.percentile(times, [50, 95]).round(2), "s", faults, false)
    measured = sum(n for how, n in tally.items() if how.startswith("refused") and "not measured" not in how)
    print(f"refusals measured: {measured} of {200 - tally['solved']}; the others are named by their rule alone")
    assert not faults, faults
    assert measured >= 15 and tally["solved"] >= 120, tally
    assert measured - len(false) >= CONFIRMED_LEAST * measured, false
    assert max(times) < SLOWEST_S


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(0, 100, 5))
def test_the_walls_hold_on_the_written_mesh(seed):
    """Vertices of the channel mesh near leads against faces and holes, roofs and all; h is 0.3 mm."""
    scene, plan, _, _ = solve(seed)
    if plan is None:
        pytest.skip("refused; its reason is judged elsewhere")
    solid = make_channel_solid(plan, scene.blank, 0.3)
    points = np.asarray(solid.trimmed.vertices_mm)
    exits = np.array([exit_.xyz_mm for exit_ in plan.exits])
    wide = max(float(branch.bore_mm.max()) for branch in plan.branches)
    leads = np.concatenate([b.xyz_mm for b in plan.branches if b.kind == "lead"])
    near = cKDTree(leads).query(points)[0] < 0.75 * wide
    for face in scene.blank.faces:
        distance = lead_oracle.face_distance(face, points)
        keep = near.copy()
        if face.role == "port":  # an opening is wanted there, and the overshoot beyond it
            keep &= np.min(np.linalg.norm(points[:, None] - exits[None], axis=2), axis=1) > 3.0 * wide
        if keep.any():
            assert distance[keep].min() >= 3.0 + lead_oracle.BAND_MM - 0.02, face.name
    inside = near & (np.min([lead_oracle.face_distance(face, points) for face in scene.blank.faces], axis=0) > 0.0)
    for hole in scene.blank.holes:
        assert lead_oracle.hole_distance(hole, points[inside]).min() >= hole.wall_mm + lead_oracle.BAND_MM - 0.02, (
            hole.id
        )
