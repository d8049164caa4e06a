"""``morph start IMAGE``: writes a commented first job file for a density image."""

from __future__ import annotations

import argparse
import json
import os
import re
from pathlib import Path
from typing import Any

from morph.core.errors import InputError
from morph.core.words import counted


def add_to(commands: Any) -> None:
    """Adds the command to the sub-parsers `commands`."""
    parser = commands.add_parser(
        "start",
        help="write a first job file for a density image",
        description="Looks at a density image and writes a commented job file with the ports it believes it sees.",
        allow_abbrev=False,
    )
    parser.add_argument("image", metavar="IMAGE", type=Path, help="the density image (.npy or .png)")
    parser.add_argument(
        "--size-mm", nargs=2, type=float, metavar=("W", "H"), help="size of the whole image on the sheet in mm"
    )
    parser.add_argument("--out", metavar="FILE", type=Path, default=Path("job.toml"), help="default job.toml")
    parser.add_argument("--force", action="store_true", help="replace an existing file")
    parser.add_argument("--json", action="store_true", help="print what was written as JSON")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Writes the job file and prints which lines to look at.

    Raises:
        MorphError: the image is refused, or the file cannot be written; nothing has been written.
    """
    from morph.cli.first_job import make_first_job
    from morph.core.files import require_file, write_file
    from morph.core.threads import single_thread

    image, out = arguments.image, arguments.out
    require_file(out, force=arguments.force)
    with single_thread():
        first = make_first_job(image, _relative(image, out), _job_name(image), _size_mm(arguments.size_mm))
    write_file(out, first.text.encode("utf-8"), force=arguments.force)
    if arguments.json:
        ports = [{"name": p.name, "role": p.role.value, "at_mm": list(p.at_mm)} for p in first.ports]
        edits = [{"line": line, "why": why} for line, why in first.edits]
        print(json.dumps({"job": str(out), "ports": ports, "edit": edits}, indent=1, sort_keys=True))
        return 0
    print(f"wrote {out} with {counted(len(first.ports), 'port')}")
    for line, why in first.edits:
        print(f"  line {line:>3}: {why}")
    print(f"next: morph build {out}")
    return 0


def _size_mm(given: list[float] | None) -> tuple[float, float] | None:
    from morph.settings.parse_layout import LARGEST_SHEET_MM
    from morph.settings.table import Table

    if given is None:
        return None
    table = Table({"--size-mm": list(given)}, "command line", "", ["--size-mm"])
    width_mm, height_mm = table.numbers("--size-mm", 2, above=0.0, most=LARGEST_SHEET_MM)
    return width_mm, height_mm


def _relative(image: Path, out: Path) -> str:
    """Returns the path of the image from the job file's folder, with forward slashes."""
    try:
        path = os.path.relpath(image.resolve(), out.resolve().parent)
    except (OSError, ValueError, RuntimeError):  # another drive, a loop of links, a name the system refuses
        path = str(image)
    text = path.replace(os.sep, "/")
    if not text.isprintable():
        raise InputError(
            "start-image-name",
            expected="a path of printable characters, because the job file has to name it",
            found=text.encode("unicode_escape", "replace").decode("ascii")[:80],
            where="command line: IMAGE",
            do="Rename the image or its folder.",
        )
    return text


def _job_name(image: Path) -> str:
    """Returns a valid job name made of the image's: other characters become hyphens.

    >>> _job_name(Path("Kühlung v2.npy"))
    'K-hlung-v2'
    """
    name = re.sub(r"[^A-Za-z0-9._-]+", "-", image.stem).strip("-._")[:64]
    return name or "first-job"
