"""The report in a real browser, from disk: no console error, no outside request, the 3D picture and its buttons.

Chromium is driven by its own switches alone. Its network log names every address it asked for, and its error
output holds the console. What a person would press is pressed by a script appended to a copy of the page.
"""

import importlib.util
import json
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
pytestmark = [pytest.mark.browser, pytest.mark.skipif(CHROMIUM is None, reason="needs Debian's chromium")]

SPEED_NOTES = ("GL Driver Message", "Canvas2D: Multiple readback")
"""What the browser says about its own speed when it draws without a graphics card; not errors of the page."""

PRESS = """
<script>
(async function () {
  var wait = function (ms) { return new Promise(function (done) { setTimeout(done, ms); }); };
  var root = document.documentElement, place = document.getElementById("channels-3d"), told = {};
  for (var i = 0; i < 100 && root.dataset.state === "loading"; i++) { await wait(50); }
  told.state = root.dataset.state;
  for (var button of document.querySelectorAll("button[data-quantity]")) {
    button.focus();
    told.focused = document.activeElement === button;
    button.click();
    await wait(300);
    var trace = place.data[0];
    told[root.dataset.shown] = {
      low: trace.cmin, high: trace.cmax, first: trace.intensity[0],
      pressed: document.querySelectorAll("[aria-pressed=true]").length
    };
  }
  document.querySelector("[data-view=top]").click();
  await wait(300);
  told.eye = place.layout.scene.camera.eye;
  told.overflow = document.documentElement.scrollWidth - window.innerWidth;
  var note = document.createElement("p");
  note.id = "told";
  note.textContent = JSON.stringify(told);
  document.body.appendChild(note);
})();
</script></body>"""


def _load(path: Path):
    spec = importlib.util.spec_from_file_location(f"browser_{path.stem}", path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def records():
    from morph.check.centreline import make_centrelines
    from morph.check.fields import make_fields
    from morph.report.records import BuildRecords

    made = _load(Path(__file__).parent.parent / "report" / "scene.py").parts()
    lines = make_centrelines(made["plan"])
    fields = make_fields(lines, lines.bore_mm, made["solid"].trimmed, made["blank"], np.array([0.0, 0.0, 1.0]))
    return BuildRecords(**made, fields=fields)


@pytest.fixture(scope="module")
def page(records):
    from morph.report.page import make_report
    from morph.report.summary import make_summary

    return make_report(records, make_summary(records))


def browse(page: str, folder: Path, *switches: str) -> subprocess.CompletedProcess:
    file = folder / "report.html"
    file.write_text(page, encoding="utf-8")
    command = [
        CHROMIUM,
        "--headless",
        "--enable-unsafe-swiftshader",
        "--no-sandbox",
        "--disable-gpu",
        "--enable-logging=stderr",
        "--no-first-run",
    ]
    command += [f"--user-data-dir={folder / 'profile'}", "--disable-background-networking", "--disable-sync"]
    command += ["--virtual-time-budget=20000", f"--log-net-log={folder / 'net.json'}", *switches, file.as_uri()]
    return subprocess.run(command, capture_output=True, text=True, timeout=180, check=False)


def outside_addresses(folder: Path) -> list[str]:
    """Every address the page asked for that is not the file itself or inside it; the browser's own errands aside."""
    found = set()
    for line in (folder / "net.json").read_text(encoding="utf-8", errors="replace").splitlines():
        if '"initiator"' in line:
            asked = json.loads(line.rstrip().rstrip(","))["params"]
            if asked["initiator"] != "not an origin":
                found.add(asked["url"])
    return sorted(u for u in found if not u.startswith(("file:", "data:", "blob:", "about:", "chrome")))


@pytest.fixture(scope="module")
def pressed(page, tmp_path_factory):
    folder = tmp_path_factory.mktemp("press")
    done = browse(page.replace("</body>", PRESS), folder, "--dump-dom", "--window-size=1100,1400")
    told = re.search(r'<p id="told">(.*?)</p>', done.stdout, flags=re.S)
    assert told, done.stderr[-2000:]
    return json.loads(told[1]), done, folder


def test_page_is_ready_and_the_console_is_silent(pressed):
    told, done, _ = pressed
    assert told["state"] == "ready"
    lines = [line for line in done.stderr.splitlines() if "CONSOLE" in line]
    assert [line for line in lines if not any(note in line for note in SPEED_NOTES)] == []


def test_nothing_outside_is_asked_for(pressed):
    assert outside_addresses(pressed[2]) == []


def test_an_outside_request_would_be_seen(tmp_path):
    # the guard of the test above: a page that does ask must be caught
    browse('<!doctype html><img src="http://example.invalid/x.png">', tmp_path, "--dump-dom")
    assert outside_addresses(tmp_path) == ["http://example.invalid/x.png"]


def test_buttons_switch_what_the_channels_are_coloured_by(pressed, records):
    from morph.report.figures import make_scene

    told = pressed[0]
    assert told["focused"] is True
    for quantity in make_scene(records).quantities:
        shown = told[quantity.name]
        assert shown["pressed"] == 1
        assert (shown["low"], shown["high"]) == pytest.approx((quantity.low, quantity.high), abs=1e-5)
        assert shown["first"] == pytest.approx(quantity.values[0], rel=1e-6)


def test_view_buttons_turn_the_camera_and_the_page_does_not_scroll_sideways(pressed):
    told = pressed[0]
    assert told["eye"]["z"] == pytest.approx(1.9) and abs(told["eye"]["x"]) < 1e-9
    assert told["overflow"] <= 0


def test_prints_on_a4_without_the_live_picture(page, tmp_path):
    paper = tmp_path / "report.pdf"
    browse(page, tmp_path, f"--print-to-pdf={paper}", "--no-pdf-header-footer")
    content = paper.read_bytes()
    boxes = {tuple(float(v) for v in box.split()) for box in re.findall(rb"/MediaBox\s*\[([^\]]+)\]", content)}
    # A4 is 210 x 297 mm = 595.3 x 841.9 points
    assert [box[2:] for box in boxes] == [pytest.approx((595.3, 841.9), abs=1.0)]
    assert 4 <= len(re.findall(rb"/Type\s*/Page\b", content)) <= 12
