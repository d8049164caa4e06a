"""Ctrl-C in every stage of a real build: status 130, one line, nothing left behind."""

import pytest

from morph.cli.main import main
from morph.cli.stage_lines import StageLines
from morph.pipeline import STAGES
from tests.cli.scene import tree

FLOW = "[coolant]\nflow_l_min = 3\n"
ALWAYS = tuple(name for name in STAGES if name != "flow-3d")


@pytest.mark.parametrize("stage", STAGES)
def test_an_interrupt_at_the_start_of_a_stage(job_folder, monkeypatch, capsys, stage):
    seen = []
    asked = STAGES if stage == "flow-3d" else ALWAYS
    job = job_folder / "job.toml"
    job.write_text(job.read_text() + FLOW + ("check_3d = true\n" if stage == "flow-3d" else ""))

    def step(self, name, done, total):
        seen.append(name)
        if name == stage:
            raise KeyboardInterrupt

    monkeypatch.setattr(StageLines, "step", step)
    before = tree(job_folder)
    assert main(["build", "job.toml"]) == 130
    said = capsys.readouterr()
    assert said.out == "" and said.err == "morph: interrupted; nothing was written\n"
    assert [name for name in dict.fromkeys(seen) if name in asked] == list(asked[: asked.index(stage) + 1])
    assert tree(job_folder) == before


@pytest.mark.parametrize("at_step", [2, 5, 9, 14, 20])
def test_an_interrupt_between_slabs_of_work(job_folder, monkeypatch, capsys, at_step):
    count = []

    def step(self, name, done, total):
        count.append(name)
        if len(count) == at_step:
            raise KeyboardInterrupt

    monkeypatch.setattr(StageLines, "step", step)
    before = tree(job_folder)
    assert main(["build", "job.toml"]) == 130
    assert "interrupted" in capsys.readouterr().err and tree(job_folder) == before
