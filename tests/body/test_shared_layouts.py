"""The real layouts on cores and a jacket: every port is led out, every wall measured again."""

import itertools
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from morph.body.make import make_plan
from morph.body.plan import BranchKind
from morph.layout.density import make_density
from morph.layout.extract import make_graph
from morph.settings.job import (
    CarrierBlankSettings,
    LayoutSettings,
    Metal,
    PortSettings,
    Role,
    Rows,
    SectionSettings,
    ServiceSettings,
)
from tests.body import measure
from tests.body.scenes import Scene
from tests.surface.graphs import make_profile

FOLDER = Path(__file__).parent.parent / "data" / "layouts"
BAND_MM = 0.2
WEB_MM = 30.0
"""Nearer than this along the channels two places bound a junction, not a wall: 3 times bore plus wall."""

CRESCENT = [("in", "in", "B", 0.27), ("out", "out", "R", 0.78)]
TWO_FEEDS = [("a", "in", "L", 0.18), ("b", "in", "T", 0.85), ("c", "out", "B", 0.69)]
SPLIT = [("a", "in", "T", 0.48), ("b", "out", "L", 0.13), ("c", "out", "R", 0.35), ("d", "out", "B", 0.74)]
LAYOUTS = {
    "s0_crescent_48x64_R1.5_b0": ((88.0, 66.0), CRESCENT),
    "s2_twofeeds_64x96_R1.6_b0": ((90.0, 60.0), TWO_FEEDS),
    "s3_split_96x128_R2.0_b0": ((96.0, 72.0), SPLIT),
    "s5_crescent_96x128_R1.5_b2": ((96.0, 72.0), CRESCENT),
    "s6_twofeeds_128x192_R2.0_b2": ((120.0, 80.0), TWO_FEEDS),
}
BODIES = {
    "core 30": {"radius_mm": 30.0, "depth_mm": 8.0, "shape": CarrierBlankSettings((20.0, 20.0))},
    "core 60": {"radius_mm": 60.0, "depth_mm": 10.0, "shape": CarrierBlankSettings((15.0, 15.0))},
    "jacket 40": {
        "radius_mm": 40.0,
        "depth_mm": 8.0,
        "metal": Metal.AWAY_FROM_AXIS,
        "shape": CarrierBlankSettings((20.0, 20.0), 30.0),
    },
}


@cache
def read(name):
    size, rows = LAYOUTS[name]
    w, h = size
    place = {
        "B": lambda s: (s * w, 0.0),
        "T": lambda s: (s * w, h),
        "L": lambda s: (0.0, s * h),
        "R": lambda s: (w, s * h),
    }
    ports = tuple(PortSettings(port, Role(role), place[side](share)) for port, role, side, share in rows)
    layout = LayoutSettings(FOLDER / f"{name}.npy", size, rows=Rows.BOTTOM_UP)
    return make_graph(make_density(layout), layout, ports), ports


def rise_of_a_smooth_start_mm(bore_mm):
    """The least room above a port that points up, for a lead that turns level without a kink, at any narrower bore.

    Written out: the straight start that narrows by half its length until a bend of 1.5 bores is 1.4 of its own, the
    bend, the roof over the level channel (5 % less room passes as a neck), wall and bands.
    """
    narrow = bore_mm * np.linspace(3.0 / bore_mm, 1.0, 500)
    straight = np.maximum(bore_mm - narrow * 1.5 / 1.4 * 1.105, 0.0) / 0.5
    roof = 0.95 * 0.5 * narrow / np.cos(np.radians(47.0))
    return float((straight + 1.5 * narrow + roof).min()) + 3.0 + BAND_MM


@pytest.mark.parametrize("body", sorted(BODIES))
@pytest.mark.parametrize("name", sorted(LAYOUTS))
def test_every_port_of_a_real_layout_is_led_out(name, body):
    graph, ports = read(name)
    scene = Scene(graph, **BODIES[body])
    profile = make_profile(smallest_bore_mm=3.0)
    plan = make_plan(scene.wrapped, scene.blank, ports, SectionSettings(), ServiceSettings(), profile)
    assert [exit_.port for exit_ in plan.exits] == [port.name for port in ports]
    leads = {branch.id: branch for branch in plan.branches if branch.kind is BranchKind.LEAD}
    for notice in plan.notices:
        if notice.code == "lead-kinked":
            start = leads[notice.branch_ids[0]]
            margin = scene.blank.z_mm[1] - abs(start.xyz_mm[0, 2])  # blank and sheet lie evenly about z = 0
            assert rise_of_a_smooth_start_mm(start.bore_mm[0]) > margin, notice.text
    for branch in plan.branches:
        for face, wall, bore in measure.face_walls(scene.blank, plan, branch):
            needed = np.maximum(3.0, bore) if face.role == "part" else np.full(len(bore), 3.0)
            assert (wall - BAND_MM >= needed - 1e-3).all(), (branch.id, face.name)
    ways = measure.node_ways(plan)
    for one, two in itertools.combinations(plan.branches, 2):
        if BranchKind.LEAD in (one.kind, two.kind):
            assert measure.apart(plan, one, two, WEB_MM, ways) - BAND_MM >= 3.0 - 0.02, (one.id, two.id)
    # Layouts drawn wider than the depth allows are capped, and the caps say where and how much.
    for cap in plan.caps:
        branch = next(b for b in plan.branches if b.id == cap.branch)
        assert 0.0 < cap.length_mm <= branch.length_mm * 1.01
        assert cap.area_mm2 <= cap.length_mm * float((branch.wanted_mm - branch.bore_mm).max()) + 1e-9
