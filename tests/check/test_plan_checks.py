"""Checks that need no mesh: bends, powder, through-flow, walls by centreline, machine, openings."""

import dataclasses

import networkx as nx
import numpy as np
import pytest

from morph.body.face import FaceRole
from morph.body.hole import Hole
from morph.body.plan import Cap
from morph.check.bend import bend_radii_bores, check_bends
from morph.check.between import find_walls
from morph.check.bore import measure_passages
from morph.check.capped import check_capped
from morph.check.centreline import make_centrelines, measure_ways
from morph.check.channel_wall import nearest_samples
from morph.check.condition import check_closed, circuit_loops
from morph.check.exits import own_exit_samples
from morph.check.machine import best_turn, check_machine, upright_frame
from morph.check.obstacle import HoleObstacle
from morph.check.opening import check_openings, match_openings
from morph.check.powder import plate_face, undrained, without_flow
from morph.check.rows import judge_length, name_list
from morph.check.subject import CheckSubject
from morph.core.verdict import Outcome
from morph.geometry.mesh import Mesh
from morph.solid.result import Insert, Opening
from tests.check.subjects import profile, run_through, with_machine
from tests.solid.plans import arc, box_blank, branch, cylinder_blank, ladder, plan_of, ring, sampled, straight_pipe, tee

pytestmark = pytest.mark.quick


# Bends


@pytest.mark.parametrize("radius_mm", [3.0, 5.0, 12.0])
def test_radius_of_an_arc_is_exact(radius_mm):
    item = branch("B1", "A", "B", arc((0, 0, 0), radius_mm, 0, 150, 2.0), 4.0)
    radii = bend_radii_bores(item)
    assert np.isinf(radii[0]) and np.isinf(radii[-1])
    assert radii[np.isfinite(radii)] == pytest.approx(radius_mm / 4.0, rel=0.01)


@pytest.mark.parametrize("turn_deg", [30.0, 60.0, 90.0, 135.0])
def test_a_sharp_corner_reads_its_mitre(turn_deg):
    """Circle through the corner and points half a bore either side: radius bore / (4 sin(turn / 2))."""
    turn = np.radians(turn_deg)
    points = [(0, 0, 0), (10, 0, 0), (10 + 10 * np.cos(turn), 10 * np.sin(turn), 0)]
    radii = bend_radii_bores(branch("B1", "A", "B", sampled(points, 4.0), 4.0))
    assert radii.min() == pytest.approx(1.0 / (4.0 * np.sin(0.5 * turn)), rel=0.01)


def bend_row(radius_mm, *, lead=False):
    lines = make_centrelines(plan_of([branch("B1", "A", "B", arc((0, 0, 0), radius_mm, 0, 170, 1.0), 4.0, lead=lead)]))
    return check_bends(lines, profile())[0]


def test_bend_outcomes():
    assert bend_row(8.0).outcome is Outcome.PASS
    assert bend_row(6.2).outcome is Outcome.WATCH and bend_row(4.0).outcome is Outcome.WATCH
    assert bend_row(1.9).outcome is Outcome.FAIL
    assert bend_row(1.9, lead=True).outcome is Outcome.WATCH
    tight = bend_row(4.0)
    assert tight.value == pytest.approx(1.0, rel=0.01) and tight.branch_ids == ("B1",) and "1 of 1" in tight.text
    straight = check_bends(make_centrelines(straight_pipe()), profile())[0]
    assert straight.outcome is Outcome.PASS and straight.value is None


# Powder and through-flow


def test_blind_branches():
    plan = tee()
    assert undrained(plan) == ["B3"] and without_flow(plan) == ["B3"]
    assert undrained(plan, frozenset({plan.exits[0].node})) == [b.id for b in plan.branches]
    assert undrained(ladder()) == [] and without_flow(ring()) == []


def test_an_access_port_drains_but_does_not_flow():
    base = tee()
    lead = branch("L-rod", "N4", "X-rod", sampled([(30, 27, 15), (30, 40, 15)], 5.0), 5.0, lead=True)
    exits = [(e.port, e.role.value, e.lead, e.face, e.leave, 0.0) for e in base.exits]
    plan = plan_of([*base.branches, lead], [*exits, ("rod", "access", "L-rod", "+y", (0, 1, 0), 0.0)])
    assert undrained(plan) == [] and without_flow(plan) == ["B3", "L-rod"]


def test_two_ins_do_not_make_a_flow():
    base = straight_pipe()
    exits = [(e.port, "in", e.lead, e.face, e.leave, 0.0) for e in base.exits]
    plan = plan_of(base.branches, exits)
    assert without_flow(plan) == [b.id for b in base.branches] and undrained(plan) == []


@pytest.mark.parametrize("seed", range(12))
def test_drained_branches_are_those_on_a_simple_path(seed):
    """On random graphs: networkx lists every simple path between two exits; the branches on them drain, no others."""
    rng = np.random.default_rng(seed)
    n = 8
    place = rng.uniform(5, 35, (n, 3))
    pairs = sorted({tuple(sorted(rng.choice(n, 2, replace=False))) for _ in range(11)})
    items = [branch(f"B{i}", f"N{a}", f"N{b}", [place[a], place[b]], 2.0) for i, (a, b) in enumerate(pairs)]
    used = sorted({int(k) for pair in pairs for k in pair})
    ports = [int(k) for k in rng.choice(used, 3, replace=False)]
    exits = []
    for k in ports:
        items.append(branch(f"L{k}", f"N{k}", f"X{k}", [place[k], place[k] + [50, 0, 0]], 2.0, lead=True))
        exits.append((f"p{k}", "in" if k == ports[0] else "out", f"L{k}", "+x", (1, 0, 0), 0.0))
    plan = plan_of(items, exits)
    graph = nx.Graph([(b.start, b.end, {"id": b.id}) for b in plan.branches])

    def on_paths(pairs_of_exits):
        return {
            graph.edges[edge]["id"]
            for a, b in pairs_of_exits
            for path in nx.all_simple_edge_paths(graph, f"X{a}", f"X{b}")
            for edge in path
        }

    everything = {b.id for b in plan.branches}
    drains = on_paths([(ports[0], ports[1]), (ports[0], ports[2]), (ports[1], ports[2])])
    assert set(undrained(plan)) == everything - drains
    # Flow: from the one in port to either out port.
    assert set(without_flow(plan)) == everything - on_paths([(ports[0], ports[1]), (ports[0], ports[2])])


def test_plate_face():
    blank = box_blank(stock={"-z": 2.0})
    assert plate_face(blank, np.array([0.0, 0, 1])).name == "-z"
    assert plate_face(blank, np.array([0.0, 0, -1])).name == "+z"
    assert plate_face(blank, np.array([1.0, 0, 0])).name == "-x"
    tilted = np.array([0.0, np.sin(0.1), np.cos(0.1)])
    assert plate_face(blank, tilted) is None
    assert plate_face(cylinder_blank(), np.array([1.0, 0, 0])) is None


# Passages


def test_largest_ball_port_to_port():
    """Rungs of 3, 4 and 5 mm between rails of 6 mm: each rung its own ball, the best way the widest rung."""
    rails = [
        ((0, 10, 10), (15, 10, 10), 6),
        ((15, 10, 10), (30, 10, 10), 6),
        ((0, 30, 10), (15, 30, 10), 6),
        ((15, 30, 10), (30, 30, 10), 6),
    ]
    rungs = [((0, 10, 10), (0, 30, 10), 3), ((15, 10, 10), (15, 30, 10), 4), ((30, 10, 10), (30, 30, 10), 5)]
    name = {p: f"N{i}" for i, p in enumerate(sorted({p for a, b, _ in rails + rungs for p in (a, b)}))}
    items = [
        branch(f"B{i}", name[a], name[b], sampled([a, b], 3.0), bore) for i, (a, b, bore) in enumerate(rails + rungs)
    ]
    items.append(branch("L-in", name[0, 10, 10], "Xi", sampled([(0, 10, 10), (-9, 10, 10)], 6.0), 6.0, lead=True))
    items.append(branch("L-out", name[30, 30, 10], "Xo", sampled([(30, 30, 10), (39, 30, 10)], 6.0), 6.0, lead=True))
    lines = make_centrelines(
        plan_of(items, [("in", "in", "L-in", "-x", (-1, 0, 0), 0), ("out", "out", "L-out", "+x", (1, 0, 0), 0)])
    )
    found = measure_passages(lines, lines.bore_mm)
    ball = dict(zip([b.id for b in lines.plan.branches], found.ball_mm, strict=True))
    # Rails near the in port pass what the rungs behind them let through; the last rail pair likewise.
    assert ball == {"B0": 5, "B1": 5, "B2": 3, "B3": 4, "B4": 3, "B5": 4, "B6": 5, "L-in": 5, "L-out": 5}
    assert found.best_mm == 5.0


# Walls by centreline


def test_leads_count_and_junctions_do_not():
    found = find_walls(make_centrelines(ladder()), 3.0, 0.2)
    assert found == []
    near = find_walls(make_centrelines(ladder()), 5.0, 0.2)
    # Rungs 12 mm apart with 4 mm bores leave 8 mm, below twice the limit; all walls are rung to rung.
    assert near and {round(item.wall_mm, 6) for item in near} == {8.0}


def test_side_by_side_inside_a_short_ladder_cell_is_a_rib():
    """Rails 5.5 mm apart with 4 mm bores, rungs 14 mm apart: no wall by the rule, a rib of 1.5 mm all the same."""
    a, b, c, d = (10, 10, 10), (24, 10, 10), (10, 15.5, 10), (24, 15.5, 10)
    items = [
        branch("R1", "A", "B", sampled([a, b], 4.0), 4.0),
        branch("R2", "C", "D", sampled([c, d], 4.0), 4.0),
        branch("S1", "A", "C", sampled([a, c], 4.0), 4.0),
        branch("S2", "B", "D", sampled([b, d], 4.0), 4.0),
    ]
    found = find_walls(make_centrelines(plan_of(items)), 3.0, 0.2)
    assert [(item.branch_ids, item.rib) for item in found if item.wall_mm < 3.0] == [(("R1", "R2"), True)]
    assert found[0].wall_mm == pytest.approx(1.5, abs=1e-6)


def test_way_through_the_channels():
    lines = make_centrelines(tee())
    first = np.array([int(lines.first[0]) + 2, int(lines.first[2])])
    second = np.array([int(lines.first[2]) + 3, int(lines.first[2]) + 5])
    way = measure_ways(lines, first, second)
    step = lines.along_mm[1]
    assert way.length_mm[0] == pytest.approx(15.0 - 2 * step + lines.along_mm[second[0]])
    assert way.leave_first[0] == pytest.approx([1, 0, 0]) and way.leave_second[0] == pytest.approx([0, -1, 0])
    # Along one branch, from its very end: the way stays in the branch.
    assert way.leave_first[1] == pytest.approx([0, 1, 0]) and way.leave_second[1] == pytest.approx([0, -1, 0])


def test_points_belong_to_the_ball_they_lie_on():
    """A thin bore beside a thick one: the thick one's wall is nearer to the thin centreline, and still not its wall."""
    thick = branch("B1", "A", "B", sampled([(0, 0, 0), (20, 0, 0)], 2.0), 12.0)
    thin = branch("B2", "C", "D", sampled([(0, 8, 0), (20, 8, 0)], 2.0), 2.0)
    lines = make_centrelines(plan_of([thick, thin]))
    owner = lines.branch[nearest_samples(lines, np.array([[10.0, 6.0, 0.0], [10.0, 7.0, 0.0], [10.0, 9.0, 0.0]]))]
    assert owner.tolist() == [0, 1, 1]


def test_own_exit_reaches_back_to_where_the_channel_turns():
    """Up the lead and the upright channel above it to the bend; the level run after it must keep its wall."""
    items, exits = run_through(
        "", [(20, 20, 0), (20, 20, 6), (20, 20, 12), (40, 20, 12), (60, 20, 12)], 4.0, ("-z", "+x")
    )
    lines = make_centrelines(plan_of(items, exits))
    mask = own_exit_samples(lines, box_blank().face("-z"))
    assert lines.xyz_mm[mask][:, 2].max() == pytest.approx(12.0) and lines.xyz_mm[mask][:, 0].max() == 20.0
    assert mask.sum() == np.count_nonzero(lines.xyz_mm[:, 0] == 20.0)
    side = own_exit_samples(lines, box_blank().face("+x"))
    assert lines.xyz_mm[side][:, 0].min() == pytest.approx(20.0) and lines.xyz_mm[side][:, 2].min() == 12.0


def test_distance_and_foot_on_a_hole():
    hole = HoleObstacle(Hole("H1", np.zeros(3), np.array([0.0, 0, 1.0]), 10.0, 4.0, 1.0))
    points = np.array([[5.0, 0, 5], [0, 7, 14], [0, 1, 13], [1, 0, 5]])
    assert hole.distance_mm(points) == pytest.approx([3.0, np.hypot(5, 4), 3.0, -1.0])
    foot = hole.nearest_mm(points)
    assert foot[:3] == pytest.approx(np.array([[2.0, 0, 5], [0, 2, 10], [0, 1, 10]]))


# Machine


def box_mesh(x, y, z, turn_deg=0.0) -> Mesh:
    t = np.radians(turn_deg)
    corner = np.array([(i, j, k) for i in (0, x) for j in (0, y) for k in (0, z)], float)
    turn = np.array([[np.cos(t), -np.sin(t), 0], [np.sin(t), np.cos(t), 0], [0, 0, 1]])
    return Mesh(corner @ turn.T, np.array([[0, 1, 2]]))


@pytest.mark.parametrize("turn_deg", [0.0, 17.3, 90.0])
def test_a_long_bar_fits_across_the_diagonal(turn_deg):
    """260 x 10 mm turned by 45 degrees needs (260 + 10) / sqrt(2) = 190.9 mm each way."""
    width, depth, slack = best_turn(box_mesh(260, 10, 5, turn_deg).vertices_mm[:, :2], (250.0, 250.0))
    assert width == pytest.approx(270.0 / np.sqrt(2.0), abs=0.02) and depth == pytest.approx(width, abs=0.05)
    assert slack == pytest.approx(250.0 - 270.0 / np.sqrt(2.0), abs=0.02)


def test_height_is_along_the_build_direction():
    bar = box_mesh(40, 30, 110)
    room = with_machine(100, 100, 100)
    assert check_machine(bar, room, np.array([0.0, 0, 1]))[0].value == pytest.approx(-10.0)
    lying = check_machine(bar, room, np.array([1.0, 0, 0]))[0]
    assert lying.outcome is Outcome.PASS and "x 40.0 mm" in lying.text
    assert lying.value == pytest.approx(100.0 - (110 + 30) / np.sqrt(2.0), abs=0.02)


def test_upright_frame_is_a_rotation():
    for direction in np.random.default_rng(3).normal(size=(10, 3)):
        frame = upright_frame(direction)
        assert frame @ frame.T == pytest.approx(np.eye(3), abs=1e-12) and np.linalg.det(frame) == pytest.approx(1.0)
        assert frame[2] == pytest.approx(direction / np.linalg.norm(direction))


# Openings


def opening(centre, face="-x", size=6.0) -> Opening:
    return Opening(np.array([centre] * 3, float), np.array(centre, float), size, face)


def insert_with(*openings) -> Insert:
    return Insert(Mesh(np.eye(3), np.array([[0, 1, 2]])), np.array([1]), 1.0, 0, openings)


@pytest.mark.parametrize(
    ("openings", "outcome"),
    [
        ([(0, 20, 15), (60, 20, 15)], Outcome.PASS),
        ([(-3, 20.04, 15), (63, 20, 15)], Outcome.PASS),
        ([(0, 20.2, 15), (60, 20, 15)], Outcome.FAIL),
        ([(0, 20, 15)], Outcome.FAIL),
        ([(0, 20, 15), (60, 20, 15), (30, 20, 30)], Outcome.FAIL),
        ([(0, 20, 15), (0, 20, 15)], Outcome.FAIL),
        ([], Outcome.FAIL),
    ],
)
def test_openings_are_matched_by_place(openings, outcome):
    plan = straight_pipe()
    found = insert_with(*(opening(c) for c in openings))
    row = check_openings(found, plan, box_blank(), make_centrelines(plan))[0]
    assert row.outcome is outcome and row.value == len(openings) and row.limit == 2.0


def test_an_opening_matches_one_exit_only():
    exits = straight_pipe().exits
    found, stray = match_openings((opening((0, 20, 15)), opening((0, 20.01, 15))), exits)
    assert found == {"feed": 0} and stray == [1]


def test_the_place_of_an_opening_may_be_off_by_a_share_of_the_resolution():
    """0.4 of h, at least 0.05 mm: an opening 0.09 mm off its axis belongs to the exit at h = 0.25 mm, not at 0.2."""
    lines = make_centrelines(straight_pipe())
    insert = insert_with(opening((0, 20.09, 15)), opening((60, 20, 15)))
    for h_mm, outcome in ((0.25, Outcome.PASS), (0.2, Outcome.FAIL), (0.0, Outcome.FAIL)):
        row = check_openings(insert, straight_pipe(), box_blank(), lines, h_mm)[0]
        assert row.outcome is outcome, row.text


def test_only_part_faces_are_broken_into():
    plan = straight_pipe()
    lines = make_centrelines(plan)
    for face in box_blank().faces:
        rows = check_openings(insert_with(opening((30, 20, 30), face.name)), plan, box_blank(), lines)
        broken = [v for v in rows if v.code == "breaks-into-part"]
        assert len(broken) == (face.role is FaceRole.PART)


# Condition, caps, rows


def test_loops_and_openings_of_circuits():
    assert (
        circuit_loops(ladder(5)) == [(4, 2)] and circuit_loops(ring()) == [(1, 2)] and circuit_loops(tee()) == [(0, 2)]
    )


def test_an_open_mesh_is_told():
    corner = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
    faces = np.array([[0, 2, 1], [0, 1, 3], [1, 2, 3], [0, 3, 2]])
    assert check_closed(Mesh(corner, faces), "thing").outcome is Outcome.PASS
    broken = check_closed(Mesh(corner, faces[:3]), "thing")
    assert broken.outcome is Outcome.FAIL and broken.value == 3.0 and "3 open edges" in broken.text
    turned = check_closed(Mesh(corner, np.concatenate([faces[:3], faces[3:, ::-1]])), "thing")
    assert turned.outcome is Outcome.FAIL


def test_capped_share():
    plan = straight_pipe()
    assert check_capped(plan)[0].outcome is Outcome.PASS
    row = check_capped(dataclasses.replace(plan, caps=(Cap("B1", 5.0, 7.5, "face:+z"),)))[0]
    # B1 is 20 mm long; leads are not layout.
    assert row.outcome is Outcome.WATCH and row.value == pytest.approx(0.25) and row.branch_ids == ("B1",)
    assert "25.0 %" in row.text and "7.5 mm2" in row.text and "face:+z" in row.text


def test_lengths_near_their_limit_are_watched():
    assert judge_length(3.0, 3.0, 0.0) is Outcome.WATCH and judge_length(2.999, 3.0, 0.0) is Outcome.FAIL
    assert judge_length(float("nan"), 3.0, 0.0) is Outcome.FAIL and judge_length(3.1, 3.0, 0.2) is Outcome.FAIL
    assert judge_length(3.6, 3.0, 0.2) is Outcome.PASS
    assert judge_length(6.0, 6.0, 0.0, "most") is Outcome.WATCH and judge_length(6.01, 6.0, 0.0, "most") is Outcome.FAIL
    assert judge_length(float("nan"), 6.0, 0.0, "most") is Outcome.FAIL


def test_long_lists_are_cut():
    assert name_list([f"B{i}" for i in range(11)]) == "B0, B1, B2, B3, B4, B5, B6, B7 and 3 more"


@pytest.mark.parametrize("direction", [(0.0, 0.0, 0.0), (np.nan, 0.0, 1.0)])
def test_a_build_direction_must_point_somewhere(direction):
    with pytest.raises(ValueError, match="expected a direction"):
        CheckSubject(None, None, None, None, None, None, direction)
