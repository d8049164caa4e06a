"""Plans of whole scenes: structure, leads measured again by other means, exits, circuits, flow."""

import itertools

import numpy as np
import pytest

from morph.body.plan import BranchKind
from morph.core.errors import MorphError
from morph.core.fingerprint import fingerprint
from morph.settings.job import BoxBlankSettings, CarrierBlankSettings, ConeMap, HoleSettings, Metal, ServiceSettings
from tests.body import measure
from tests.body.scenes import Scene
from tests.surface.graphs import cross, ladder, letter_f, make_graph, straight_line

pytestmark = pytest.mark.quick

JACKET = {"metal": Metal.AWAY_FROM_AXIS, "radius_mm": 30.0}
BAND = 0.2
WEB_MM = 26.0
"""Nearer than this along the channels two places bound a junction, not a wall: 3 times bore plus wall."""
PIN = HoleSettings((6.0, 0.0, -51.0), (0, 0, 1), 8.0)
SCENES = {
    "line": Scene(straight_line()),
    "letter": Scene(letter_f()),
    "ladder": Scene(ladder(), radius_mm=30.0),
    "core 28": Scene(cross(), radius_mm=28.0),
    "core 34": Scene(cross()),
    "core 40 top": Scene(cross(), radius_mm=40.0, port_faces=("top",)),
    "core 60": Scene(cross(), radius_mm=60.0, depth_mm=10.0),
    "both ends": Scene(cross(), port_faces=("foot", "top")),
    "shell": Scene(cross(), radius_mm=40.0, shape=CarrierBlankSettings((15.0, 15.0), 16.0)),
    "jacket": Scene(cross(), shape=CarrierBlankSettings((15.0, 15.0), 25.0), **JACKET),
    "jacket outer": Scene(cross(), shape=CarrierBlankSettings((15.0, 15.0), 30.0), port_faces=("outer",), **JACKET),
    "box": Scene(cross(), shape=BoxBlankSettings((-60, -60, -55), (60, 60, 55)), port_faces=("+x", "-y"), **JACKET),
    "pin": Scene(cross(), holes=(PIN,)),
    "tip shapes the part": Scene(cross(), part_faces=("carrier", "top")),
    "default margin": Scene(cross(), shape=CarrierBlankSettings()),
    "cone": Scene(cross(), radius_mm=40.0, half_angle_deg=12.0),
    "cone down": Scene(cross(), radius_mm=40.0, half_angle_deg=-12.0, map=ConeMap.POLAR),
    "cone top": Scene(cross(), radius_mm=44.0, half_angle_deg=-9.0, port_faces=("top",)),
    "cone shell": Scene(cross(), radius_mm=44.0, half_angle_deg=10.0, shape=CarrierBlankSettings((15.0, 15.0), 18.0)),
    "cone jacket": Scene(cross(), half_angle_deg=15.0, shape=CarrierBlankSettings((15.0, 15.0), 28.0), **JACKET),
    "cone outer": Scene(
        cross(),
        half_angle_deg=-10.0,
        map=ConeMap.POLAR,
        shape=CarrierBlankSettings((15.0, 15.0), 28.0),
        port_faces=("outer",),
        **JACKET,
    ),
    "given exits": Scene(
        cross(),
        exits={"left": {"exit_mm": (-20.0, 0.0, -51.0)}, "top": {"exit_mm": (0.0, 12.0, -51.0), "leave": (0, 0, -3)}},
    ),
}


@pytest.fixture(scope="module", params=sorted(SCENES))
def built(request):
    return SCENES[request.param], SCENES[request.param].plan()


def leads(plan):
    return [branch for branch in plan.branches if branch.kind is BranchKind.LEAD]


def test_channels_come_first_then_one_lead_per_port(built):
    scene, plan = built
    names = [f"L-{port.name}" for port in scene.ports]
    assert [b.id for b in plan.branches] == [b.id for b in scene.graph.branches] + names
    assert [b.kind for b in plan.branches].count(BranchKind.LEAD) == len(names)
    assert [exit_.port for exit_ in plan.exits] == [port.name for port in scene.ports]


def test_samples_are_fine_and_sheet_points_map_to_their_places(built):
    scene, plan = built
    for branch in plan.branches:
        step = np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1)
        assert (step <= np.minimum(np.minimum(branch.bore_mm[1:], branch.bore_mm[:-1]) / 4, 1.0) + 1e-9).all()
        assert step.min() > 1e-9
        if branch.sheet_mm is not None:
            place = scene.carrier.point_mm(branch.sheet_mm, scene.depth_mm)
            np.testing.assert_allclose(branch.xyz_mm, place, atol=1e-9)


def test_every_wall_to_faces_and_holes_holds(built):
    scene, plan = built
    for branch in plan.branches:
        for face, wall, bore in measure.face_walls(scene.blank, plan, branch):
            part = face.role == "part"
            needed = np.maximum(3.0, bore) if part else np.full(len(bore), 3.0)
            assert (wall - BAND >= needed - 1e-3).all(), (branch.id, face.name, (wall - BAND - needed).min())
        for hole, wall in measure.hole_walls(scene.blank, branch):
            assert (wall - BAND >= hole.wall_mm - 1e-3).all(), (branch.id, hole.id)


def test_leads_keep_their_wall_to_channels_and_to_each_other(built):
    _, plan = built
    ways = measure.node_ways(plan)
    for one, two in itertools.combinations(plan.branches, 2):
        if BranchKind.LEAD in (one.kind, two.kind):
            wall = measure.apart(plan, one, two, WEB_MM, ways)
            assert wall - BAND >= 3.0 - 0.02, (one.id, two.id, wall)


def test_leads_bend_gently_and_leave_square(built):
    scene, plan = built
    for lead, exit_ in zip(leads(plan), plan.exits, strict=True):
        assert measure.sharpest_bend_bores(lead) >= 1.5
        face = scene.blank.face(exit_.face)
        np.testing.assert_allclose(exit_.leave, face.outward(exit_.xyz_mm[None])[0], atol=1e-9)
        last = lead.xyz_mm[-1] - lead.xyz_mm[-2]
        np.testing.assert_allclose(last / np.linalg.norm(last), exit_.leave, atol=1e-6)
        np.testing.assert_allclose(lead.xyz_mm[-1], exit_.xyz_mm, atol=1e-12)
        assert abs(face.distance_mm(exit_.xyz_mm[None])[0]) < 1e-9
        assert face.role == "port"


def test_leads_carry_on_from_their_channel(built):
    """The lead starts along the channel's own direction unless a kink is announced."""
    _scene, plan = built
    kinked = {name for notice in plan.notices if notice.code == "lead-kinked" for name in notice.branch_ids}
    for lead in leads(plan):
        touching = [b for b in plan.branches if b.kind is BranchKind.CHANNEL and lead.start in (b.start, b.end)]
        (channel,) = touching
        inward = (
            channel.xyz_mm[1] - channel.xyz_mm[0]
            if channel.start == lead.start
            else channel.xyz_mm[-2] - channel.xyz_mm[-1]
        )
        ahead = lead.xyz_mm[1] - lead.xyz_mm[0]
        turn = np.degrees(np.arccos(np.clip(-(ahead @ inward) / np.linalg.norm(ahead) / np.linalg.norm(inward), -1, 1)))
        # Two chords of up to 0.75 mm on bends of 4.5 mm and more: half of 0.75 / 4.5 rad each.
        assert turn < 12.0 or lead.id in kinked
        at_port = channel.bore_mm[0 if channel.start == lead.start else -1]
        assert lead.bore_mm[0] == pytest.approx(at_port, rel=0.051)
        slope = np.abs(np.diff(lead.bore_mm)) / np.linalg.norm(np.diff(lead.xyz_mm, axis=0), axis=1)
        assert slope.max() <= 0.5 + 1e-6


def test_a_lead_much_narrower_than_its_port_is_named(built):
    _, plan = built
    named = {name for notice in plan.notices if notice.code == "lead-thinned" for name in notice.branch_ids}
    for lead in leads(plan):
        assert (lead.bore_mm.min() < 0.999 * lead.bore_mm[0]) == (lead.id in named)


def test_room_is_never_below_the_bore(built):
    _, plan = built
    for branch in plan.branches:
        assert (branch.room_mm >= branch.bore_mm - 1e-6).all(), branch.id
        assert len(branch.room_by) == len(branch.room_mm)


def test_everything_hangs_together_and_flows(built):
    _, plan = built
    (circuit,) = plan.circuits
    assert sorted(circuit) == sorted(branch.id for branch in plan.branches)
    dead = {node.id for node in plan.nodes if node.kind == "dead-end"}
    for branch in plan.branches:
        assert branch.through_flow != bool({branch.start, branch.end} & dead)


def test_exits_are_swept_past_their_face_by_stock_and_a_bore():
    plan = Scene(straight_line(), stock_mm=(("foot", 1.5),)).plan()
    for exit_, lead in zip(plan.exits, leads(plan), strict=True):
        assert exit_.bore_mm == lead.bore_mm[-1]
        assert exit_.overshoot_mm == pytest.approx(1.5 + exit_.bore_mm)
        assert exit_.xyz_mm[2] == -35.0


def test_a_given_exit_is_met():
    plan = SCENES["given exits"].plan()
    at = {exit_.port: exit_ for exit_ in plan.exits}
    np.testing.assert_allclose(at["left"].xyz_mm, [-20, 0, -51], atol=1e-9)
    np.testing.assert_allclose(at["top"].xyz_mm, [0, 12, -51], atol=1e-9)


def test_a_given_direction_alone_is_kept():
    plan = Scene(cross(), exits={"left": {"leave": (0.0, 0.5, -1.0)}}).plan()
    leave = plan.exits[1].leave
    np.testing.assert_allclose(leave, np.array([0, 0.5, -1]) / np.linalg.norm([0, 0.5, -1]), atol=1e-12)
    last = plan.branches[-3].xyz_mm[-1] - plan.branches[-3].xyz_mm[-2]
    np.testing.assert_allclose(last / np.linalg.norm(last), leave, atol=1e-6)


def test_a_port_amid_a_ring_dives_into_the_metal():
    graph = make_graph(
        (96.0, 72.0),
        {"N1": (48, 20, "in"), "N2": (48, 50, "out"), "A": (30, 36), "B": (66, 36)},
        [("N1", "A", 5.0), ("N1", "B", 5.0), ("A", "N2", 5.0), ("B", "N2", 5.0)],
    )
    plan = Scene(graph).plan()
    for lead in leads(plan):
        inward = lead.xyz_mm[0] * [-1, -1, 0]
        ahead = lead.xyz_mm[1] - lead.xyz_mm[0]
        assert ahead @ inward / np.linalg.norm(ahead) / np.linalg.norm(inward) > 0.99
    assert all(branch.through_flow for branch in plan.branches)


def test_a_side_branch_carries_no_flow():
    graph = make_graph(
        (60.0, 40.0),
        {"N1": (30, 0, "in"), "J": (30, 20), "N2": (30, 40, "out"), "D": (45, 20)},
        [("N1", "J", 4.0), ("J", "N2", 4.0), ("J", "D", 4.0)],
    )
    plan = Scene(graph).plan()
    assert [branch.through_flow for branch in plan.branches] == [True, True, False, True, True]


def test_two_circuits_are_told_apart():
    places = {"N1": (10, 0, "a"), "N2": (10, 40, "b"), "N3": (50, 0, "c"), "N4": (50, 40, "d")}
    plan = Scene(make_graph((60.0, 40.0), places, [("N1", "N2", 4.0), ("N3", "N4", 4.0)])).plan()
    assert plan.circuits == (("B1", "L-a", "L-b"), ("B2", "L-c", "L-d"))


def test_a_blocked_lead_names_what_is_in_the_way():
    """Pins all around the foot leave no way out; the message names one, the place and what is lacking."""
    pins = tuple(
        HoleSettings((26.0 * np.cos(a), 26.0 * np.sin(a), -35.0), (0, 0, 1), 9.0, depth_mm=12.0)
        for a in np.linspace(0, 2 * np.pi, 12, endpoint=False)
    )
    pins += (HoleSettings((0.0, 0.0, -35.0), (0, 0, 1), 30.0, depth_mm=12.0),)
    with pytest.raises(MorphError) as caught:
        Scene(straight_line(), holes=pins).plan()
    error = caught.value
    assert (error.code == "lead-blocked" and "'in'" in error.where) or "'out'" in error.where
    assert "no path" in error.found or "mm too little" in error.found


def test_a_blocked_lead_with_a_given_exit_names_what_blocks_it():
    """A fence of pins from foot to top stands between the channel and the given exit."""
    fence = tuple(HoleSettings((4.0, -40.0, z), (0, 1, 0), 4.0) for z in np.arange(-32.0, 34.0, 6.0))
    with pytest.raises(MorphError) as caught:
        Scene(straight_line(), holes=fence, exits={"in": {"exit_mm": (-12.0, 0.0, -35.0)}}).plan()
    error = caught.value
    assert error.code == "lead-blocked" and "'in'" in error.where
    assert "mm too little" in error.found and "hole:H" in error.expected


def test_the_same_scene_gives_the_same_plan():
    assert fingerprint(Scene(cross()).plan()) == fingerprint(Scene(cross()).plan())


def test_a_mirrored_drawing_gives_a_mirrored_plan():
    from morph.settings.job import SeenFrom

    one, two = Scene(cross()).plan(), Scene(cross(), seen_from=SeenFrom.METAL).plan()
    for a, b in zip(one.branches, two.branches, strict=True):
        if a.kind is BranchKind.CHANNEL:
            np.testing.assert_allclose(a.xyz_mm * [1, -1, 1], b.xyz_mm, atol=1e-9)
            np.testing.assert_allclose(a.bore_mm, b.bore_mm, atol=1e-9)
        else:
            assert a.length_mm == pytest.approx(b.length_mm, rel=0.2)


def test_thin_walls_between_leads_are_never_made_for_the_sake_of_the_bore():
    """Two ports 10 mm apart: the leads spread, or narrow, but keep 3 mm and the bands between them."""
    places = {"N1": (25, 0, "a"), "N2": (25, 40, "b"), "N3": (35, 0, "c"), "N4": (35, 40, "d")}
    plan = Scene(make_graph((60.0, 40.0), places, [("N1", "N2", 5.0), ("N3", "N4", 5.0)])).plan()
    for one, two in itertools.combinations(leads(plan), 2):
        assert measure.apart(plan, one, two, 0.0) - BAND >= 3.0 - 0.02


def test_progress_is_told_and_may_stop_the_work():
    from morph.body.make import make_plan
    from morph.core.errors import Cancelled

    class Stop:
        def __init__(self, at):
            self.left = at

        def step(self, stage, done, total):
            self.left -= 1
            if self.left < 0:
                raise Cancelled

    scene = Scene(straight_line(), service=ServiceSettings())
    for at in range(4):
        with pytest.raises(Cancelled):
            make_plan(
                scene.wrapped, scene.blank, scene.ports, scene.section, scene.service, scene.made_profile, Stop(at)
            )


def test_a_start_without_room_is_kinked_and_named():
    """10 mm above the sheet a U-turn does not fit at full bore: the lead dives from the port at an angle."""
    plan = SCENES["default margin"].plan()
    (notice,) = [notice for notice in plan.notices if notice.code == "lead-kinked"]
    assert notice.branch_ids == ("L-top",) and "deg" in notice.text


def test_ports_that_meet_behind_the_carrier_are_refused():
    """At 22 mm from the axis a full turn is 2 pi 22 mm: the ends of a line as long lie at one place."""
    turn = 2.0 * np.pi * 22.0
    graph = make_graph((turn, 40.0), {"N1": (0.0, 20.0, "in"), "N2": (turn, 20.0, "out")}, [("N1", "N2", 4.0)])
    with pytest.raises(MorphError) as caught:
        Scene(graph, radius_mm=30.0).plan()
    assert caught.value.code == "ports-meet" and "0.000 mm between 'in' and 'out'" in caught.value.found
