"""Where leads may come out: sites keep their walls, given exits are checked against the nearest port-face place."""

import numpy as np
import pytest

from morph.body.exit import list_sites, nearest_on_port_face, port_faces
from morph.core.errors import MorphError
from morph.settings.job import BoxBlankSettings, CarrierBlankSettings, HoleSettings, Metal
from tests.body.scenes import Scene
from tests.surface.graphs import cross, straight_line

pytestmark = pytest.mark.quick

JACKET = {"metal": Metal.AWAY_FROM_AXIS, "radius_mm": 30.0}
SCENES = {
    "foot": Scene(cross()),
    "shell": Scene(cross(), shape=CarrierBlankSettings((15.0, 15.0), 16.0), port_faces=("foot", "top")),
    "outer": Scene(cross(), shape=CarrierBlankSettings((15.0, 15.0), 25.0), port_faces=("outer",), **JACKET),
    "box": Scene(
        cross(), shape=BoxBlankSettings((-60, -55, -52), (60, 55, 52)), port_faces=("-x", "+y", "foot"), **JACKET
    ),
    "hole": Scene(cross(), holes=(HoleSettings((0.0, 0.0, -51.0), (0, 0, 1), 12.0),)),
}
PORT = np.array([20.0, 14.0, -30.0])


@pytest.mark.parametrize("name", sorted(SCENES))
def test_sites_lie_on_their_face_inside_the_body_with_their_walls(name):
    it = SCENES[name]
    for face in port_faces(it.blank):
        sites = list_sites(it.blank, face, PORT, 5.0, None, it.limits)
        assert len(sites.xyz_mm) > 10
        np.testing.assert_allclose(face.distance_mm(sites.xyz_mm), 0.0, atol=1e-9)
        np.testing.assert_allclose(sites.leave, face.outward(sites.xyz_mm), atol=1e-12)
        for other in it.blank.faces:
            if other.name != face.name:
                needed = 5.0 if other.role == "part" else 3.0
                assert other.distance_mm(sites.xyz_mm).min() - 2.5 >= needed
        for hole in it.blank.holes:
            assert np.hypot(*sites.xyz_mm[:, :2].T).min() - hole.diameter_mm / 2 - 2.5 >= 3.0


def test_the_straight_way_down_is_among_the_sites():
    it = SCENES["foot"]
    sites = list_sites(it.blank, it.blank.face("foot"), PORT, 5.0, None, it.limits)
    assert np.linalg.norm(sites.xyz_mm[:, :2] - PORT[:2], axis=1).min() < 1e-9


def test_a_direction_too_flat_to_a_face_has_no_sites_there():
    it = SCENES["foot"]
    flat = np.array([0.9, 0.0, -0.4]) / np.linalg.norm([0.9, 0.0, -0.4])
    assert len(list_sites(it.blank, it.blank.face("foot"), PORT, 5.0, flat, it.limits).xyz_mm) == 0


@pytest.mark.parametrize(
    ("point", "nearest", "name"),
    [
        ((3.0, 4.0, -60.0), (3.0, 4.0, -51.0), "foot"),
        ((60.0, 80.0, -60.0), (34.0 * 0.6, 34.0 * 0.8, -51.0), "foot"),
        ((3.0, 4.0, 0.0), (3.0, 4.0, -51.0), "foot"),
    ],
)
def test_the_nearest_place_on_a_round_foot(point, nearest, name):
    found, face = nearest_on_port_face(SCENES["foot"].blank, np.array(point))
    np.testing.assert_allclose(found, nearest, atol=1e-9)
    assert face == name


def refused(code, exits, **more):
    with pytest.raises(MorphError) as caught:
        Scene(straight_line(), exits={"in": exits}, **more).plan()
    assert caught.value.code == code
    assert "'in'" in caught.value.where
    return caught.value


def test_an_exit_off_every_port_face_is_told_the_nearest_place():
    error = refused("exit-off-port-face", {"exit_mm": (10.0, 0.0, -34.0)})
    assert "(10.000, 0.000, -35.000) mm on 'foot'" in error.do and "1.000 mm off" in error.found
    refused("exit-off-port-face", {"exit_mm": (10.0, 0.0, 35.0)})
    refused("exit-off-port-face", {"exit_mm": (34.0, 0.0, 0.0)})
    refused("exit-off-port-face", {"exit_mm": (36.0, 0.0, -35.0)})


def test_an_exit_within_the_slack_is_moved_onto_its_face():
    plan = Scene(straight_line(), exits={"in": {"exit_mm": (10.0, 0.0, -34.96)}}).plan()
    np.testing.assert_allclose(plan.exits[0].xyz_mm, [10.0, 0.0, -35.0], atol=1e-9)


def test_an_exit_at_the_edge_of_its_face_is_refused():
    assert "face:carrier" in refused("exit-without-wall", {"exit_mm": (31.0, 0.0, -35.0)}).found


def test_leave_must_point_out_of_the_face():
    refused("leave-into-metal", {"exit_mm": (10.0, 0.0, -35.0), "leave": (0.0, 0.0, 1.0)})
    refused("leave-into-metal", {"exit_mm": (10.0, 0.0, -35.0), "leave": (1.0, 0.0, -0.5)})
    refused("leave-without-direction", {"leave": (0.0, 0.0, 0.0)})
    refused("leave-without-direction", {"leave": (0.0, float("nan"), 1.0)})


def test_two_exits_too_near_are_refused_before_any_search():
    with pytest.raises(MorphError) as caught:
        Scene(
            straight_line(), exits={"in": {"exit_mm": (10.0, 0.0, -35.0)}, "out": {"exit_mm": (10.0, 5.0, -35.0)}}
        ).plan()
    assert caught.value.code == "exits-too-near" and "5.000 mm" in caught.value.found


def test_sites_of_a_large_blank_stay_few():
    """The grid of sites does not grow with the body."""
    it = Scene(straight_line(), radius_mm=1450.0)
    sites = list_sites(it.blank, it.blank.face("foot"), np.array([1442.0, 0.0, -20.0]), 5.0, None, it.limits)
    assert 10 < len(sites.xyz_mm) < 1000
