"""What the plan accepts the check accepts: forks, loops and hairpins swept, judged by one rule from both sides."""

import numpy as np
import pytest

from morph.body.room import wall_band_mm
from morph.check.between import find_walls
from morph.check.centreline import make_centrelines, network_of
from morph.check.island import find_islands
from morph.core.errors import MorphError
from morph.settings.job import SectionSettings, SectionShape, ServiceSettings
from tests.body.scenes import Scene
from tests.surface.graphs import make_graph, make_profile

SIZE = (70.0, 60.0)
LIMIT = 3.0
BAND = wall_band_mm(make_profile())
BAND_LEFT = LIMIT + BAND - 1e-6


def plan_of(places, links, least=3.0):
    # round: the walls worked out here are centre distances less half the bores
    section = SectionSettings(SectionShape.ROUND, bore_range_mm=(least, 12.0))
    service = ServiceSettings(wall_face_bores=0.0, wall_between_mm=LIMIT)
    graph = make_graph(SIZE, places, links)
    return Scene(
        graph, radius_mm=60.0, depth_mm=10.0, service=service, section=section, port_faces=("foot", "top")
    ).plan()


def thinnest(plan):
    """The thinnest wall of the channels' own pairs, rib and island by the check, inf where there is none."""
    lines = make_centrelines(plan)
    found = find_walls(lines, LIMIT, BAND)
    walls = [item.wall_mm for item in found if not item.rib]
    ribs = [item.wall_mm for item in found if item.rib]
    islands = [item.width_mm for item in find_islands(network_of(lines), lines, LIMIT, BAND)]
    return min(walls, default=np.inf), min(ribs, default=np.inf), min(islands, default=np.inf)


def assert_agree(plan):
    wall, rib, island = thinnest(plan)
    process = make_profile().wall_mm.value + BAND - 1e-6
    thin = wall < BAND_LEFT or island < BAND_LEFT or rib < process
    # The check refines between samples, so it may read up to what building may take less than the plan.
    assert bool(plan.merges) or not thin, (wall, rib, island, plan.merges)
    if not thin:
        assert not plan.merges


@pytest.mark.parametrize("angle_deg", [8, 12, 16, 20, 24, 28, 32, 36, 40])
@pytest.mark.parametrize("bores", [(3.0, 3.0), (4.5, 4.5), (3.2, 5.5)])
def test_forks(angle_deg, bores):
    half = 50.0 * np.tan(np.radians(angle_deg / 2.0))
    places = {"N1": (4, 30, "in"), "A": (16, 30), "E1": (66, 30 - half, "low"), "E2": (66, 30 + half, "high")}
    try:
        plan = plan_of(places, [("N1", "A", 4.0), ("A", "E1", bores[0]), ("A", "E2", bores[1])])
    except MorphError as error:
        # Ends too near each other for two leads are refused before any wall is judged.
        assert error.code == "lead-blocked" and angle_deg <= 12
        return
    assert_agree(plan)


def lens(half, length=16.0, bore=4.0):
    middle = SIZE[1] / 2
    t = np.linspace(0.0, np.pi, 9)[1:-1]
    arms = [[(27 + length * s / np.pi, middle + sign * half * np.sin(s)) for s in t] for sign in (1, -1)]
    places = {"N1": (4, middle, "in"), "A": (27, middle), "Z": (27 + length, middle), "N2": (66, middle, "out")}
    links = [("N1", "A", bore), ("A", "Z", bore, arms[0]), ("A", "Z", bore, arms[1]), ("Z", "N2", bore)]
    return places, links


@pytest.mark.parametrize("length", [10.0, 16.0, 24.0])
def test_lenses_of_all_widths_are_judged_once_and_wider_is_never_worse(length):
    fails = []
    for half in np.arange(1.7, 6.0, 0.3):
        plan = plan_of(*lens(half, length))
        assert_agree(plan)
        fails.append(bool(plan.merges))
    assert fails[0] and not fails[-1] and sorted(fails, reverse=True) == fails


@pytest.mark.parametrize("gap", [3.4, 4.0, 5.0, 6.0, 6.6, 7.5, 9.0])
def test_hairpins(gap):
    """Two legs 20 mm long: they run side by side, so they need 3 mm of bore and the wall with its band."""
    low, high = 30 - gap / 2, 30 + gap / 2
    turn = [(45 + gap / 2 * np.cos(a), 30 + gap / 2 * np.sin(a)) for a in np.linspace(-np.pi / 2, np.pi / 2, 7)]
    legs = [(x, low) for x in (30, 35, 40)] + turn + [(x, high) for x in (40, 35, 30)]
    places = {"N1": (10, 10, "in"), "A": (25, low), "Z": (25, high), "N2": (10, 50, "out")}
    plan = plan_of(places, [("N1", "A", 3.0), ("A", "Z", 3.0, legs), ("Z", "N2", 3.0)])
    assert_agree(plan)
    assert bool(plan.merges) == (gap - 3.0 < LIMIT + BAND)
    if plan.merges:
        assert thinnest(plan)[0] == pytest.approx(gap - 3.0, abs=0.1)
