"""Full wraps through every stage: a jacket and a conical core, with loops all the way round, wherever the image is cut."""

import math

import numpy as np
import pytest

import morph
from morph.core.verdict import Outcome

JACKET_TURN = 2 * math.pi * 31.0
CONE_TURN = 2 * math.pi * (36.0 - 9.0 * math.cos(math.radians(8.0)))
JOB = """
name = "wrap"
[layout]
image = "density.npy"
size_mm = [{width!r}, 60.0]
seam = "joined"
[[port]]
name = "feed"
role = "in"
at_mm = [{feed!r}, 0.0]
[[port]]
name = "return"
role = "out"
at_mm = [{back!r}, 0.0]
[carrier]
depth_mm = 9.0
{carrier}
[section]
bore_range_mm = [3.5, 4.5]
[blank]
margin_mm = [14.0, 12.0]
{blank}
"""
BODIES = {
    "jacket": (
        JACKET_TURN,
        'kind = "cylinder"\nradius_mm = 22.0\nmetal = "away-from-axis"',
        "thickness_mm = 24.0",
    ),
    "cone": (
        CONE_TURN,
        'kind = "cone"\nradius_mm = 36.0\nhalf_angle_deg = 8.0\nmap = "polar"\nmetal = "toward-axis"',
        "",
    ),
}
COLUMNS = 400


def image(turn):
    """A ring, half way up, with two feeds to the bottom edge and a second ring above it on two rungs; square pixels."""
    pitch = turn / COLUMNS
    rows = round(60.0 / pitch)
    x, y = np.meshgrid((np.arange(COLUMNS) + 0.5) / COLUMNS, (np.arange(rows) + 0.5) * 60.0 / rows)

    def around(at):
        return turn * np.abs((x - at + 0.5) % 1.0 - 0.5)

    parts = [np.abs(y - 22.0), np.abs(y - 42.0)]
    parts += [np.maximum(around(at), y - 22.0) for at in (0.1, 0.6)]
    parts += [np.maximum(around(at), np.abs(y - 32.0) - 10.0) for at in (0.35, 0.85)]
    return np.clip(0.5 - (np.min(parts, axis=0) - 2.0) / pitch, 0.0, 1.0)


@pytest.fixture(scope="module")
def build(tmp_path_factory):
    def run(body, columns):
        turn, carrier, blank = BODIES[body]
        folder = tmp_path_factory.mktemp("wrap")
        np.save(folder / "density.npy", np.roll(image(turn), columns, axis=1)[::-1].astype(np.float32))
        shift = columns / COLUMNS
        places = {"feed": (0.1 + shift) % 1 * turn, "back": (0.6 + shift) % 1 * turn}
        text = JOB.format(width=turn, carrier=carrier, blank=blank, **places)
        (folder / "job.toml").write_text(text)
        return morph.build(folder / "job.toml")

    return run


@pytest.fixture(scope="module", params=sorted(BODIES))
def pair(request, build):
    """The same wrap cut at two places: the second through a rung of the first."""
    return request.param, build(request.param, 0), build(request.param, 60)


def test_a_wrap_goes_all_the_way(pair):
    body, *results = pair
    for result in results:
        summary = result.summary
        assert [v for v in result.verdicts if v.outcome is Outcome.FAIL] == []
        # Two rings and two rungs: 2 + 1 loops; two feeds add none.
        assert summary["layout"]["loops"] == 3 and summary["solid"]["genus"] == 3
        assert summary["solid"]["watertight"] and summary["solid"]["bodies"] == 1
        ring = 1 if body == "jacket" else 0
        assert summary["insert"]["genus"] == ring + 3 + 2 - 1
        assert summary["insert"]["openings"] == 2 and summary["carrier"]["seam"] == "joined"


def test_the_cut_of_the_image_leaves_no_trace(pair):
    _, one, two = pair
    for block, key in (("solid", "volume_mm3"), ("solid", "area_mm2"), ("insert", "volume_mm3")):
        assert two.summary[block][key] == pytest.approx(one.summary[block][key], rel=1e-3)
    lengths = [sorted(b.length_mm for b in r.records.plan.branches) for r in (one, two)]
    np.testing.assert_allclose(lengths[0], lengths[1], atol=0.05)


def test_no_mark_where_the_image_was_cut(pair):
    """Along the half meridian of the cut the ring is as wide as anywhere, and goes straight on."""
    _, one, _ = pair
    width = one.records.graph.size_mm[0]
    for branch in one.records.graph.branches:
        x = branch.sheet_mm[:, 0]
        for edge in (0.0, width):
            near = np.abs(x - edge) < 6.0
            if near.sum() < 5 or np.ptp(branch.sheet_mm[near, 1]) > 3.0:
                continue
            np.testing.assert_allclose(branch.bore_mm[near], 4.0, atol=0.1)
            assert np.ptp(branch.sheet_mm[near, 1]) < 0.05
    page = one.files["report.html"].decode()
    assert "sheet-turn" in page and "density-turn" in page
