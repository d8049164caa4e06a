"""A job with threads at both ports, from its file to the files a shop machines from."""

import csv
import io
import json
from pathlib import Path

import numpy as np
import pytest

import morph
from morph.cli.main import main

SAMPLE = Path(__file__).parent.parent.parent / "samples" / "tealight-cup"
END = 'end = "thread"\nthread = "G1/8"\n'


def job_text(end=END, margin="[46.0, 10.0]"):
    """The small sample with more metal below the sheet, stock on its foot, and ends at its ports."""
    text = (SAMPLE / "job.toml").read_text()
    for old, new in (
        ('role = "in"\n', f'role = "in"\n{end}'),
        ('role = "out"\n', f'role = "out"\n{end}'),
        ("margin_mm = [12.0, 10.0]", f"margin_mm = {margin}\nstock_mm = {{ foot = 1.0 }}"),
    ):
        assert old in text
        text = text.replace(old, new, 1)
    return text


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "density.npy").write_bytes((SAMPLE / "density.npy").read_bytes())
    return tmp_path


def test_threads_go_all_the_way(folder):
    (folder / "job.toml").write_text(job_text())
    result = morph.build(folder / "job.toml")
    assert not [row for row in result.verdicts if row.outcome.value == "fail"]
    for code in ("wall-thread", "thread-pilot"):
        rows = [row for row in result.verdicts if row.code == code]
        assert [row.outcome.value for row in rows] == ["pass"] * 2 and {r.branch_ids[0] for r in rows} == {
            "L-feed",
            "L-return",
        }
    rows = list(csv.DictReader(io.StringIO(result.files["ports.csv"].decode())))
    lead = {b["id"]: b for b in json.loads(result.files["graph.json"])["branches"] if b["kind"] == "lead"}
    for row in rows:
        # ISO 228-1 G1/8: major 9.728, minor 8.566 mm; drill 8.8 mm; along the build direction the pilot is at most 8.8 - 0.6
        assert (row["end"], row["designation"], row["stock_mm"]) == ("thread", "G1/8", "1.0")
        assert [float(row[k]) for k in ("major_mm", "minor_mm", "drill_mm")] == [9.728, 8.566, 8.8]
        assert lead[row["lead"]]["bore_along_mm"][0] <= float(row["bore_mm"]) <= 8.2
        assert float(row["thread_depth_mm"]) == pytest.approx(1.5 * 9.728 + 3 * 0.907)
        assert float(row["drill_depth_mm"]) == float(row["thread_depth_mm"]) + float(row["run_out_mm"])
        assert float(row["wall_around_mm"]) >= 3.0
        path = np.array(lead[row["lead"]]["xyz_mm"])
        assert np.ptp(path[path[:, 2] < path[-1, 2] + float(row["drill_depth_mm"]), :2], axis=0).max() < 1e-5
    ends = result.summary["body"]["ends"]
    assert [(end["end"], end["designation"], end["standard"]) for end in ends] == [("thread", "G1/8", "ISO 228-1")] * 2
    page = result.files["report.html"].decode()
    assert "thread G1/8: pilot as printed" in page and "wall-thread" in page


def test_a_thread_without_room_is_one_sentence_and_no_file(folder, monkeypatch, capsys):
    monkeypatch.chdir(folder)
    (folder / "job.toml").write_text(job_text(margin="[12.0, 10.0]").replace("G1/8", "G1/2"))
    assert main(["build", "job.toml", "--quiet"]) == 1
    said = capsys.readouterr().err
    assert said.count("\n") == 1 and ("[end-no-place]" in said or "[end-no-straight]" in said) and "G1/2" in said
    assert not (folder / "out").exists()


def test_an_unknown_thread_is_refused_before_any_image_is_read(folder, monkeypatch, capsys):
    monkeypatch.chdir(folder)
    (folder / "density.npy").unlink()
    (folder / "job.toml").write_text(job_text('end = "thread"\nthread = "G1/9"\n'))
    assert main(["build", "job.toml"]) == 1
    said = capsys.readouterr().err
    assert "[thread-unknown]" in said and "G1/8" in said and "'feed'" in said
