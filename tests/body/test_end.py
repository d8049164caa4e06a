"""Ends: the pilot stays inside its thread, lands lie flat, cuts keep their walls, and every refusal says what to do."""

import itertools

import numpy as np
import pytest

from morph.body.end import make_finish, pilot_mm, roof_ratio
from morph.body.finish import Finish, ThreadHole
from morph.body.hole import distance_to_hole_mm
from morph.body.plan import BranchKind
from morph.body.section import SectionRule
from morph.body.thread import make_thread, thread_names
from morph.core.errors import MorphError
from morph.settings.job import (
    BoxBlankSettings,
    CarrierBlankSettings,
    FaceSealEnd,
    HoleSettings,
    Metal,
    PlainEnd,
    PortSettings,
    Role,
    SectionSettings,
    SectionShape,
    ServiceSettings,
    ThreadEnd,
)
from tests.body import measure
from tests.body.scenes import Scene
from tests.surface.graphs import cross, make_profile, straight_line

DEEP = CarrierBlankSettings((45.0, 15.0))
JACKET = {"metal": Metal.AWAY_FROM_AXIS, "radius_mm": 30.0}
BOX = {"shape": BoxBlankSettings((-60, -55, -52), (60, 55, 52)), "port_faces": ("-x", "+y", "foot"), **JACKET}
SEAL = FaceSealEnd(10.0, 14.0, 1.5, 18.0)
BAND_MM = 0.2 + 0.03
"""Position band 0.1 mm, half the bore band of 0.2 mm, and what meshing may take."""


def both(end):
    return {"in": {"end": end}, "out": {"end": end}}


def all_ports(end, graph):
    return {node.port: {"end": end} for node in graph.nodes if node.port}


def hole_of(name, stock_mm=0.3):
    thread = make_thread(name)
    return ThreadHole(thread, 10.0, 3.0, stock_mm)


# The section formula: a roofed channel reaches r max(1, s / cos b) above its centreline (closed form of a circle with
# two tangent planes, seen along an axis whose angle to the build direction has sine s), r below and beside it.
SHAPES = (SectionShape.ROUND, SectionShape.ROOFED, SectionShape.ARCHED, SectionShape.AUTO)


def axis_at(angle_deg):
    """An axis whose angle to the plate is given: 0 lies flat, 90 along the build direction."""
    a = np.radians(angle_deg)
    return np.array([np.cos(a), 0.0, np.sin(a)])


def reach_of_section_mm(shape, bore_mm, angle_deg, roof_deg):
    """How far the section of a channel reaches from its axis, by a projection of points on the swept shape itself."""
    r, b = bore_mm / 2, np.radians(roof_deg)
    u = np.linspace(0, 2 * np.pi, 181)
    polar = np.linspace(0, np.pi, 181)
    sphere = r * np.stack(
        [np.outer(np.sin(polar), np.cos(u)), np.outer(np.sin(polar), np.sin(u)), np.outer(np.cos(polar), np.ones(181))]
    ).reshape(3, -1)
    points = [sphere]
    if shape in (SectionShape.ROOFED, SectionShape.AUTO):
        points.append(np.array([[0.0], [0.0], [r / np.cos(b)]]))  # the apex of the cone tangent to the ball
    if shape is SectionShape.ARCHED:
        k = 1 / (1 - np.sin(b))  # asin((k - 1) / k) is the angle at the apex
        t = np.linspace(0, np.arccos((k - 1) / k), 181)
        profile, height = k * r * np.cos(t) - (k - 1) * r, k * r * np.sin(t)
        points.append(
            np.stack(
                [np.outer(profile, np.cos(u)), np.outer(profile, np.sin(u)), np.outer(height, np.ones(181))]
            ).reshape(3, -1)
        )
    axis = axis_at(angle_deg)
    cloud = np.concatenate(points, axis=1)
    return float(np.linalg.norm(cloud - np.outer(axis, axis @ cloud), axis=0).max())


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("name", ["G1/16", "G1/8", "G1", "M5", "M10x1", "M20"])
def test_the_pilot_with_its_roof_stays_inside_drill_and_minor_circle(shape, name):
    hole = hole_of(name)
    rule = SectionRule(shape, 47.0)
    for angle in range(0, 91, 5):
        pilot = pilot_mm(hole, axis_at(angle), rule, make_profile())
        reach = 2 * reach_of_section_mm(shape, pilot, angle, 47.0)
        assert reach <= hole.thread.drill_mm - 2 * hole.drill_stock_mm + 1e-9
        assert reach <= hole.thread.minor_mm - 0.03 + 1e-9


@pytest.mark.parametrize("name", thread_names())
def test_every_size_at_every_angle_by_the_closed_form(name):
    for shape, roof, stock in itertools.product(SHAPES, (30.0, 47.0, 60.0), (0.0, 0.3)):
        hole, rule = hole_of(name, stock), SectionRule(shape, roof)
        for angle in range(91):
            pilot = pilot_mm(hole, axis_at(angle), rule, make_profile())
            s, k = np.cos(np.radians(angle)), 1 / (1 - np.sin(np.radians(roof)))
            ratio = {
                SectionShape.ROUND: 1.0,
                SectionShape.ARCHED: max(1.0, s * np.sqrt(2 * k - 1)),
            }.get(shape, max(1.0, s / np.cos(np.radians(roof))))
            assert pilot * ratio <= min(hole.thread.drill_mm - 2 * stock, hole.thread.minor_mm - 0.03) + 1e-9
            if shape is SectionShape.ROOFED:  # and no smaller than it must be
                assert pilot * ratio == pytest.approx(
                    min(hole.thread.drill_mm - 2 * stock, hole.thread.minor_mm - 0.03)
                )


def test_a_pilot_lying_flat_by_hand():
    """G1/8: (8.8 - 0.6) cos 45 = 5.798 mm; along the build direction 8.2 mm; a flat round one at most the largest bore."""
    hole, profile = hole_of("G1/8"), make_profile(largest_bore_mm=8.0)
    roofed = SectionRule(SectionShape.ROOFED, 45.0)
    assert pilot_mm(hole, axis_at(0), roofed, profile) == pytest.approx(8.2 * np.cos(np.pi / 4))
    assert pilot_mm(hole, axis_at(90), roofed, profile) == pytest.approx(8.2)
    assert pilot_mm(hole, axis_at(0), SectionRule(), profile) == 8.0
    assert pilot_mm(hole, axis_at(90), SectionRule(), profile) == pytest.approx(8.2)
    assert roof_ratio(axis_at(90), roofed) == 1.0


def test_depths_and_land_by_hand():
    """1.5 major diameters plus 3 pitches, 4 pitches of run-out, a land of 1.6 major diameters (common practice, no source)."""
    port = PortSettings("p", Role.IN, (0.0, 0.0), end=ThreadEnd("G1/4"))
    finish = make_finish(port, axis_at(90), SectionRule(), ServiceSettings(), make_profile())
    assert finish.detail.thread_depth_mm == pytest.approx(1.5 * 13.157 + 3 * 1.337)
    assert finish.cut_depth_mm == finish.detail.drill_depth_mm == pytest.approx(1.5 * 13.157 + 7 * 1.337)
    assert finish.cut_mm == 13.157 and finish.land_mm == pytest.approx(1.6 * 13.157)
    own = PortSettings("p", Role.IN, (0.0, 0.0), end=ThreadEnd("G1/4", 15.0, 2.0, 0.5, 30.0))
    finish = make_finish(own, axis_at(90), SectionRule(), ServiceSettings(), make_profile())
    assert (finish.cut_depth_mm, finish.land_mm) == (17.0, 30.0) and finish.pilot_mm == pytest.approx(10.8)


def test_the_taper_between_pilot_and_channel():
    finish = Finish(hole_of("G1/8"), 8.0, 9.728, 13.0, 15.6)
    from_exit = np.array([0.0, 13.0, 15.0, 21.0, 30.0])
    assert finish.bore_mm(np.full(5, 4.0), from_exit, 0.5).tolist() == [8.0, 8.0, 7.0, 4.0, 4.0]
    # a pilot that is narrower runs on for its own radius of 4 mm, then widens
    assert finish.bore_mm(np.full(5, 9.0), np.array([0.0, 13.0, 17.0, 18.0, 30.0]), 0.5).tolist() == [
        8.0,
        8.0,
        8.0,
        8.5,
        9.0,
    ]
    assert finish.straight_mm(4.0, 0.5) == 21.0 and finish.straight_mm(9.0, 0.5) == 19.0
    assert Finish(PlainEnd()).bore_mm(np.full(5, 4.0), from_exit, 0.5).tolist() == [4.0] * 5


GOOD = {
    "foot": Scene(straight_line(), exits=both(ThreadEnd("G1/8"))),
    "deep": Scene(straight_line(), shape=DEEP, exits=both(ThreadEnd("G1/4", thread_depth_mm=14.0))),
    "roofed": Scene(
        cross(),
        section=SectionSettings(SectionShape.ROOFED, bore_range_mm=(3.0, 12.0)),
        exits=all_ports(ThreadEnd("M10x1"), cross()),
        **BOX,
    ),
    "box": Scene(cross(), exits=all_ports(ThreadEnd("G1/8"), cross()), **BOX),
    "one": Scene(straight_line(), shape=DEEP, exits={"out": {"end": ThreadEnd("M12")}}),
    "seal": Scene(straight_line(), shape=DEEP, exits=both(SEAL)),
    "given": Scene(
        straight_line(),
        shape=DEEP,
        exits={"in": {"end": ThreadEnd("G1/8"), "exit_mm": (10.0, 3.0, -65.0)}, "out": {"end": ThreadEnd("M8")}},
    ),
    "hole": Scene(
        straight_line(),
        shape=DEEP,
        exits=both(ThreadEnd("G1/8")),
        holes=(HoleSettings((0.0, 0.0, -65.0), (0, 0, 1), 6.0, depth_mm=40.0),),
    ),
}


def cut_points(exit_, step_mm=0.2):
    """The surface of what is cut at an exit, written out as points."""
    radius, depth = exit_.finish.cut_mm / 2, exit_.finish.cut_depth_mm
    u = np.linspace(0, 2 * np.pi, 120, endpoint=False)
    first = np.cross(exit_.leave, [0.3, 0.5, 0.8])
    first /= np.linalg.norm(first)
    second = np.cross(exit_.leave, first)
    ring = np.cos(u)[:, None] * first + np.sin(u)[:, None] * second
    side = [exit_.xyz_mm + radius * ring - t * exit_.leave for t in np.arange(0.0, depth, step_mm)]
    floor = [exit_.xyz_mm + r * ring - depth * exit_.leave for r in np.linspace(0.0, radius, 12)]
    return np.concatenate(side + floor)


@pytest.fixture(scope="module", params=sorted(GOOD))
def built(request):
    scene = GOOD[request.param]
    return scene, scene.plan()


def test_cuts_keep_their_walls(built):
    """Every point of every thread and groove against every face, hole, other cut and channel, by dense points."""
    scene, plan = built
    named = {e.port for e in plan.exits if not e.finish.is_plain}
    assert named == set(scene.exits)
    ways = measure.node_ways(plan)
    for exit_ in (e for e in plan.exits if not e.finish.is_plain):
        points = cut_points(exit_)
        for face in scene.blank.faces:
            if face.name != exit_.face:
                assert face.distance_mm(points).min() >= 3.0 + BAND_MM - 0.01, face.name
        for hole in scene.blank.holes:
            assert distance_to_hole_mm(hole, points).min() >= hole.wall_mm + BAND_MM - 0.02
        own = next(branch for branch in plan.branches if branch.id == exit_.lead)
        cut = exit_.finish.cut(exit_.port, exit_.xyz_mm, exit_.leave, 0.0)[0]
        behind = measure.dense(own)[2][-1] - exit_.finish.cut_depth_mm
        for branch in plan.branches:
            if branch.id == own.id:
                continue
            place, bore, at = measure.dense(branch)
            wall = distance_to_hole_mm(cut, place) - bore / 2
            way = behind + np.minimum(
                at + ways[branch.start].get(own.start, np.inf), at[-1] - at + ways[branch.end].get(own.start, np.inf)
            )
            counts = way > 3.0 * (exit_.finish.cut_mm / 2 + bore / 2 + 3.0 + BAND_MM)
            assert wall[counts].min(initial=np.inf) >= 3.0 + BAND_MM - 0.02, (exit_.port, branch.id)


def test_lands_lie_flat_and_apart(built):
    scene, plan = built
    for exit_ in plan.exits:
        face = scene.blank.face(exit_.face)
        if not exit_.finish.is_plain:
            np.testing.assert_allclose(exit_.leave, face.normal, atol=1e-9)
            rim = cut_points(exit_)[:120] - exit_.xyz_mm
            rim = exit_.xyz_mm + rim * (exit_.finish.land_mm / exit_.finish.cut_mm)
            np.testing.assert_allclose(face.distance_mm(rim), 0.0, atol=1e-9)
            assert min(f.distance_mm(rim).min() for f in scene.blank.faces) >= -0.02
    for one, other in itertools.combinations(plan.exits, 2):
        if one.face == other.face and not (one.finish.is_plain and other.finish.is_plain):
            apart = np.linalg.norm(one.xyz_mm - other.xyz_mm)
            lands = max(one.finish.land_mm, one.bore_mm) + max(other.finish.land_mm, other.bore_mm)
            assert apart >= 0.5 * lands - 1e-6


def test_leads_are_straight_and_of_pilot_bore_over_the_drill(built):
    _, plan = built
    lead = {branch.id: branch for branch in plan.branches if branch.kind is BranchKind.LEAD}
    for exit_ in (e for e in plan.exits if not e.finish.is_plain):
        branch, depth = lead[exit_.lead], exit_.finish.cut_depth_mm
        offset = exit_.xyz_mm - branch.xyz_mm
        along = offset @ exit_.leave
        aside = np.linalg.norm(offset - along[:, None] * exit_.leave, axis=1)
        arc = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1))])
        within = arc[-1] - arc <= depth
        assert aside[within].max() < 1e-6 and within.sum() >= 3
        if exit_.finish.pilot_mm:
            assert branch.bore_mm[within].max() <= exit_.finish.pilot_mm + 1e-9
            # a pilot wider than its channel may be printed narrower where its walls ask for that
            assert branch.bore_mm[within].min() >= min(exit_.finish.pilot_mm, branch.bore_mm[0]) * 0.95 - 1e-9
        assert (np.abs(np.diff(branch.bore_mm)) <= 0.5 * np.diff(arc) + 1e-9).all()
        if exit_.port in {"in", "out"}:
            assert measure.sharpest_bend_bores(branch) >= 1.5


def test_a_pilot_is_printed_narrower_rather_than_too_near_a_part_face():
    """G1/4, 20 mm off the axis of a core of radius 34: room for (14 - 0.23) / 1.5 = 9.18 mm of bore, pilot 11.2 mm."""
    exits = {"in": {"end": ThreadEnd("G1/4", thread_depth_mm=12.0), "exit_mm": (20.0, 0.0, -65.0)}}
    plan = Scene(straight_line(), shape=DEEP, exits=exits).plan()
    assert plan.exits[0].finish.pilot_mm == pytest.approx(11.2)
    assert plan.exits[0].bore_mm == pytest.approx((14.0 - BAND_MM) / 1.5, abs=1e-6)
    lead = next(branch for branch in plan.branches if branch.id == "L-in")
    assert (lead.bore_mm <= lead.room_mm + 1e-6).all()


def refused(code, exits, graph=None, **more):
    with pytest.raises(MorphError) as caught:
        Scene(graph or straight_line(), exits=exits, **{"shape": DEEP, **more}).plan()
    assert caught.value.code == code, caught.value
    assert "[[port]]" in caught.value.where
    return caught.value


G18 = ThreadEnd("G1/8")
FOOT_MM = -65.0


def at(x, y, end=G18, **more):
    return {"end": end, "exit_mm": (x, y, FOOT_MM), **more}


def test_an_unknown_thread_and_a_small_land():
    assert "G1/4" in refused("thread-unknown", {"in": {"end": ThreadEnd("G1/5")}}).do
    error = refused("land-too-small", {"in": {"end": ThreadEnd("G1/8", land_mm=9.0)}})
    assert "9.728" in error.expected and "9.000" in error.found


def test_a_thread_too_small_for_a_pilot():
    """M5: 4.2 - 2 x 0.8 = 2.6 mm, below the smallest bore of 3 mm with its band."""
    error = refused("thread-too-small", {"in": {"end": ThreadEnd("M5", drill_stock_mm=0.8)}})
    assert "2.600 mm" in error.found and "3.270 mm" in error.expected


def test_only_round_faces():
    refused(
        "land-not-flat",
        {"bottom": {"end": G18}},
        cross(),
        **JACKET,
        port_faces=("outer",),
        shape=CarrierBlankSettings((15, 15), 25),
    )


def test_a_given_exit_on_a_round_face():
    shell = CarrierBlankSettings((15.0, 15.0), 25.0)
    graph = cross()
    error = refused(
        "land-not-flat",
        {"bottom": {"end": G18, "exit_mm": (55.0, 0.0, -30.0)}},
        graph,
        **JACKET,
        port_faces=("outer", "foot"),
        shape=shell,
    )
    assert "'outer'" in error.found and "foot" in error.expected


def test_leave_not_square():
    refused("end-not-square", {"in": {"end": G18, "leave": (0.3, 0.0, -1.0)}})


def test_a_land_over_the_edge():
    """Radius 34, land 15.565 mm across: at x = 27 it hangs over by 27 + 7.782 - 34 = 0.782 mm."""
    service = ServiceSettings(wall_face_mm=0.5, wall_face_bores=0.0)
    error = refused("land-off-face", {"in": at(27.0, 0.0)}, service=service)
    assert "0.782 mm" in error.found and "face:carrier" in error.found


def test_a_land_over_an_open_hole():
    """A pin of 4 mm at x = -6.5: the nearer rim of the land at x = 2 lies at 2 - 7.782; 0.718 mm are left, so move it."""
    pin = HoleSettings((-7.0, 0.0, FOOT_MM), (0, 0, 1), 4.0, wall_mm=0.0)
    error = refused("land-off-face", {"in": at(2.0, 0.0)}, holes=(pin,))
    assert "open hole:H1" in error.found


def test_lands_that_overlap():
    """Two lands of 15.565 mm, 15 mm apart: 0.565 mm too near."""
    error = refused("lands-overlap", {"in": at(7.5, 0.0), "out": at(-7.5, 0.0)})
    assert "0.565 mm" in error.found
    plain = {"exit_mm": (-3.0, 0.0, FOOT_MM)}
    assert "land of out" in refused("lands-overlap", {"in": at(6.0, 0.0), "out": plain}).found


def test_a_thread_too_near_a_face():
    """Radius 34, major 9.728: at x = 26.5 the wall is 34 - 26.5 - 4.864 = 2.636 mm of 3 + 0.23; the land is made small."""
    service = ServiceSettings(wall_face_bores=0.0)
    error = refused("end-without-wall", {"in": at(26.5, 0.0, ThreadEnd("G1/8", land_mm=12.0))}, service=service)
    assert "0.594 mm" in error.found and "face:carrier" in error.found and "9.728" in error.expected


def test_a_thread_too_near_a_hole():
    """A deep pin whose wall lies 2 mm from the major diameter, 10 mm below the face: the land is flat, the thread is not free."""
    pin = HoleSettings((2.0 + 4.864 + 2.0 + 3.0, 0.0, 40.0), (0, 0, -1), 6.0, depth_mm=40.0 - FOOT_MM - 10.0)
    error = refused("end-without-wall", {"in": at(2.0, 0.0)}, holes=(pin,))
    assert "hole:H1" in error.found and "1.230 mm" in error.found


def test_a_thread_too_near_a_channel():
    """A thread as deep as the channel layer, right below it: the channel would be opened."""
    error = refused("end-without-wall", {"in": at(24.0, 2.0, ThreadEnd("G1/8", thread_depth_mm=55.0))})
    assert "branch B" in error.found


def test_no_place_for_the_land():
    error = refused("end-no-place", {"in": {"end": ThreadEnd("G1", thread_depth_mm=10.0, land_mm=80.0)}})
    assert "80.00 mm across" in error.expected and "the edge to" in error.found


def test_no_straight_run():
    error = refused("end-no-straight", {"in": {"end": ThreadEnd("G1")}})
    assert "66.04 mm deep" in error.expected


def test_a_groove_too_near_the_bore():
    """Bore 4, groove from 5: 0.5 mm of 1 + 0.23 mm."""
    error = refused("groove-too-near-bore", {"in": {"end": FaceSealEnd(5.0, 9.0, 1.5, 14.0)}})
    assert "0.500 mm" in error.found and "1.230 mm" in error.expected


def test_a_pilot_narrower_than_its_channel_is_told():
    scene = Scene(straight_line(), shape=DEEP, exits={"in": {"end": ThreadEnd("M5")}})
    notices = [n for n in scene.plan().notices if n.code == "thread-narrows"]
    assert len(notices) == 1 and "3.600 mm" in notices[0].text and notices[0].branch_ids == ("L-in",)
