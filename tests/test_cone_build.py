"""Cone jobs through every stage: the insert has the handles its circuit asks for, and opens where it should."""

import numpy as np
import pytest

import morph
from morph.core.verdict import Outcome
from tests.surface.test_cone import COSINE, SINE

JOB = """
name = "cone"
[layout]
image = "density.npy"
size_mm = [60.0, 40.0]
[[port]]
name = "feed"
role = "in"
at_mm = [0.0, 10.0]
[[port]]
name = "return"
role = "out"
at_mm = [60.0, 10.0]
[carrier]
kind = "cone"
radius_mm = 38.0
half_angle_deg = 20.0
metal = "toward-axis"
depth_mm = 9.0
map = "flat"
[section]
bore_range_mm = [3.5, 5.0]
[blank]
margin_mm = [14.0, 12.0]
"""


def loop_image():
    """One loop: a straight channel from edge to edge at y = 10 mm and an arch over it up to y = 30 mm; 0.25 mm pixels."""
    x, y = np.meshgrid((np.arange(240) + 0.5) * 0.25, (np.arange(160) + 0.5) * 0.25)

    def box(x_low, x_high, y_low, y_high):
        return np.maximum(np.maximum(x_low - x, x - x_high), np.maximum(y_low - y, y - y_high))

    signed = box(-5, 65, 7.75, 12.25)
    arch = np.maximum(box(12, 48, 10, 32.25), -box(16.5, 43.5, 10, 27.75))
    return np.clip(0.5 - np.minimum(signed, arch) / 0.25, 0.0, 1.0)


@pytest.fixture(scope="module")
def build(tmp_path_factory):
    folder = tmp_path_factory.mktemp("cone")
    np.save(folder / "density.npy", loop_image()[::-1].astype(np.float32))

    def run(*changes):
        text = JOB
        for old, new in changes:
            assert old in text
            text = text.replace(old, new, 1)
        (folder / "job.toml").write_text(text)
        return morph.build(folder / "job.toml")

    return run


JACKET = (
    ("toward-axis", "away-from-axis"),
    ("margin_mm = [14.0, 12.0]", "margin_mm = [14.0, 12.0]\nthickness_mm = 26.0"),
)
CASES = {
    "core, flat": ((), 1),
    "core, polar, narrowing": ((('"flat"', '"polar"'), ("= 20.0", "= -20.0")), 1),
    "jacket, flat": (JACKET, 2),
}


@pytest.mark.parametrize("case", sorted(CASES))
def test_a_cone_goes_all_the_way(build, case):
    changes, genus = CASES[case]
    result = build(*changes)
    summary = result.summary
    assert [v for v in result.verdicts if v.outcome is Outcome.FAIL] == []
    assert summary["layout"]["loops"] == 1 and summary["layout"]["components"] == 1
    assert summary["solid"]["genus"] == 1 and summary["solid"]["watertight"]
    # Genus: the blank's (0, or 1 for a ring) + loops + openings - 1.
    assert summary["insert"]["genus"] == genus + 1 and summary["insert"]["watertight"]
    assert summary["insert"]["openings"] == summary["insert"]["openings_declared"] == 2
    assert {item.face for item in result.records.insert.openings} == {"foot"}
    assert summary["carrier"]["kind"] == "cone"
    assert "Sag of the sheet" in result.files["report.html"].decode()


def test_the_summary_tells_sag_and_stretch(build):
    flat = build().summary["carrier"]
    slant = (38.0 - 9.0 * COSINE) / SINE
    sag = [np.hypot(30.0, slant + y) - (slant + y) for y in (-20.0, 20.0)]
    assert (flat["edge_sag_lower_mm"], flat["edge_sag_upper_mm"]) == pytest.approx(sag, abs=1e-9)
    assert flat["length_error_max"] < 1e-9 and flat["half_angle_deg"] == 20.0
    polar = build(('"flat"', '"polar"')).summary["carrier"]
    # The channels lie between y = 10 and 30 mm of a sheet 40 mm high.
    assert polar["length_error_max"] == pytest.approx(10.0 * SINE / (38.0 - 9.0 * COSINE), rel=0.02)
    assert polar["edge_sag_lower_mm"] == polar["edge_sag_upper_mm"] == 0.0


def test_stock_at_the_foot_makes_a_second_object(build):
    import io

    import trimesh

    plain, stocked = build(), build(("margin_mm = [14.0, 12.0]", "margin_mm = [14.0, 12.0]\nstock_mm = { foot = 0.8 }"))
    scenes = [trimesh.load(io.BytesIO(r.files["insert.3mf"]), file_type="3mf") for r in (plain, stocked)]
    assert sorted(scenes[0].geometry) == ["channels", "insert as printed"]
    assert sorted(scenes[1].geometry) == ["channels", "finished", "insert as printed"]
    finished = scenes[1].geometry["finished"]
    assert finished.is_watertight
    # In the pose to print the plate is z = 0: the finished foot stands 0.8 mm above it.
    assert finished.bounds[0, 2] == pytest.approx(0.8, abs=1e-5)
    wanted = plain.summary["insert"]["volume_mm3"]
    assert stocked.summary["insert"]["finished_volume_mm3"] == pytest.approx(wanted, rel=1e-5)
    assert finished.volume == pytest.approx(wanted, rel=1e-4) and plain.summary["insert"]["finished_volume_mm3"] is None


MARGIN = "margin_mm = [14.0, 12.0]"
FLANGES = {
    "core, foot": (
        (MARGIN, "margin_mm = [20.0, 12.0]\nflange = { radius_mm = 48, height_mm = 12 }"),
        ("[blank]", "[blank]\nstock_mm = { foot = 0.5, rim = 1.0, flange = 0.4 }"),
    ),
    "core, rim": (
        (MARGIN, 'margin_mm = [24.0, 12.0]\nport_faces = ["rim"]\nflange = { radius_mm = 48, height_mm = 18 }'),
        ("[blank]", "[blank]\nstock_mm = { rim = 1.0 }"),
    ),
}


@pytest.mark.parametrize("case", sorted(FLANGES))
def test_a_flanged_core_with_stock_goes_all_the_way(build, case):
    from morph.geometry.mesh import measure_condition

    result = build(*FLANGES[case])
    assert [v for v in result.verdicts if v.outcome is Outcome.FAIL] == []
    insert = result.summary["insert"]
    assert insert["genus"] == 2 and insert["openings"] == 2 and insert["watertight"]
    assert {item.face for item in result.records.insert.openings} == {case.split(", ")[1]}
    finished = result.records.finished
    condition = measure_condition(finished)
    assert condition.closed and condition.genus == 2 and condition.bodies == 1
    radius = np.hypot(finished.vertices_mm[:, 0], finished.vertices_mm[:, 1])
    low = finished.vertices_mm[:, 2] < finished.vertices_mm[:, 2].min() + 1.0
    assert radius[low].max() == pytest.approx(48.0, abs=0.002)
    printed = result.records.insert.mesh.vertices_mm
    assert np.hypot(printed[:, 0], printed[:, 1])[printed[:, 2] < printed[:, 2].min() + 1.0].max() > 48.99
