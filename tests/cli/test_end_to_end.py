"""From an image to an insert with two commands, and what stands on disk and on stdout agrees."""

import csv
import io
import json
from importlib import resources

import pytest

from morph.cli.main import main

FILES = [
    "centrelines.step",
    "channels.stl",
    "graph.json",
    "insert.3mf",
    "insert.stl",
    "ports.csv",
    "report.html",
    "summary.json",
    "timings.json",
    "verdicts.csv",
]


@pytest.fixture
def started(job_folder, capsys):
    """A folder with the job that `morph start` wrote for the straight channel."""
    (job_folder / "job.toml").unlink()
    assert main(["start", "density.npy"]) == 0
    capsys.readouterr()
    return job_folder


def test_a_started_job_builds_unchanged(started, capsys):
    status = main(["build", "job.toml", "--json"])
    said = capsys.readouterr()
    summary = json.loads(said.out)
    folder = started / "out" / "density"
    assert sorted(path.name for path in folder.iterdir()) == FILES
    assert summary == json.loads((folder / "summary.json").read_text())
    # by hand: one straight channel, two ports, so one branch, no loop, two openings
    assert summary["layout"]["branches"] == 1 and summary["layout"]["loops"] == 0
    assert summary["insert"]["openings"] == summary["insert"]["openings_declared"] == 2
    rows = list(csv.DictReader(io.StringIO((folder / "verdicts.csv").read_text())))
    failed = [row for row in rows if row["verdict"] == "fail"]
    assert not failed and status == 0
    assert "Traceback" not in said.err and len(said.err.splitlines()) == 8


def test_a_part_larger_than_the_machine_is_left_for_looking_at_and_exits_3(started, capsys):
    profile = (resources.files("morph.settings") / "profiles" / "steel-40um.toml").read_text()
    (started / "small.toml").write_text(profile.replace("value = 250.0", "value = 20.0"))
    text = (started / "job.toml").read_text()
    (started / "job.toml").write_text(text.replace('process = "steel-40um"', 'process = "small.toml"'))
    assert main(["build", "job.toml", "--quiet", "--out", "small"]) == 3
    said = capsys.readouterr()
    assert said.out.startswith("density: fail   (1 fail") and "  fail         [machine]" in said.out
    assert sorted(path.name for path in (started / "small").iterdir()) == FILES
    assert said.err == ""
