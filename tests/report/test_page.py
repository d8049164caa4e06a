"""The page as a document: offline, escaped, in order, the same bytes, readable without colour or mouse."""

import dataclasses
import re

import numpy as np
import pytest
from lxml import html

from morph.core.verdict import Notice, Outcome, Verdict
from morph.report.job_text import job_text
from morph.report.page import make_report
from morph.report.summary import make_summary

pytestmark = pytest.mark.quick

HOSTILE = "<script>alert(1)</script>\"'&{{ 7*7 }}<img src=x onerror=alert(2)>"


@pytest.fixture(scope="module")
def tree(page):
    return html.fromstring(page)


def without_library(page: str) -> str:
    """The page less the plotting library's own script."""
    scripts = re.findall(r"<script>(.*?)</script>", page, flags=re.S)
    return page.replace(max(scripts, key=len), "")


def test_nothing_is_loaded_from_outside(page, tree):
    own = without_library(page)
    assert not re.findall(r"""(?:src|href|action|data|poster)\s*=\s*["']?\s*(?:https?:)?//""", own)
    assert "@import" not in own and not re.findall(r"url\(\s*['\"]?(?!#)", own)
    assert not tree.xpath("//link | //iframe | //object | //embed | //script[@src] | //meta[@http-equiv]")
    assert all(i.get("href").startswith("data:image/png;base64,") for i in tree.iter("image"))


def test_library_stands_in_the_page_once(page):
    assert page.count("plotly.js v") == 1


def test_first_page_is_section_then_sheet_then_figures_then_not_checked(tree):
    first = tree.xpath("//section[@class='first']")[0]
    heads = [h.text_content().strip() for h in first.iter("h2")]
    assert heads == ["Worst wall, in section", "Sheet, seen from the part side", "Five figures", "? Not checked"]
    assert [f.get("id") for f in first.xpath(".//svg/title")] == ["section-title", "section-map-title", "sheet-title"]
    assert len(first.xpath(".//ul[@class='figures']/li")) == 5
    assert [b.text for b in first.xpath(".//div[@class='unchecked']//b")] == ["flow", "temperature"]


def test_section_says_what_the_cut_itself_measures(tree):
    # the written mesh is facetted, so the cut may read a little less or more than the 5.40 mm of the verdict
    words = re.sub(r"\s+", " ", tree.xpath("//figcaption")[0].text_content())
    assert float(re.search(r"Measured in this cut: ([\d.]+) mm", words)[1]) == pytest.approx(5.40, abs=0.03)


def test_rest_follows_in_the_promised_order(tree):
    ids = [s.get("id") for s in tree.xpath("//main/section")][1:]
    assert ids == ["layout", "channels", "verdicts", "ports", "numbers", "notices", "settings", "cautions"]


def test_figures_carry_limit_place_and_a_sign(tree):
    wall = tree.xpath("//ul[@class='figures']/li")[0].text_content()
    for wanted in ("5.28 mm", "! Watch", "at least 5.20 mm", "B9", "sheet 45.0, 50.0 mm", "part 27.3, 0.0, 20.0 mm"):
        assert wanted in re.sub(r"\s+", " ", wall)


def test_verdicts_are_sorted_and_complete(tree, records):
    rows = tree.xpath("//table[@class='verdicts']/tbody/tr")
    assert [r.get("class") for r in rows] == ["fail", "not-checked", "not-checked", "watch", "pass"]
    text = re.sub(r"\s+", " ", rows[3].text_content())
    for wanted in ("wall-face", "5.40 mm", "≥ 5.20 mm", "0.12 mm", "B9", "Lay the channels deeper", "[service]"):
        assert wanted in text


def test_every_id_is_unique_and_every_reference_resolves(tree):
    ids = [e.get("id") for e in tree.xpath("//*[@id]")]
    assert len(ids) == len(set(ids))
    assert {e.get("aria-labelledby") for e in tree.xpath("//svg")} <= set(ids)
    assert {a.get("href")[1:] for a in tree.xpath("//a[@href]")} <= set(ids)


def test_works_by_keyboard_and_has_names(tree):
    # what reacts to the mouse is a native button, link or summary, so the keyboard reaches it
    assert not tree.xpath("//*[@onclick or @onmousedown or @onkeydown]")
    assert len(tree.xpath("//button[@type='button']")) == 11
    assert [b.get("aria-pressed") for b in tree.xpath("//button[@data-quantity]")] == ["true", "false", "false"]
    assert tree.xpath("//html/@lang") == ["en"] and len(tree.xpath("//h1")) == 1
    assert all(
        t.xpath(".//th[@scope='col']") or t.xpath(".//th[@scope='row']") for t in tree.xpath("//table[tbody]")[:2]
    )


def test_print_rules_are_there(page):
    assert "@page { size: A4" in page and "break-inside: avoid" in page and ".only-screen { display: none; }" in page


def test_same_records_give_the_same_page(page, records, summary):
    assert make_report(records, make_summary(records)) == page


def test_hostile_texts_are_shown_not_run(make_records, scene, records):
    exits = tuple(dataclasses.replace(e, port=HOSTILE) for e in records.plan.exits)
    nodes = tuple(dataclasses.replace(n, port=HOSTILE if n.port else None) for n in records.plan.nodes)
    hostile = make_records(
        job=dataclasses.replace(
            scene.job(HOSTILE), ports=tuple(dataclasses.replace(p, name=HOSTILE) for p in scene.job().ports)
        ),
        plan=dataclasses.replace(records.plan, exits=exits, nodes=nodes),
        verdicts=(
            *records.verdicts,
            Verdict(HOSTILE, Outcome.FAIL, HOSTILE, 1.0, HOSTILE, source=HOSTILE, branch_ids=(HOSTILE,), hint=HOSTILE),
        ),
        notices=(Notice(HOSTILE, HOSTILE),),
    )
    made = make_report(hostile, make_summary(hostile))
    own = without_library(made)
    assert "<script>alert" not in own and "<img" not in own and "49" not in re.findall(r"<h1>(.*?)</h1>", own)[0]
    assert HOSTILE in html.fromstring(made).xpath("//h1")[0].text_content()
    assert len(html.fromstring(made).xpath("//script")) == 4


def test_mirrored_sheet_is_said(make_records, scene):
    hostile = make_records(job=scene.job(seen_from=scene.SeenFrom.METAL))
    text = make_report(hostile, make_summary(hostile))
    assert "The drawing reads from the metal side; here it is mirrored" in text
    assert "As the drawing reads, seen from the metal side" in text


def test_no_wall_no_section_is_said(make_records, records):
    kept = tuple(v for v in records.verdicts if not v.code.startswith("wall-"))
    bare = make_records(verdicts=kept, notices=())
    text = make_report(bare, make_summary(bare))
    assert "No wall was judged" in text and "None: no stage left its straight path." in text


def test_fields_are_needed(make_records, summary):
    with pytest.raises(ValueError, match="fields"):
        make_report(make_records(fields=None), summary)


def test_settings_profile_versions_and_cautions_are_there(tree):
    text = re.sub(r"\s+", " ", tree.text_content())
    for wanted in (
        "[carrier]",
        "depth_mm = 8.0",
        "roof_angle_deg",
        "45 deg",
        "common practice, no source",
        "morph-channels",
        "fingerprint of insert",
    ):
        assert wanted in text
    caution = tree.xpath("//section[@id='cautions']")[0].text_content()
    for wanted in ("pressure", "crack", "powder", "Local codes", "licensed"):
        assert wanted in caution


def test_ports_say_how_deep_to_drill_and_what_metal_is_around(records, tree):
    table = tree.xpath("//section[@id='ports']//table")[0]
    heads = [th.text_content() for th in table.xpath(".//thead//th")]
    rows = [dict(zip(heads, (c.text_content() for c in row), strict=True)) for row in table.xpath(".//tbody/tr")]
    assert [row["Port"] for row in rows] == ["feed", "return"]
    for row, exit_ in zip(rows, records.plan.exits, strict=True):
        assert re.fullmatch(r"\d+\.\d\d mm straight", row["Drill depth"])
        # nothing but the carrier at radius 30 is near
        wall = 30.0 - float(np.hypot(*exit_.xyz_mm[:2])) - 0.5 * exit_.bore_mm
        assert row["Metal around"] == f"{wall:.2f} mm to face:carrier" and row["Bore"] == f"{exit_.bore_mm:.2f} mm"


def test_settings_are_a_job_file(records, tree):
    assert tree.xpath("//section[@id='settings']//pre")[0].text_content() == job_text(records.job)
