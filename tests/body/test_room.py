"""The room for a bore against closed forms and against brute force on the wall itself."""

from dataclasses import replace

import numpy as np
import pytest

from morph.body.face import FaceRole
from morph.body.hole import distance_to_hole_mm
from morph.body.room import make_limits, measure_room, wall_band_mm, way_out, with_neighbours
from morph.core.tolerance import BUILD_BORE_MM, BUILD_MM
from morph.settings.job import CarrierBlankSettings, HoleSettings, Metal, SectionSettings, SectionShape, ServiceSettings
from tests.body.scenes import Scene
from tests.surface.graphs import make_profile, straight_line

pytestmark = pytest.mark.quick

BAND = 0.2 + BUILD_MM  # 0.1 position + 0.2 / 2 bore, and what building may take
HOLES = (HoleSettings((0.0, 10.0, -35.0), (0, 0, 1), 6.0, wall_mm=2.0, depth_mm=25.0),)
SCENES = {
    "core": Scene(straight_line(), holes=HOLES, part_faces=("carrier", "top")),
    "shell": Scene(straight_line(), shape=CarrierBlankSettings((15, 15), 20.0)),
    "jacket": Scene(straight_line(), metal=Metal.AWAY_FROM_AXIS, shape=CarrierBlankSettings((15, 15), 25.0)),
}


def test_the_band_is_position_plus_half_the_bore():
    assert wall_band_mm(make_profile(position_band_mm=0.15, bore_band_mm=0.3)) == pytest.approx(0.3)


def test_every_limit_is_the_worse_of_service_and_process():
    service = ServiceSettings(wall_face_mm=2.0, wall_outer_mm=4.0, wall_between_mm=1.0, smallest_bore_mm=2.5)
    limits = make_limits(SectionSettings(), service, make_profile(wall_mm=3.0, smallest_bore_mm=4.0))
    assert (limits.face_mm, limits.outer_mm, limits.between_mm) == (3.0, 4.0, 3.0)
    # The least bore must still pass after its band of 0.2 mm and what meshing takes.
    assert limits.least_bore_mm == pytest.approx(4.0 + 0.2 + BUILD_BORE_MM)
    assert limits.greatest_bore_mm == 12.0


def test_room_under_a_part_face_by_hand():
    # Depth 8: both rules. 2 (8 - band - 3) = 9.54 and (8 - band) / 1.5 = 5.18: the bores rule.
    it = SCENES["core"]
    room = measure_room(it.blank, it.limits, np.array([[26.0, 0.0, 0.0]]))
    assert room.room_mm[0] == pytest.approx((8.0 - BAND) / 1.5) and room.by_names() == ("face:carrier",)
    plain = Scene(straight_line(), service=ServiceSettings(wall_face_bores=0.0))
    room = measure_room(plain.blank, plain.limits, np.array([[26.0, 0.0, 0.0]]))
    assert room.room_mm[0] == pytest.approx(2.0 * (8.0 - BAND - 3.0))


def test_room_beside_a_hole_and_over_the_foot_by_hand():
    it = SCENES["core"]
    points = np.array([[0.0, 0.0, -20.0], [15.0, 0.0, -30.0]])
    room = measure_room(it.blank, it.limits, points)
    # 10 mm beside the axis of a 6 mm hole that keeps 2 mm; 5 mm above the foot that keeps 3 mm.
    np.testing.assert_allclose(room.room_mm, [2 * (10 - 3 - BAND - 2), 2 * (5 - BAND - 3)], atol=1e-12)
    assert room.by_names() == ("hole:H1", "face:foot")


def largest_by_brute_force(it, point):
    """Grows the bore in steps of 1e-4 mm until one wall is too thin: the walls written out one by one."""
    limits = it.limits
    bores = np.arange(0.0, 30.0, 1e-4)
    fits = np.ones(len(bores), dtype=bool)
    for face in it.blank.faces:
        wall = face.distance_mm(point[None])[0] - bores / 2 - BAND
        if face.role is FaceRole.PART:
            fits &= (wall >= limits.face_mm) & (wall >= limits.face_bores * bores)
        else:
            fits &= wall >= limits.outer_mm
    for hole in it.blank.holes:
        fits &= distance_to_hole_mm(hole, point[None])[0] - bores / 2 - BAND >= max(hole.wall_mm, limits.process_mm)
    return bores[fits].max(initial=-1.0)


@pytest.mark.parametrize("name", sorted(SCENES))
def test_room_agrees_with_brute_force(name):
    # the walls are written out with half a bore: a round section
    it = replace(SCENES[name], section=SectionSettings(SectionShape.ROUND, bore_range_mm=(3.0, 12.0)))
    rng = np.random.default_rng(11)
    points = rng.uniform((-60, -60, -34), (60, 60, 34), (4000, 3))
    points = points[np.min([f.distance_mm(points) for f in it.blank.faces], axis=0) > 3.5][:80]
    room = measure_room(it.blank, it.limits, points).room_mm
    brute = np.array([largest_by_brute_force(it, point) for point in points])
    fits = room > 0
    assert fits.sum() > 40
    np.testing.assert_allclose(room[fits], brute[fits], atol=2e-4)
    assert (brute[~fits] <= 1e-9).all()


def test_the_open_face_does_not_count_on_the_way_out():
    it = Scene(straight_line())
    points = np.array([[10.0, 0.0, -33.0], [10.0, 0.0, -34.0]])
    closed = measure_room(it.blank, it.limits, points)
    assert (closed.room_mm < 0).all()
    opened = measure_room(it.blank, it.limits, points, "foot", np.array([False, True]))
    assert opened.room_mm[0] == closed.room_mm[0] and opened.room_mm[1] > 9.0


def test_the_way_out_ends_where_the_path_stops_nearing_the_face():
    foot = Scene(straight_line()).blank.face("foot")
    # Level for 10 mm, then 20 degrees down (0.34 per mm), then steeply down.
    path = [[0, 0, 0], [10, 0, 0], [20, 0, -3.6], [22, 0, -10], [22, 0, -20], [22, 0, -35]]
    assert way_out(foot, np.array(path, dtype=float)).tolist() == [False, False, True, True, True, True]
    # A path that dips toward the face and comes back up is not on its way out there.
    back = [[0, 0, -20], [0, 0, -33], [5, 0, -33], [5, 0, -20], [9, 0, -20], [9, 0, -35]]
    assert way_out(foot, np.array(back, dtype=float)).tolist() == [False, False, False, False, True, True]


def test_neighbours_lower_the_room_and_are_named():
    it = Scene(straight_line())
    room = measure_room(it.blank, it.limits, np.array([[20.0, 0.0, 0.0], [20.0, 0.0, 1.0]]))
    lowered = with_neighbours(room, np.array([2.0, np.inf]), np.array([1, 0]), ["B1", "B2"])
    assert lowered.by_names() == ("branch:B2", room.by_names()[1])
    assert lowered.room_mm[0] == 2.0 and lowered.room_mm[1] == room.room_mm[1]
