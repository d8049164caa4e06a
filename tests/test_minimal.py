"""One sample through every stage: the first file to run when anything is changed."""

import json
from pathlib import Path

import morph

SAMPLE = Path(__file__).parent.parent / "samples" / "tealight-cup" / "job.toml"
FILES = {
    "channels.stl",
    "insert.stl",
    "insert.3mf",
    "centrelines.step",
    "ports.csv",
    "graph.json",
    "summary.json",
    "verdicts.csv",
    "report.html",
    "timings.json",
}


def test_a_sample_goes_all_the_way(tmp_path):
    result = morph.build(SAMPLE)
    assert set(result.files) == FILES
    assert result.headline.value == "not checked"  # flow and temperature
    assert result.summary["flow"] is None and result.summary["thermal"] is None
    assert result.summary["insert"]["openings"] == result.summary["insert"]["openings_declared"] == 2
    paths = morph.write(result, tmp_path / "out")
    assert {path.name for path in paths} == FILES
    assert all(path.read_bytes() == result.files[path.name] for path in paths)
    assert json.loads((tmp_path / "out" / "summary.json").read_text())["solid"]["watertight"] is True
