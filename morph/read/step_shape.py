"""STEP: solids of a CAD exchange file as triangles, through the geometry kernel of the `step` extra.

The kernel runs in a process of its own (step_worker.py): it is large, prints as it likes, and may not survive
a hostile file. What comes back is triangles in mm: the kernel converts the file's own unit.
Chord CHORD_MM between facets and the exact faces.
"""

from __future__ import annotations

import importlib.util
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np

from morph.core.errors import InputError
from morph.read.mesh_fault import MOST_TRIANGLES, Soup, damaged, not_its_format, require_few, truncated

CHORD_MM = 0.005
"""Facets of a STEP solid leave its exact faces by at most this."""

ANGLE_RAD = 0.1
"""Facets of a STEP solid turn by at most this from one to the next."""

LARGEST_STEP_BYTES = 150_000_000
LONGEST_SECONDS = 600.0
MOST_MEMORY_BYTES = 12_000_000_000
OPENS, CLOSES = b"ISO-10303-21;", b"END-ISO-10303-21;"
MISSING, UNREADABLE, NO_SOLID, TOO_MANY = 11, 12, 13, 14
"""How the worker ends when it cannot give triangles."""


def read_step(content: bytes, name: str) -> Soup:
    """Returns the solids of a STEP file as triangles in mm.

    Args:
        content: the whole file.
        name: its base name, for messages.

    Raises:
        InputError: `step-reader-missing` without the extra, `mesh-not-its-format`, `mesh-truncated`, `mesh-damaged`,
            `mesh-no-triangles`, `mesh-too-many-triangles`, `mesh-file-too-large`.
    """
    if not content[:4096].lstrip().startswith(OPENS):
        raise not_its_format(name, f"a STEP file that starts with {OPENS.decode()}", "another beginning")
    if CLOSES not in content[-4096:]:
        raise truncated(name, f"{CLOSES.decode()} at the end", "another end")
    if len(content) > LARGEST_STEP_BYTES:
        raise InputError(
            "mesh-file-too-large",
            expected=f"a STEP file of at most {LARGEST_STEP_BYTES / 1e6:.0f} MB",
            found=f"{len(content) / 1e6:.0f} MB",
            where=name,
            do="Export the one body alone, without assembly, drawings and product data.",
        )
    if importlib.util.find_spec("OCP") is None:
        raise _missing(name, "it is not installed")
    with tempfile.TemporaryDirectory(prefix="morph-step-") as folder:
        return _work(content, Path(folder), name)


def _missing(name: str, found: str) -> InputError:
    return InputError(
        "step-reader-missing",
        expected="the geometry kernel that reads STEP",
        found=found,
        where=name,
        do="Install it with: pip install 'morph-channels[step]'; or export the body as 3MF or STL.",
    )


def _work(content: bytes, folder: Path, name: str) -> Soup:
    source, target = folder / "in.step", folder / "out.npz"
    source.write_bytes(content)
    command = [sys.executable, "-m", "morph.read.step_worker", str(source), str(target)]
    command += [repr(CHORD_MM), repr(ANGLE_RAD), str(MOST_TRIANGLES), str(MOST_MEMORY_BYTES)]
    try:
        done = subprocess.run(
            command,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            timeout=LONGEST_SECONDS,
            check=False,
        )
    except subprocess.TimeoutExpired:
        raise damaged(name, f"a file the kernel reads within {LONGEST_SECONDS:.0f} s", "a longer time") from None
    if done.returncode == MISSING:
        raise _missing(name, "an installed one that does not load")
    if done.returncode == NO_SOLID:
        raise InputError(
            "mesh-no-triangles",
            expected="a solid in the STEP file",
            found="none (surfaces, curves or an empty product)",
            where=name,
            do="Export the body as a solid (manifold solid boundary representation).",
        )
    if done.returncode == TOO_MANY:
        require_few(MOST_TRIANGLES + 1, name)
    if done.returncode != 0 or not target.is_file():
        raise damaged(name, "a STEP file that the kernel reads", "one it refuses or cannot mesh")
    with np.load(target, allow_pickle=False) as arrays:
        return Soup(arrays["points"], arrays["triangles"], "mm")
