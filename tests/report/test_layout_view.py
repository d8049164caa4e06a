"""What the page and the summary say of the layout: offers, accepts, wide regions, keep-outs, other levels.

Expected figures follow from drawings made of straight channels with known widths, gaps and densities.
"""

import dataclasses
import json
import re

import numpy as np
import pytest
from lxml import html

from morph.layout.density import Density
from morph.layout.extract import make_graph
from morph.layout.level_report import LevelReport, LevelRow, make_level_report, without_repeats
from morph.layout.wide import settle_wide
from morph.report.areas_view import KEEP_OUT, WIDE
from morph.report.density_view import density_caption, draw_density
from morph.report.layout_rows import layout_rows, offers
from morph.report.layout_summary import layout_block
from morph.report.level_view import all_rows, draw_levels, level_rows, level_words, step_points
from morph.report.page import make_report, sheet_scene
from morph.report.sheet_view import draw_sheet
from morph.report.summary import make_summary, plain_values
from morph.settings.job import AcceptSettings, KeepOutSettings, SeenFrom, WideRule
from tests.layout.drawing import drawn, ports, settings

pytestmark = pytest.mark.quick

SIZE_MM, PITCH_MM, GREY = (120.0, 70.0), 0.5, 0.42
FRAME = [
    ([(-9, 12), (20, 12)], 4.0),
    ([(20, 12), (20, 56)], 4.0),
    ([(20, 56), (100, 56)], 4.0),
    ([(100, 56), (100, 12)], 4.0),
    ([(100, 12), (130, 12)], 4.0),
    ([(20, 12), (100, 12)], 7.5),
    ([(60, 12), (60, 42)], 4.0),
    ([(100, 34), (84, 34)], 3.6),
]
"""A loop of 4 mm channels with a header of 7.5 mm; a spike up the middle and one from the right that end blind."""
GAP = [([(60, 42), (60, 54)], 3.4)]
"""The spike goes on to the loop in grey, 3.4 mm wide."""
BOTH = ports(("feed", "in", 0, 12), ("return", "out", 120, 12))
LEGAL_MM, WALL_MM = 5.3, 3.0
PIN = KeepOutSettings("pin-a", at_mm=(40.0, 32.0), diameter_mm=8.0, clearance_mm=3.0)
FIELD = KeepOutSettings("screws", polygon_mm=((108.0, 30.0), (125.0, 30.0), (125.0, 45.0), (108.0, 45.0)))


@pytest.fixture(scope="module")
def density():
    full, gap = drawn(FRAME, SIZE_MM, PITCH_MM), drawn(GAP, SIZE_MM, PITCH_MM)
    value = np.maximum(full.value, GREY * gap.value)
    return Density(value, SIZE_MM, full.samples, full.seam, "loop.npy", "0" * 16, ".npy array, values of cells")


@pytest.fixture(scope="module")
def levels(density):
    return make_level_report(density, settings(density), BOTH)


def made(density, levels=None, accepts=(), rule=WideRule.CAP):
    graph = make_graph(density, settings(density), BOTH, accepts=accepts, least_bore_mm=2.0)
    graph, wide = settle_wide(graph, rule, LEGAL_MM, WALL_MM)
    return graph, wide, plain_values(layout_block(density, graph, levels, wide))


def test_dead_ends_say_what_lies_ahead(density):
    _, _, block = made(density)
    (spike, side) = sorted(block["dead_end_places"], key=lambda item: item["sheet_mm"][0])
    assert spike["ahead"] == "grey" and spike["suggestion"] == block["suggestions"][0]["id"]
    # a round end of 4 mm reaches 2 mm beyond y = 42; against grey its edge at the level lies up to one value farther
    assert spike["end_mm"] == pytest.approx([60.0, 44.0], abs=PITCH_MM)
    assert side["ahead"] == "solid" and side["suggestion"] is None
    assert side["end_mm"] == pytest.approx([82.2, 34.0], abs=0.3)  # 84 less half of 3.6
    assert block["loose_dead_end_places"] == []


def test_suggestion_has_its_grey_stretch(density):
    _, _, block = made(density)
    (way,) = block["suggestions"]
    # grey from the round end at y = 44 to the wall of the upper channel at 54, whose edges against grey lie up to
    # one value farther each
    assert 10.0 - 2.0 * PITCH_MM <= way["grey_mm"] <= 10.0
    assert way["middle_mm"] == pytest.approx([60.0, 49.0], abs=0.4)
    assert way["width_mm"] == pytest.approx(3.4, abs=0.5) and way["grey"] is True
    assert way["lowest_density_ratio"] == pytest.approx(GREY, abs=0.03)


def test_rows_name_offers_and_their_places(density):
    _, _, block = made(density)
    text = [" / ".join(row) for row in layout_rows(block)]
    assert any(re.search(r"dead end D\d \(N\d+ of B\d+\): grey ahead, G1 leads on to", row) for row in text)
    assert any("solid metal ahead" in row for row in text)
    (way,) = [row for row in text if row.startswith("suggestion G1")]
    x, y = (float(text) for text in re.search(r"/ ([\d.]+), ([\d.]+) mm /", way).groups())
    assert (x, y) == pytest.approx((60.0, 49.0), abs=0.4)
    assert "of it grey" in way and "mm wide" in way and "density down to 0.4" in way
    assert offers(block)[0] == "G1" and re.fullmatch(r"D\d", offers(block)[1])


def test_what_was_accepted_is_said_once(density):
    _, _, before = made(density)
    trim = next(item["id"] for item in before["dead_end_places"] if item["ahead"] == "solid")
    _, _, block = made(density, accepts=(AcceptSettings(bridge="G1"), AcceptSettings(trim=trim)))
    assert {(item["id"], item["what"]) for item in block["accepted"]} == {("G1", "bridge"), (trim, "trim")}
    rows = layout_rows(block)
    assert sum("G1" in what for what, _, _ in rows) == 1 and block["dead_ends"] == 0
    assert not [what for what, _, _ in rows if what.startswith("dropped")]  # not a second time as a dropped piece
    assert [item["reason"] for item in block["dropped"]] == ["dead end trimmed as accepted"]


def test_a_wide_region_is_told_in_every_mode(density):
    for rule, ways in ((WideRule.CAP, 1), (WideRule.SPLIT, 2)):
        graph, wide, block = made(density, rule=rule)
        assert len(block["wide"]) == len(wide) >= 1
        assert any(item["ways"] >= ways for item in block["wide"])
        assert max(item["widest_mm"] for item in block["wide"]) == pytest.approx(7.5, abs=0.3)
        told = [notice for notice in graph.notices if notice.code == "wide-treated"]
        assert len(told) == (0 if rule is WideRule.CAP else len(wide))
        assert [what for what, _, _ in layout_rows(block) if what.startswith("wide region W1: ")]
    (first, *_) = made(density)[2]["wide"]
    assert "lost" in first["said"] and first["lost_mm2"] > 0.0


def test_what_a_split_leaves_capped_is_said(density):
    _, _, block = made(density, rule=WideRule.SPLIT)
    (region,) = [item for item in block["wide"] if item["ways"] > 1]
    for lost_mm2, said in ((0.0, False), (12.34, True)):
        rows = layout_rows(block | {"wide": [region | {"lost_mm2": lost_mm2}]})
        (words,) = [what for what, _, _ in rows if what.startswith("wide region")]
        assert ("is capped, 12.3 mm² are lost" in words) is said and " split into 3 ways" in words


def test_wide_regions_are_outlined_where_they_lie(density):
    graph, wide, _ = made(density)
    svg = draw_density(density, graph, (), wide)
    scale = float(re.search(r'<rect x="[\d.]+" y="[\d.]+" width="([\d.]+)"', svg)[1]) / SIZE_MM[0]
    outlines = re.findall(rf'<path d="M([^"]*)Z" fill="none" stroke="{WIDE}"', svg)
    assert len(outlines) == len(wide)
    ends = []
    for outline in outlines:
        y = [float(pair.split(",")[1]) for pair in outline.split()]
        ends.append((max(y) - min(y)) / scale)
    assert max(ends) == pytest.approx(7.5, abs=0.6)  # as high as the header is wide
    assert ">W1</text>" in svg and "W)" in density_caption(graph, False, True)


def test_keep_outs_are_drawn_with_their_clearance(density):
    graph, _, _ = made(density)
    svg = draw_density(density, graph, (PIN, FIELD))
    dashed = re.findall(rf'<path d="M([^"]*)Z" fill="none" stroke="{KEEP_OUT}"[^>]*stroke-dasharray', svg)
    solid = re.findall(rf'<path d="M([^"]*)Z" fill="#ffffff"[^>]*stroke="{KEEP_OUT}"', svg)
    assert (len(solid), len(dashed)) == (2, 1)  # the polygon asks for no clearance

    def width(outline):
        x = [float(pair.split(",")[0]) for pair in outline.split()]
        return max(x) - min(x)

    assert width(dashed[0]) / width(solid[0]) == pytest.approx((8.0 + 2 * 3.0) / 8.0, rel=1e-3)
    assert ">pin-a</text>" in svg and ">screws</text>" in svg
    assert "keep-out" in density_caption(graph, True, False) and "keep-out" not in density_caption(graph, False, False)


@pytest.mark.parametrize("side", list(SeenFrom))
def test_keep_outs_on_the_sheet_picture_are_seen_from_the_part(make_records, scene, side):
    pin = KeepOutSettings("pin-a", at_mm=(30.0, 30.0), diameter_mm=6.0, clearance_mm=2.0)
    records = make_records(job=dataclasses.replace(scene.job(seen_from=side), keep_outs=(pin,)))
    shown = sheet_scene(records)
    svg = draw_sheet(shown)
    (outline,) = re.findall(rf'<path d="M([^"]*)Z" fill="#ffffff"[^>]*stroke="{KEEP_OUT}"', svg)
    x = np.array([float(pair.split(",")[0]) for pair in outline.split()])
    frame = np.array([float(p.split(",")[0]) for p in re.search(r'<path d="M([^"]*)Z" fill="#f7f8fa"', svg)[1].split()])
    share = (0.5 * (x.min() + x.max()) - frame.min()) / np.ptp(frame)
    assert share == pytest.approx(30 / 90 if side is SeenFrom.PART else 60 / 90, abs=2e-3)
    page = make_report(records, make_summary(records))
    assert ("Dashed around a keep-out: its clearance." in page) and svg in page
    assert "keep-out</text>" in svg and "keep-out</text>" not in draw_sheet(dataclasses.replace(shown, keep_outs=()))


def row(level, components, loops, joined=(("feed", "return"),), dead_ends=None, area=0.2):
    return LevelRow(level, components, loops, dead_ends, joined, area)


APART = (("feed",), ("return",))
BY_HAND = LevelReport(
    (row(0.2, 1, 2, area=0.3), row(0.4, 1, 1), row(0.5, 1, 1, dead_ends=2), row(0.6, 2, 1, APART, area=0.1)),
    0.5,
    0.37,
    0.58,
    row(0.366, 1, 2, area=0.25),
    row(0.584, 2, 1, APART, area=0.11),
    (),
)


def test_steps_stand_where_the_design_changes():
    assert [item.level for item in all_rows(BY_HAND)] == [0.2, 0.366, 0.4, 0.5, 0.584, 0.6]
    points = step_points(BY_HAND, {item.level: float(item.loops) for item in all_rows(BY_HAND)})
    falls = points[:-1][np.diff(points[:, 1]) != 0.0]
    assert falls.tolist() == [[0.37, 2.0]]
    groups = step_points(BY_HAND, {item.level: float(len(item.joined)) for item in all_rows(BY_HAND)})
    assert groups[:-1][np.diff(groups[:, 1]) != 0.0].tolist() == [[0.58, 1.0]]


def test_levels_of_one_design_are_one_row():
    rows = level_rows(BY_HAND)
    assert [item["level"] for item in rows] == ["0.200", "0.400 to 0.500, in use", "0.600"]
    assert rows[1]["dead_ends"] == "2" and rows[0]["dead_ends"] == "not counted"
    assert rows[2]["ports"] == "feed | return" and rows[0]["area"] == "30.0 %"
    assert "0.370 to 0.580" in level_words(BY_HAND) and "Above that, at 0.584" in level_words(BY_HAND)
    assert "ports joined as feed | return" in level_words(BY_HAND)


def test_level_plot_shades_the_interval_and_marks_the_level():
    svg = draw_levels(BY_HAND, "levels")
    boxes = re.findall(r'<path d="M([^"]*)Z" fill="#dfe7f1"', svg)
    assert len(boxes) == 3
    x = [float(pair.split(",")[0]) for pair in boxes[0].split()]
    ticks = {float(words): float(at) for at, words in re.findall(r'<text x="([\d.]+)"[^>]*>(0|1|0\.\d)</text>', svg)}
    wide = ticks[0.8] - ticks[0.2]
    assert (max(x) - min(x)) / wide == pytest.approx((0.58 - 0.37) / 0.6, abs=2e-3)
    assert "in use 0.500" in svg and svg == draw_levels(BY_HAND, "levels")


def test_a_flat_level_report_is_drawn_too():
    alone = LevelReport((row(0.5, 1, 0, ((),)),), 0.5, 0.5, 0.5, None, None, ())
    assert draw_levels(alone, "levels").startswith("<svg") and level_rows(alone)[0]["level"] == "0.500, in use"


def test_levels_of_the_drawing_reach_the_summary(density, levels):
    _, _, block = made(density, levels)
    told = block["level_report"]
    # the way in grey joins at its density and closes one more loop; the picture holds 0.42 there
    assert told["low_ratio"] == pytest.approx(GREY, abs=0.02)
    here = next(item for item in told["rows"] if item["level_ratio"] == told["level_ratio"])
    assert (here["components"], here["loops"]) == (1, 1) and told["below"]["loops"] == 2
    assert here["area_ratio"] == pytest.approx(block["area_ratio"], rel=2e-3)
    json.dumps(block, allow_nan=False)


def test_the_same_change_is_not_told_twice(density, levels):
    graph = make_graph(density, settings(density), BOTH)
    assert [n.code for n in graph.notices if n.code.startswith("level")] == ["level-decides"]
    both = without_repeats(graph.notices, levels)
    assert [n.code for n in both if n.code.startswith("level")] == ["level-near-change"]
    quiet = dataclasses.replace(levels, notices=())
    assert without_repeats(graph.notices, quiet) == graph.notices


def test_page_shows_it_all(make_records, density, levels):
    _, wide, _ = made(density)
    records = make_records(levels=levels, wide=wide)
    page = make_report(records, make_summary(records))
    tree = html.fromstring(page)
    layout = tree.xpath("//section[@id='layout']")[0]
    text = re.sub(r"\s+", " ", layout.text_content())
    assert "The layout at other levels" in text and "wide region W1" in text and "Same design from level" in text
    assert layout.xpath(".//svg/title[@id='levels-title']")
    assert "None" not in text
    bare = html.fromstring(make_report(make_records(), make_summary(make_records())))
    assert "The layout at other levels" not in bare.xpath("//section[@id='layout']")[0].text_content()


def test_origin_is_on_the_page_and_escaped(make_records, records):
    hostile = dataclasses.replace(records.density, origin="<b>.npy</b> array, first row at the top")
    changed = make_records(density=hostile)
    page = make_report(changed, make_summary(changed))
    assert "&lt;b&gt;.npy&lt;/b&gt; array" in page and make_summary(changed)["layout"]["origin"] == hostile.origin


JOB = """
name = "loop"
[layout]
image = "loop.npy"
size_mm = [120.0, 70.0]
rows = "bottom-up"
[[port]]
name = "feed"
role = "in"
at_mm = [0.0, 12.0]
[[port]]
name = "return"
role = "out"
at_mm = [120.0, 12.0]
[carrier]
kind = "cylinder"
radius_mm = 40.0
metal = "toward-axis"
depth_mm = 8.0
[[accept]]
bridge = true
at_mm = [60.0, 47.0]
"""


def test_the_recipe_hands_levels_and_wide_regions_on(tmp_path, density):
    from morph.core.progress import SILENT
    from morph.pipeline import _Clock, plan_channels
    from morph.settings.read_job import read_job

    np.save(tmp_path / "loop.npy", density.value)
    (tmp_path / "job.toml").write_text(JOB, encoding="utf-8")
    planned = plan_channels(read_job(tmp_path / "job.toml"), _Clock(SILENT))
    assert planned.levels is not None and planned.levels.low == pytest.approx(GREY, abs=0.02)
    # largest legal bore at 8 mm of depth: 8 / (1/2 + 1) = 5.33 mm, one bore of metal to the part face
    (region,) = planned.wide
    assert region.widest_mm == pytest.approx(7.5, abs=0.3) and region.bore_mm == pytest.approx(8 / 1.5, abs=0.35)
    codes = [notice.code for notice in planned.graph.notices]
    assert codes.count("level-near-change") == 1 and "level-decides" not in codes
    assert [item.id for item in planned.graph.accepted] == ["G1"]
    assert "first row at the bottom" in planned.density.origin
