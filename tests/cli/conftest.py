"""A folder with a valid job and its image, and a pipeline that answers at once."""

import json
from types import SimpleNamespace

import numpy as np
import pytest

from morph.core.verdict import Notice, worst_outcome
from tests.cli.scene import JOB, straight_channel

DEAD_END = Notice("dead-end", "Branch B2 ends blind.")


@pytest.fixture
def job_folder(tmp_path, monkeypatch):
    """A working folder with job.toml and density.npy in it; it is the current folder."""
    (tmp_path / "job.toml").write_text(JOB)
    np.save(tmp_path / "density.npy", straight_channel())
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def answer(monkeypatch):
    """Replaces the pipeline by one that reports two stages and returns the given verdicts."""
    import morph.pipeline

    def install(*verdicts, notices=(DEAD_END,)):
        summary = {"layout": {"branches": 3}, "flow": None}
        files = {"summary.json": json.dumps(summary).encode(), "report.html": b"<html></html>"}

        def build(job, progress):
            progress.step("layout", 0, 1)
            progress.step("layout", 3, 6)
            progress.step("surface", 0, 1)
            return SimpleNamespace(
                records=SimpleNamespace(plan=SimpleNamespace(branches=())),
                job=job,
                summary=summary,
                verdicts=verdicts,
                notices=notices,
                files=files,
                headline=worst_outcome(verdicts),
            )

        monkeypatch.setattr(morph.pipeline, "build", build)
        return summary

    return install
