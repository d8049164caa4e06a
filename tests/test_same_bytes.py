"""The same job gives the same bytes: 1 or 2 threads, another folder, the second build of one process."""

import hashlib
import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

SAMPLE = Path(__file__).parent.parent / "samples" / "tealight-cup"
SCRIPT = """
import hashlib, json, sys, morph
for _ in range(int(sys.argv[2])):
    result = morph.build(sys.argv[1])
print(json.dumps({name: hashlib.sha256(content).hexdigest() for name, content in result.files.items()}))
"""


def _hashes(job: Path, threads: int, times: int) -> dict[str, str]:
    environment = os.environ | {"NUMBA_NUM_THREADS": str(threads), "OMP_NUM_THREADS": str(threads)}
    environment |= {"OPENBLAS_NUM_THREADS": str(threads)}
    done = subprocess.run(
        [sys.executable, "-c", SCRIPT, str(job), str(times)],
        env=environment,
        cwd=job.parent,
        capture_output=True,
        text=True,
        check=True,
    )
    found = json.loads(done.stdout)
    found.pop("timings.json")
    return found


def test_same_bytes_whatever_the_threads_the_folder_and_the_turn(tmp_path):
    elsewhere = tmp_path / "another place" / "job"
    shutil.copytree(SAMPLE, elsewhere)
    first = _hashes(SAMPLE / "job.toml", 1, 1)
    assert len(first) == 9 and len(set(first.values())) == 9
    assert _hashes(elsewhere / "job.toml", 2, 2) == first
    assert all(len(value) == len(hashlib.sha256().hexdigest()) for value in first.values())
