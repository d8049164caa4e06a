"""A build ends within two seconds of a signal even inside a library call that never looks at signals."""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from tests.cli.scene import tree

pytestmark = pytest.mark.skipif(os.name != "posix", reason="needs fork and signals")

DEAF = "sum(range(10**12))"  # one call, hours long, that never looks at signals
PRELUDE = """
import os, pathlib, signal, sys
from types import SimpleNamespace
import morph.pipeline
from morph.core.verdict import Outcome
DONE = SimpleNamespace(summary={}, verdicts=(), notices=(), files={"summary.json": b"{}", "b.json": b"b"}, headline=Outcome.PASS)
def build(job, progress):
    progress.step("layout", 0, 1)
    WORK
    return DONE
morph.pipeline.build = build
sys.argv = ["morph", "build", "job.toml", "--json"]
from morph.cli.main import entry
"""


def _begin(folder, work, more=""):
    script = PRELUDE.replace("WORK", work) + more + "\nentry()\n"
    process = subprocess.Popen(
        [sys.executable, "-c", script], cwd=folder, stdout=subprocess.PIPE, stderr=subprocess.PIPE, bufsize=0
    )
    first = process.stderr.read(8)
    assert first == b"  layout", first + process.stderr.read()
    time.sleep(0.3)
    return process


def _finish(process):
    begin = time.perf_counter()
    out, err = process.communicate(timeout=30)
    return process.returncode, out.decode(), err.decode(), time.perf_counter() - begin


@pytest.mark.parametrize(("number", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_a_deaf_call_is_ended(job_folder, number, status):
    before = tree(job_folder)
    process = _begin(job_folder, DEAF)
    process.send_signal(number)
    code, out, err, seconds = _finish(process)
    assert (code, out) == (status, "") and err.endswith("morph: interrupted; nothing was written\n")
    assert seconds <= 2.0 and tree(job_folder) == before


def test_a_deaf_call_while_writing_leaves_nothing_in_the_folder(job_folder):
    (job_folder / "out").mkdir()
    before = tree(job_folder)
    slow = f"""
real = pathlib.Path.write_bytes
def deaf(self, content):
    real(self, content)
    {DEAF}
pathlib.Path.write_bytes = deaf
"""
    process = _begin(job_folder, "pass", slow)
    process.send_signal(signal.SIGINT)
    code, _, _, seconds = _finish(process)
    assert code == 130 and seconds <= 2.0 and tree(job_folder) == before


def test_a_second_interrupt_does_not_stop_the_tidying_up(job_folder):
    before = tree(job_folder)
    slow = """
import time
real = pathlib.Path.write_bytes
def write(self, content):
    real(self, content)
    time.sleep(30)
pathlib.Path.write_bytes = write
import shutil
real_rmtree = shutil.rmtree
def rmtree(*arguments, **keywords):
    time.sleep(0.5)
    real_rmtree(*arguments, **keywords)
shutil.rmtree = rmtree
"""
    process = _begin(job_folder, "pass", slow)
    for _ in range(4):
        process.send_signal(signal.SIGINT)
        time.sleep(0.1)
    code, _, err, _ = _finish(process)
    assert code == 130 and "Traceback" not in err and tree(job_folder) == before


def test_an_unexpected_exception_keeps_its_traceback_and_status_1(job_folder):
    code, _, err, _ = _finish(_begin(job_folder, "1 / 0"))
    assert code == 1 and "ZeroDivisionError" in err and "Traceback" in err


def test_a_build_that_the_system_kills_says_so(job_folder):
    code, _, err, _ = _finish(_begin(job_folder, "os.kill(os.getpid(), signal.SIGKILL)"))
    assert code == 128 + signal.SIGKILL and "memory runs out" in err


def test_a_good_build_passes_its_output_on(job_folder):
    code, out, _, _ = _finish(_begin(job_folder, "pass"))
    assert (code, out) == (0, "{}\n") and (job_folder / "out" / "lamp" / "b.json").read_bytes() == b"b"


@pytest.mark.skipif(sys.platform != "linux", reason="only there the system can tie the two")
def test_a_build_does_not_outlive_its_command(job_folder):
    note = "pathlib.Path('pid').write_text(str(os.getpid()))"
    process = _begin(job_folder, f"{note}; {DEAF}")
    child = int((job_folder / "pid").read_text())
    process.kill()
    process.communicate(timeout=10)
    end = time.monotonic() + 5.0
    while time.monotonic() < end and _runs(child):
        time.sleep(0.05)
    assert not _runs(child)


def _runs(process_id):
    try:
        state = Path(f"/proc/{process_id}/stat").read_text().rsplit(")", 1)[1].split()[0]
    except FileNotFoundError:
        return False
    return state != "Z"
