"""Room and ways of searched leads: spare against room, the grid against exact values, bends by construction, reasons."""

import numpy as np
import pytest

from morph.body.lead_field import make_lead_field, make_room_grid
from morph.body.lead_lattice import Lattice, least_way_mm
from morph.body.lead_path import least_bend_radius_mm, make_paths, sample_paths
from morph.body.lead_spare import face_spare_mm, hole_spare_mm
from morph.body.room import room_to_face_mm, room_to_hole_mm
from morph.core.errors import MorphError
from morph.core.fingerprint import fingerprint
from morph.settings.job import BoxBlankSettings, HoleSettings, Metal, SectionSettings, SectionShape
from tests.body.lead_scenes import lead_scene
from tests.body.scenes import Scene
from tests.surface.graphs import straight_line


@pytest.mark.parametrize("shape", list(SectionShape))
def test_a_bore_has_spare_exactly_where_its_room_allows_it(shape):
    rng = np.random.default_rng(5)
    hole = HoleSettings((9.0, 4.0, -20.0), (0.3, 0.2, 1.0), 6.0, depth_mm=14.0)
    scene = Scene(straight_line(), holes=(hole,), section=SectionSettings(shape=shape, bore_range_mm=(3.0, 12.0)))
    points = rng.uniform((-25, -25, -33), (25, 25, 33), (4000, 3))
    bore = rng.uniform(2.0, 9.0, len(points))
    for face in scene.blank.faces:
        spare = face_spare_mm(face, points, bore, scene.limits)
        room = room_to_face_mm(face, points, scene.limits)
        clear = np.abs(room - bore) > 1e-6
        np.testing.assert_array_equal((spare >= 0.0)[clear], (room >= bore)[clear])
    spare = hole_spare_mm(scene.blank.holes[0], points, bore, scene.limits)
    room = room_to_hole_mm(scene.blank.holes[0], points, scene.limits)
    clear = np.abs(room - bore) > 5e-3
    np.testing.assert_array_equal((spare >= 0.0)[clear], (room >= bore)[clear])


class Alone:
    """A field without channels: the surroundings of a blank whose port is node 0 of an empty network."""

    def __init__(self, scene):
        from morph.body.lead_check import Surroundings
        from morph.body.neighbour import Strand, make_network

        far = np.array([[0.0, 0.0, 9e3], [0.0, 0.0, 9.1e3]])
        strand = Strand("B1", 0, 1, far, np.array([0.0, 100.0]), np.full(2, 3.0))
        self.around = Surroundings(scene.blank, scene.limits, make_network([strand], 2), None, 0)


def box_scene(holes=()):
    shape = BoxBlankSettings((-60.0, -60.0, -60.0), (60.0, 60.0, 60.0))
    return Scene(straight_line(), radius_mm=20.0, metal=Metal.AWAY_FROM_AXIS, shape=shape, holes=holes)


def grid_of(scene, low=(-55, -55, -60), high=(55, 55, 55)):
    field = make_lead_field(Alone(scene).around, 3.0)
    return make_room_grid(field, np.array([low, high], dtype=float))


def test_the_grid_reads_as_the_exact_spare_between_its_nodes():
    grid = grid_of(box_scene((HoleSettings((40.0, 0.0, -60.0), (0, 0, 1), 8.0),)))
    points = np.random.default_rng(3).uniform(-50, 50, (3000, 3))
    exact = grid.field.rows(points)[0].min(axis=0)
    read = grid.look_up(grid.whole(), points)
    near = np.abs(exact) < 10.0
    assert np.abs(read - exact)[near].max() < 0.9 * grid.step_mm
    assert np.median(np.abs(read - exact)[near]) < 0.05
    assert (grid.look_up(grid.whole(), np.array([[0.0, 0.0, 500.0]])) < -100.0).all()


def test_the_least_way_over_nodes_is_the_way_round_a_wall():
    """A wall of pins between two places: the way goes round its end, at most 8.3 % longer than taut (26 neighbours)."""
    grid = grid_of(box_scene())
    out = np.full(grid.base.shape, np.inf)
    goal = np.array([45.0, 40.0, 0.0])
    out[tuple(grid.cell(goal[None])[0])] = 1e-6
    way = least_way_mm(grid, out)
    begin = np.array([-45.0, 40.0, 0.0])
    taut = np.linalg.norm(begin - goal)
    found = way[tuple(grid.cell(begin[None])[0])]
    assert taut - 2 * grid.step_mm <= found <= 1.09 * taut + 2 * grid.step_mm
    core = way[tuple(grid.cell(np.array([[0.0, 0.0, 0.0]]))[0])]
    assert np.isinf(core), "inside the cavity there is no metal"


def test_ways_of_the_lattice_bend_at_their_radius_and_keep_clear():
    grid = grid_of(box_scene((HoleSettings((35.0, 0.0, -60.0), (0, 0, 1), 8.0),)))
    out = np.full(grid.base.shape, np.inf)
    out[tuple(grid.cell(np.array([[-45.0, -40.0, 10.0]]))[0])] = 1e-6
    start, heading = np.array([45.0, 30.0, 0.0]), np.array([0.0, -1.0, 0.0])
    lattice = Lattice(grid, least_way_mm(grid, out), start, heading[None], 5.0, 0.0, 3000)
    for _ in lattice.batches():
        pass
    assert len(lattice.states.way_mm) > 1000
    for state in range(50, len(lattice.states.way_mm), 97):
        vertices = np.concatenate([start[None], lattice.states.corners(state), lattice.states.xyz_mm[state][None]])
        if len(vertices) < 3:
            continue
        paths = make_paths(vertices[None], np.array([5.0]))
        assert paths.valid.all()
        assert paths.lengths()[0] == pytest.approx(lattice.states.way_mm[state], abs=1e-6)
        points, _ = sample_paths(paths, 400)
        assert least_bend_radius_mm(points)[0] > 5.0 - 1e-3
        assert grid.field.rows(points[0])[0].min() > -0.3
        ahead = points[0, -1] - points[0, -2]
        assert ahead @ lattice.states.heading[state] / np.linalg.norm(ahead) > 0.999


def refused(scene):
    with pytest.raises(MorphError) as caught:
        scene.plan()
    return caught.value


def test_a_blocked_exit_names_what_blocks_it_and_the_nearest_exit_that_works():
    """A fence of pins with gaps of 2 mm from side to side; the exit asked for lies behind it."""
    fence = tuple(HoleSettings((4.0, -40.0, z), (0, 1, 0), 4.0) for z in np.arange(-32.0, 34.0, 6.0))
    error = refused(Scene(straight_line(), holes=fence, exits={"in": {"exit_mm": (-12.0, 0.0, -35.0)}}))
    assert error.code == "lead-blocked" and "hole:H" in error.expected and "mm too little" in error.found
    assert "nearest place found that works" in error.do and "'foot'" in error.do
    place = np.array([float(v) for v in error.do.split("(")[1].split(")")[0].split(",")])
    again = Scene(straight_line(), holes=fence, exits={"in": {"exit_mm": tuple(np.round(place, 2))}})
    assert again.plan().exits[0].face == "foot"


def test_a_foot_full_of_pins_says_that_no_place_on_it_works():
    pins = tuple(
        HoleSettings((26.0 * np.cos(a), 26.0 * np.sin(a), -35.0), (0, 0, 1), 9.0, depth_mm=12.0)
        for a in np.linspace(0, 2 * np.pi, 12, endpoint=False)
    )
    pins += (HoleSettings((0.0, 0.0, -35.0), (0, 0, 1), 30.0, depth_mm=12.0),)
    error = refused(Scene(straight_line(), holes=pins))
    assert error.code == "lead-blocked" and error.do.startswith("No place on 'foot' works")


def test_searched_leads_are_the_same_every_time():
    scene, _ = lead_scene(16)
    assert fingerprint(scene.plan()) == fingerprint(scene.plan())
