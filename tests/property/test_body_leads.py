"""Leads of random jobs, measured again by other means: fifty port sets on cores, shells, jackets and boxes."""

import itertools

import numpy as np
import pytest

from morph.body.plan import BranchKind
from morph.core.errors import MorphError
from morph.settings.job import BoxBlankSettings, CarrierBlankSettings, HoleSettings, Metal, ServiceSettings
from tests.body import measure
from tests.body.scenes import Scene
from tests.surface.graphs import make_graph

SEEDS = range(50)
BAND_MM = 0.2
SAMPLING_MM = 0.02
"""Between two polylines with samples up to 0.75 mm apart."""
WEB_MM = 32.0
"""Nearer than this along the channels two places bound a junction, not a wall: 3 times bore plus wall."""

BLOCKED_MOST = 1
"""Some of fifty random jobs may truly have no way out; each must say so clearly."""


def random_graph(rng):
    """A ring with two to four ports on random edges of the sheet, or amid it."""
    w, h = float(rng.uniform(60, 100)), float(rng.uniform(50, 80))
    bore = float(rng.uniform(3.5, 7.0))
    places = {
        "R0": (0.35 * w, 0.35 * h),
        "R1": (0.65 * w, 0.35 * h),
        "R2": (0.65 * w, 0.65 * h),
        "R3": (0.35 * w, 0.65 * h),
    }
    links = [(f"R{k}", f"R{(k + 1) % 4}", bore) for k in range(4)]
    sides = list(rng.permutation(4))[: int(rng.integers(2, 5))]
    for k, side in enumerate(sides):
        share = float(rng.uniform(0.3, 0.7))
        place = [(share * w, 0.0), (w, share * h), (share * w, h), (0.0, share * h)][side]
        corner = [("R0", "R1"), ("R1", "R2"), ("R2", "R3"), ("R3", "R0")][side][int(rng.integers(0, 2))]
        if rng.random() < 0.2:  # amid the sheet: halfway to the edge
            place = tuple(0.5 * (np.array(place) + np.array(places[corner])))
        places[f"P{k}"] = (*place, f"port{k}")
        links.append((f"P{k}", corner, bore))
    return make_graph((w, h), places, links)


def random_scene(seed):
    rng = np.random.default_rng(1000 + seed)
    graph = random_graph(rng)
    w, h = graph.size_mm
    depth = float(rng.uniform(7.0, 11.0))
    margin = tuple(float(v) for v in rng.uniform(15.0, 25.0, 2))
    kind = seed % 5
    radius = max(float(rng.uniform(28.0, 60.0)), w / 5.6 + depth)
    common = {"graph": graph, "depth_mm": depth, "radius_mm": radius, "service": ServiceSettings()}
    if kind == 0:
        return Scene(**common, shape=CarrierBlankSettings(margin))
    if kind == 1:
        holes = tuple(
            HoleSettings((float(x), float(y), -h / 2 - margin[0]), (0, 0, 1), float(rng.uniform(4, 8)))
            for x, y in rng.uniform(-0.3, 0.3, (2, 2)) * radius
        )
        return Scene(**common, shape=CarrierBlankSettings(margin), holes=holes)
    if kind == 2:
        shell = CarrierBlankSettings(margin, min(2.0 * depth + float(rng.uniform(2.0, 8.0)), 0.8 * radius))
        return Scene(**common, shape=shell, port_faces=("foot", "top"))
    if kind == 3:
        ring = CarrierBlankSettings(margin, depth + float(rng.uniform(16.0, 26.0)))
        faces = [("foot",), ("outer",), ("foot", "outer")][int(rng.integers(0, 3))]
        return Scene(**common, metal=Metal.AWAY_FROM_AXIS, shape=ring, port_faces=faces)
    reach = radius + depth + 22.0
    box = BoxBlankSettings((-reach, -reach, -h / 2 - margin[0]), (reach, reach, h / 2 + margin[1]))
    return Scene(**common, metal=Metal.AWAY_FROM_AXIS, shape=box, port_faces=("+x", "-y", "foot"))


BLOCKED = []


@pytest.mark.parametrize("seed", SEEDS)
def test_leads_of_a_random_job_are_legal(seed):
    scene = random_scene(seed)
    try:
        plan = scene.plan()
    except MorphError as error:
        assert error.code == "lead-blocked"
        assert "mm too little" in error.found and "[[port]]" in error.where
        BLOCKED.append(seed)
        assert len(BLOCKED) <= BLOCKED_MOST, BLOCKED
        return
    for lead, exit_ in zip((b for b in plan.branches if b.kind is BranchKind.LEAD), plan.exits, strict=True):
        for face, wall, bore in measure.face_walls(scene.blank, plan, lead):
            needed = np.maximum(3.0, bore) if face.role == "part" else np.full(len(bore), 3.0)
            assert (wall - BAND_MM >= needed - 1e-3).all(), (lead.id, face.name)
        for hole, wall in measure.hole_walls(scene.blank, lead):
            assert (wall - BAND_MM >= hole.wall_mm - 1e-3).all(), (lead.id, hole.id)
        assert measure.sharpest_bend_bores(lead) >= 1.5
        assert scene.blank.face(exit_.face).role == "port"
        outward = scene.blank.face(exit_.face).outward(exit_.xyz_mm[None])[0]
        np.testing.assert_allclose(exit_.leave, outward, atol=1e-9)
        assert lead.bore_mm.min() >= 3.0 - 1e-9
    merged = {frozenset(merge.branch_ids) for merge in plan.merges}
    ways = measure.node_ways(plan)
    for one, two in itertools.combinations(plan.branches, 2):
        if BranchKind.LEAD in (one.kind, two.kind) and frozenset((one.id, two.id)) not in merged:
            assert measure.apart(plan, one, two, WEB_MM, ways) - BAND_MM >= 3.0 - SAMPLING_MM, (one.id, two.id)
    assert not any("L-" in name for merge in plan.merges for name in merge.branch_ids)
