"""What the command line prints where, and with which exit status."""

import json
import os
import signal
import subprocess
import sys
import time

import pytest

from morph.cli.main import main
from morph.core.codes import explanations
from morph.core.errors import Cancelled
from morph.core.verdict import Outcome, Verdict
from tests.cli.scene import JOB, tree, wall

pytestmark = pytest.mark.quick

FLOW = Verdict("flow", Outcome.NOT_CHECKED, "Flow was not calculated.")


def _in_a_process(*arguments, **keywords):
    return subprocess.run(
        [sys.executable, *arguments], capture_output=True, text=True, check=False, timeout=60, **keywords
    )


def test_a_pass_leaves_the_files_and_a_table(job_folder, answer, capsys):
    answer(wall(Outcome.PASS, 4.2), FLOW)
    assert main(["build", "job.toml"]) == 0
    said = capsys.readouterr()
    assert sorted(p.name for p in (job_folder / "out" / "lamp").iterdir()) == ["report.html", "summary.json"]
    assert said.out.splitlines()[0] == "lamp: not checked   (0 fail, 1 not checked, 0 watch, 1 pass)"
    assert (
        "pass         Worst wall after its band            4.05 mm      at least 3.00 mm  B1 at [29.0, 1.2, -3.0] mm"
        in said.out
    )
    assert "not checked  Openings found / declared" in said.out
    assert "[flow] Flow was not calculated." in said.out and "[dead-end] Branch B2 ends blind." in said.out
    assert "wrote 2 files" in said.out
    lines = said.err.splitlines()
    assert len(lines) == 2 and lines[0].split()[0] == "layout" and lines[1].split()[0] == "surface"
    assert all(line.endswith(" s") for line in lines)


def test_a_failed_check_still_leaves_the_files_and_exits_3(job_folder, answer, capsys):
    answer(wall(Outcome.PASS, 4.2), wall(Outcome.FAIL, 2.5), FLOW)
    assert main(["build", "job.toml", "--quiet", "--out", "here"]) == 3
    said = capsys.readouterr()
    assert said.err == "" and said.out.startswith("lamp: fail")
    assert "2.35 mm" in said.out and "[wall-face] Wall to the part face on B1 is 2.5 mm." in said.out
    assert (job_folder / "here" / "report.html").exists()


def test_json_is_the_summary_and_nothing_else(job_folder, answer, capsys):
    summary = answer(wall(Outcome.PASS, 4.2))
    assert main(["build", "job.toml", "--json"]) == 0
    said = capsys.readouterr()
    assert json.loads(said.out) == summary and "layout" in said.err
    assert (job_folder / "out" / "lamp" / "summary.json").exists()


def test_an_error_is_one_sentence_and_with_json_a_row(job_folder, answer, capsys):
    answer()
    (job_folder / "job.toml").write_text(JOB.replace("depth_mm = 9.0", "depth_mm = -9.0"))
    before = tree(job_folder)
    assert main(["build", "job.toml"]) == 1
    said = capsys.readouterr()
    assert said.out == "" and said.err.count("\n") == 1
    assert said.err == (
        "morph: job.toml: [carrier] depth_mm: found -9.0 mm; expected more than 0 and at most 5000 mm. "
        "Give a value in that range. [setting-range] (more: morph explain setting-range)\n"
    )
    assert main(["build", "job.toml", "--json"]) == 1
    row = json.loads(capsys.readouterr().out)["error"]
    assert sorted(row) == ["code", "do", "expected", "found", "where"] and row["code"] == "setting-range"
    assert tree(job_folder) == before


def test_an_existing_result_needs_force(job_folder, answer, capsys):
    answer(wall(Outcome.PASS, 4.2))
    assert main(["build", "job.toml"]) == 0
    mine = job_folder / "out" / "lamp" / "mine.txt"
    mine.write_text("mine")
    capsys.readouterr()
    assert main(["build", "job.toml"]) == 1
    said = capsys.readouterr()
    assert "[output-not-empty]" in said.err and "layout" not in said.err  # refused before any stage
    assert main(["build", "job.toml", "--force"]) == 0
    assert mine.read_text() == "mine"


@pytest.mark.parametrize("stop", [KeyboardInterrupt, Cancelled])
def test_an_interrupt_exits_130(job_folder, monkeypatch, capsys, stop):
    import morph.pipeline

    def build(_job, progress):
        progress.step("solid", 0, 1)
        raise stop

    monkeypatch.setattr(morph.pipeline, "build", build)
    before = tree(job_folder)
    assert main(["build", "job.toml"]) == 130
    said = capsys.readouterr()
    assert said.err.splitlines()[-1] == "morph: interrupted; nothing was written" and said.out == ""
    assert tree(job_folder) == before


def test_an_unexpected_exception_keeps_its_traceback(job_folder, monkeypatch):
    import morph.pipeline

    def build(_job, _progress):
        raise ZeroDivisionError

    monkeypatch.setattr(morph.pipeline, "build", build)
    with pytest.raises(ZeroDivisionError):
        main(["build", "job.toml"])
    assert not (job_folder / "out").exists()


@pytest.mark.parametrize(
    "arguments",
    [[], ["bild"], ["build"], ["build", "a", "b"], ["build", "a", "--frce"], ["start", "a", "--size-mm", "x", "1"]],
)
def test_wrong_usage_exits_2(arguments, capsys):
    assert main(arguments) == 2
    said = capsys.readouterr()
    assert said.out == "" and "usage:" in said.err


@pytest.mark.parametrize("command", ["check", "page", "vary", "quote"])
def test_a_command_that_does_not_exist_yet_is_named(command, capsys):
    assert main([command, "x.stl", "--json"]) == 1
    said = capsys.readouterr()
    assert "[not-available]" in said.err and f"morph {command}" in said.err
    assert json.loads(said.out)["error"]["code"] == "not-available"


def test_explain_one_code_and_all(capsys):
    assert main(["explain", "port-outside"]) == 0
    said = capsys.readouterr().out
    assert said.startswith("port-outside (error)\ncause: ") and "\ncure:  " in said
    assert main(["explain"]) == 0
    assert [line.split()[0] for line in capsys.readouterr().out.splitlines()] == list(explanations())
    assert main(["explain", "port-outside", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["port-outside"]["kind"] == "error"


def test_explain_into_a_file(tmp_path, capsys):
    file = tmp_path / "codes.txt"
    assert main(["explain", "--out", str(file)]) == 0
    assert capsys.readouterr().out == "" and len(file.read_text().splitlines()) == len(explanations())
    assert main(["explain", "--out", str(file)]) == 1
    assert "[output-exists]" in capsys.readouterr().err


def test_explain_an_unknown_code_names_the_nearest(capsys):
    assert main(["explain", "port-outsid"]) == 1
    said = capsys.readouterr()
    assert "[code-unknown]" in said.err and "port-outside" in said.err
    assert main(["explain", "zzzzzz"]) == 1
    assert "lists all of them" in capsys.readouterr().err


def test_the_first_use_of_the_kernels_is_announced(job_folder, answer, capsys, monkeypatch):
    from morph.cli.stage_lines import StageLines

    monkeypatch.setenv("NUMBA_CACHE_DIR", str(job_folder / "cache"))
    lines = StageLines()
    for stage in ("layout", "solid", "insert", "check"):
        lines.step(stage, 0, 1)
        (job_folder / "cache").mkdir(exist_ok=True)
    lines.close()
    said = capsys.readouterr().err.splitlines()
    assert ["compiling, first run only" in line for line in said] == [False, True, False, True]
    (job_folder / "cache" / "x").mkdir()
    (job_folder / "cache" / "x" / "kernel.nbc").write_bytes(b"x")
    lines = StageLines()
    lines.step("solid", 0, 1)
    lines.close()
    assert "compiling" not in capsys.readouterr().err


HEAVY = "import sys; import morph.cli.main as m; m.main(sys.argv[1:]); print(sorted(sys.modules), file=sys.stderr)"


@pytest.mark.parametrize("arguments", [["--help"], ["build", "--help"], ["start", "--help"], ["explain", "flow"]])
def test_help_and_explain_load_nothing_heavy(arguments):
    done = _in_a_process("-c", HEAVY, *arguments)
    loaded = set(done.stderr.splitlines()[-1].strip("[]").replace("'", "").split(", "))
    assert "morph.cli.main" in loaded
    heavy = {"numpy", "scipy", "skimage", "numba", "manifold3d", "trimesh", "shapely", "plotly", "jinja2", "OCP"}
    assert not loaded & heavy


def test_help_answers_within_0_4_s_warm():
    command = ("-m", "morph", "--help")
    _in_a_process(*command)
    seconds = []
    for _ in range(5):
        begin = time.perf_counter()
        assert _in_a_process(*command).returncode == 0
        seconds.append(time.perf_counter() - begin)
    assert min(seconds) <= 0.4


def test_the_module_is_the_command():
    done = _in_a_process("-m", "morph", "--version")
    assert done.returncode == 0 and done.stdout.startswith("morph ")


def test_a_reader_that_leaves_early_is_no_error():
    if os.name != "posix":
        pytest.skip("needs a shell")
    done = subprocess.run(
        f"{sys.executable} -m morph explain | head -n 1", shell=True, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0 and done.stderr == ""


@pytest.mark.skipif(os.name != "posix", reason="needs signals")
@pytest.mark.parametrize(("number", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_a_signal_while_writing_leaves_nothing(job_folder, number, status):
    script = f"""
import os, pathlib, time
import morph.pipeline
from types import SimpleNamespace
from morph.core.verdict import Outcome
real = pathlib.Path.write_bytes
def slow(self, content):
    real(self, content)
    os.kill(os.getpid(), {int(number)})
    time.sleep(5)
pathlib.Path.write_bytes = slow
files = {{"a.json": b"a", "b.json": b"b"}}
morph.pipeline.build = lambda job, progress: SimpleNamespace(
    summary={{}}, verdicts=(), notices=(), files=files, headline=Outcome.PASS)
import sys
sys.argv = ["morph", "build", "job.toml"]
from morph.cli.main import entry
entry()
"""
    before = tree(job_folder)
    begin = time.perf_counter()
    done = _in_a_process("-c", script, cwd=job_folder)
    assert done.returncode == status and time.perf_counter() - begin < 4.0
    assert "Traceback" not in done.stderr
    assert tree(job_folder) == before
