"""Bores lowered to their room: the caps, the taper, thinning of near branches, merges and refusals."""

import dataclasses
import itertools

import numpy as np
import pytest

from morph.body.cap import TAPER, lower_to_taper
from morph.core.errors import MorphError
from morph.core.tolerance import BUILD_MM
from morph.settings.job import HoleSettings, SectionSettings, SectionShape, ServiceSettings
from tests.body.scenes import Scene
from tests.surface.graphs import ladder, make_graph, straight_line

pytestmark = pytest.mark.quick

BAND = 0.2 + BUILD_MM
ROUND = SectionSettings(SectionShape.ROUND, bore_range_mm=(3.0, 12.0))  # walls worked out with half a bore
SIZE = (60.0, 40.0)


def channels(plan):
    return [branch for branch in plan.branches if branch.kind == "channel"]


@pytest.mark.parametrize("seed", range(20))
def test_the_taper_is_the_largest_function_below(seed):
    """Lipschitz envelope by definition: min over j of b_j + taper |s_i - s_j|."""
    rng = np.random.default_rng(seed)
    arc = np.concatenate([[0.0], np.cumsum(rng.uniform(0.1, 1.0, 60))])
    bore = rng.uniform(3.0, 9.0, 61)
    envelope = (bore[None, :] + TAPER * np.abs(arc[:, None] - arc[None, :])).min(axis=1)
    np.testing.assert_allclose(lower_to_taper(bore, arc), envelope, atol=1e-12)


def test_a_wide_channel_is_capped_by_the_part_face_with_its_figures():
    # Depth 8, wall one bore: (8 - band) / 1.5, wanted 8 mm over 40 mm.
    plan = Scene(straight_line(bore=8.0)).plan()
    (branch,) = channels(plan)
    room = (8.0 - BAND) / 1.5
    np.testing.assert_allclose(branch.bore_mm, room)
    np.testing.assert_allclose(branch.wanted_mm, 8.0)
    assert branch.capped.all()
    (cap,) = plan.caps
    assert (cap.branch, cap.by) == ("B1", "face:carrier")
    assert cap.length_mm == pytest.approx(40.0) and cap.area_mm2 == pytest.approx(40.0 * (8.0 - room))


def test_a_channel_that_fits_is_not_touched():
    plan = Scene(straight_line(bore=4.5)).plan()
    assert plan.caps == () and plan.notices == () and plan.merges == ()
    np.testing.assert_allclose(channels(plan)[0].bore_mm, 4.5)


def test_scale_and_range_are_applied_and_a_clamp_is_named():
    section = SectionSettings(bore_scale=1.5, bore_range_mm=(3.5, 4.0))
    plan = Scene(
        make_graph(SIZE, {"N1": (30, 0, "in"), "N2": (30, 40, "out")}, [("N1", "N2", np.array([2.0, 3.0]))]),
        section=section,
    ).plan()
    (branch,) = channels(plan)
    # 1.5 times 2 .. 3 mm is 3 .. 4.5 mm: a third of the length below 3.5, a third above 4.
    np.testing.assert_allclose(branch.wanted_mm[[0, -1]], [3.5, 4.0])
    raised, lowered = plan.notices
    assert raised.code == lowered.code == "bore-clamped"
    assert raised.branch_ids == lowered.branch_ids == ("B1",)
    assert "raised" in raised.text and "3.500 mm" in raised.text and "3.000 mm in the layout" in raised.text
    assert "lowered" in lowered.text and "4.000 mm" in lowered.text and "4.500 mm in the layout" in lowered.text
    assert "over 13." in raised.text


def test_a_hole_caps_the_channel_beside_it_smoothly():
    hole = HoleSettings((15.0, 0.0, 0.0), (0, 0, 1), 6.0, depth_mm=0.5)
    plan = Scene(straight_line(bore=5.0), holes=(hole,)).plan()
    (branch,) = channels(plan)
    # 11 mm beside the axis: 2 (11 - 3 - band - 3) is more than 5; at 9 mm it is not.
    assert not branch.capped.any()
    nearer = dataclasses.replace(hole, at_mm=(17.5, 0.0, 0.0))
    (branch,) = channels(Scene(straight_line(bore=5.0), holes=(nearer,)).plan())
    narrowest = 2 * (8.5 - 3.0 - BAND - 3.0)
    assert branch.bore_mm.min() == pytest.approx(narrowest, abs=0.02)
    assert branch.capped.any() and not branch.capped.all()
    step = np.abs(np.diff(branch.bore_mm)) / np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1)
    assert step.max() <= TAPER + 1e-9
    assert branch.room_by[int(branch.bore_mm.argmin())] == "hole:H1"


def two_lines(gap, bore=5.0, other=None):
    places = {
        "N1": (30 - gap / 2, 0, "a"),
        "N2": (30 - gap / 2, 40, "b"),
        "N3": (30 + gap / 2, 0, "c"),
        "N4": (30 + gap / 2, 40, "d"),
    }
    return make_graph(SIZE, places, [("N1", "N2", bore), ("N3", "N4", other or bore)])


def chord(gap, radius=26.0):
    """Straight distance between two axis-parallel lines `gap` apart along the circle of the centrelines."""
    return 2 * radius * np.sin(gap / (2 * radius))


def test_near_branches_share_what_the_wall_lacks():
    """Equal bores give way equally until the wall holds; the gap is a chord of the circle at depth."""
    branches = channels(Scene(two_lines(7.5)).plan())
    expected = chord(7.5) - 3.0 - BAND
    for branch in branches:
        middle = (branch.sheet_mm[:, 1] > 10) & (branch.sheet_mm[:, 1] < 30)
        np.testing.assert_allclose(branch.bore_mm[middle], expected, atol=1e-6)
        assert {branch.room_by[k] for k in np.flatnonzero(middle)} == {f"branch:{'B2' if branch.id == 'B1' else 'B1'}"}


def test_unequal_branches_give_in_proportion_to_what_they_can_spare():
    one, two = channels(Scene(two_lines(7.4, 5.0, 4.0)).plan())
    k = int(np.abs(one.sheet_mm[:, 1] - 20).argmin())
    spare = one.bore_mm[k] - 3.0, two.bore_mm[int(np.abs(two.sheet_mm[:, 1] - 20).argmin())] - 3.0
    assert spare[0] / spare[1] == pytest.approx(2.0, rel=1e-3)
    wall = chord(7.4) - 3.0 - sum(spare) / 2
    assert wall == pytest.approx(3.0 + BAND, abs=1e-6)


def test_branches_that_cannot_be_kept_apart_are_named():
    plan = Scene(two_lines(5.0), port_faces=("foot", "top"), exits=None)
    with pytest.raises(MorphError) as caught:
        # Their ports are too near each other as well, so no lead keeps its wall either.
        plan.plan()
    assert caught.value.code == "lead-blocked"
    rows = ladder(rungs=3, size=(70.0, 30.0), gap=5.2)
    found = Scene(rows, service=ServiceSettings(), section=ROUND).plan().merges
    assert found and found[0].branch_ids[0] < found[0].branch_ids[1]
    # The rungs are 5.2 mm apart along the axis: 5.2 - 3 of metal is left at the least bore.
    assert found[0].wall_mm == pytest.approx(5.2 - 3.0, abs=1e-6)


def test_no_bore_is_lowered_below_the_least():
    plan = Scene(ladder(rungs=3, size=(70.0, 30.0), gap=5.2)).plan()
    assert min(branch.bore_mm.min() for branch in plan.branches) >= 3.0 - 1e-12


def test_thinning_leaves_the_wall_or_names_the_pair():
    for gap in (6.0, 6.6, 7.2, 8.0, 9.0):
        plan = Scene(ladder(rungs=3, size=(70.0, 40.0), gap=gap), section=ROUND).plan()
        rungs = [b for b in channels(plan) if np.ptp(b.sheet_mm[:, 1]) < 1e-6 and np.ptp(b.sheet_mm[:, 0]) > 30]
        for one, two in itertools.pairwise(rungs):
            middle = lambda b: b.bore_mm[int(np.abs(b.sheet_mm[:, 0] - 35).argmin())]  # noqa: E731
            wall = gap - (middle(one) + middle(two)) / 2
            named = any({one.id, two.id} == set(merge.branch_ids) for merge in plan.merges)
            assert wall >= 3.0 + BAND - 1e-6 or named
        assert bool(plan.merges) == (gap - 3.0 < 3.0 + BAND)


def test_a_small_loop_keeps_its_island():
    """Two branches between the same nodes, 6.4 mm apart at most: their island keeps the wall at its widest place."""
    places = {"N1": (30, 0, "in"), "A": (30, 14), "Z": (30, 24), "N2": (30, 40, "out")}
    arms = [[(30 + s * 2.2, 16), (30 + s * 3.2, 19), (30 + s * 2.2, 22)] for s in (-1, 1)]
    links = [("N1", "A", 4.0), ("A", "Z", 5.5, arms[0]), ("A", "Z", 5.5, arms[1]), ("Z", "N2", 4.0)]
    plan = Scene(make_graph(SIZE, places, links), service=ServiceSettings(wall_face_bores=0.0)).plan()
    left, right = plan.branches[1:3]
    k, m = (int(np.abs(arm.sheet_mm[:, 1] - 19).argmin()) for arm in (left, right))
    width = np.linalg.norm(left.xyz_mm[k] - right.xyz_mm[m]) - left.bore_mm[k] / 2 - right.bore_mm[m] / 2
    # The straight distance between the arms; around the carrier it is 0.04 mm more.
    assert width == pytest.approx(3.0 + BAND, abs=0.05)
    assert left.capped.any() and left.bore_mm.max() < 5.5


def refused(**changed):
    with pytest.raises(MorphError) as caught:
        Scene(straight_line(bore=4.0), **changed).plan()
    assert caught.value.code == "no-room-for-smallest-bore"
    return caught.value


def test_a_part_face_without_room_for_the_least_bore_is_refused():
    # Depth 4: 4 - 1.5 - band is below 3 mm.
    error = refused(depth_mm=4.0)
    assert "face 'carrier'" in error.expected and "3.000 mm" in error.expected
    assert f"{4.0 - 1.5 - BAND:.3f} mm" in error.found and "B1" in error.where
    # It fits from (0.5 + 1) 3 + band = 4.5 + band on.
    assert Scene(straight_line(bore=4.0), depth_mm=4.5 + BAND + 1e-6).plan().branches[0].bore_mm.min() == pytest.approx(
        3.0
    )
    refused(depth_mm=4.5 + BAND - 1e-3)


def test_an_outer_face_too_near_is_named_and_one_that_opens_refused():
    from morph.settings.job import CarrierBlankSettings

    near = Scene(straight_line(bore=4.0), shape=CarrierBlankSettings((15.0, 3.0)), port_faces=("foot", "top"))
    notices = [notice for notice in near.plan().notices if notice.code == "wall-short"]
    assert len(notices) == 1 and "face:top" in notices[0].text and "B1" in notices[0].branch_ids
    refused(shape=CarrierBlankSettings((15.0, 1.0)))
