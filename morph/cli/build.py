"""``morph build JOB``: runs every stage of a job and leaves its files."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

EXIT_FAILED_CHECK = 3


def add_to(commands: Any) -> None:
    """Adds the command to the sub-parsers `commands`."""
    parser = commands.add_parser(
        "build",
        help="build the insert of a job file and check it",
        description="Reads a job file, builds the insert, checks it and writes the results to out/NAME/.",
        epilog='With --json stdout holds the summary and nothing else, or {"error": ...} when there is an error.',
        allow_abbrev=False,
    )
    parser.add_argument("job", metavar="JOB", type=Path, help="the job file (TOML)")
    parser.add_argument("--out", metavar="DIR", type=Path, help="folder for the results (default out/NAME)")
    parser.add_argument("--force", action="store_true", help="replace the results in a folder that is not empty")
    parser.add_argument("--json", action="store_true", help="print the summary as JSON")
    parser.add_argument("--quiet", action="store_true", help="no progress on stderr")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Builds the job and writes its files; returns 3 when a verdict is fail, else 0.

    Raises:
        MorphError: the job or the output folder is refused; nothing has been written.
    """
    from morph import pipeline
    from morph.cli.result_table import result_lines
    from morph.cli.stage_lines import StageLines
    from morph.core.files import require_target
    from morph.core.progress import SILENT
    from morph.core.verdict import Outcome
    from morph.settings.read_job import read_job

    job = read_job(arguments.job)
    out = arguments.out if arguments.out is not None else Path("out") / job.name
    require_target(out, force=arguments.force)
    lines = None if arguments.quiet else StageLines()
    try:
        result = pipeline.build(job, lines or SILENT)
    finally:
        if lines is not None:
            lines.close()
    paths = pipeline.write(result, out, force=arguments.force)
    if arguments.json:
        print(result.files["summary.json"].decode("utf-8").rstrip())
    else:
        for line in result_lines(result, paths):
            print(line)
    return EXIT_FAILED_CHECK if any(row.outcome is Outcome.FAIL for row in result.verdicts) else 0
