"""The command ``morph``: reads the command line, runs one sub-command, turns errors into sentences and exit codes.

Exit 0 done, 1 an error the user can mend, 2 wrong usage, 3 done but a verdict is fail, 130
interrupted. The result goes to stdout, everything else to stderr. An unexpected exception keeps
its traceback. Nothing heavy is imported before a sub-command runs.
"""

from __future__ import annotations

import argparse
import json
import os
import signal
import sys
from collections.abc import Sequence
from pathlib import Path
from types import FrameType
from typing import NoReturn

from morph import __version__
from morph.cli import build, explain, later, profiles, start
from morph.cli.supervise import can_supervise, run_supervised
from morph.core.errors import Cancelled, MorphError

EXIT_DONE, EXIT_ERROR, EXIT_USAGE, EXIT_INTERRUPTED, EXIT_TERMINATED = 0, 1, 2, 130, 143


def make_parser() -> argparse.ArgumentParser:
    """Returns the parser of the whole command line."""
    parser = argparse.ArgumentParser(
        prog="morph",
        description="Turns an optimiser's flat coolant density image into a checked, printable mould insert.",
        epilog="Exit: 0 done, 1 an error (one sentence says what to change), 2 wrong usage, "
        "3 done but a verdict is fail, 130 interrupted.",
        allow_abbrev=False,
    )
    parser.add_argument("--version", action="version", version=f"morph {__version__}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True)
    build.add_to(commands)
    start.add_to(commands)
    profiles.add_to(commands)
    explain.add_to(commands)
    later.add_to(commands)
    return parser


def main(argv: Sequence[str] | None = None) -> int:
    """Runs one command and returns its exit status.

    Args:
        argv: the arguments after the program's name; None takes those of the process.
    """
    try:
        arguments = make_parser().parse_args(argv)
    except SystemExit as stop:
        return stop.code if isinstance(stop.code, int) else EXIT_USAGE
    try:
        return int(arguments.run(arguments))
    except MorphError as error:
        _tell(error, as_json=bool(getattr(arguments, "json", False)))
        return EXIT_ERROR
    except (KeyboardInterrupt, Cancelled):
        print("morph: interrupted; nothing was written", file=sys.stderr)
        return EXIT_INTERRUPTED


def _tell(error: MorphError, *, as_json: bool) -> None:
    sentence = " ".join(str(error).split())
    print(f"morph: {sentence} [{error.code}] (more: morph explain {error.code})", file=sys.stderr)
    if as_json:
        row = {key: getattr(error, key) for key in ("code", "expected", "found", "where", "do")}
        print(json.dumps({"error": row}, sort_keys=True, indent=1))


def _terminate(_signal: int, _frame: FrameType | None) -> NoReturn:
    raise SystemExit(EXIT_TERMINATED)


def _clean_after(process: int) -> None:
    """Removes what a build that was ended by force may have begun to write."""
    from morph.core.files import remove_partial

    out = make_parser().parse_args().out
    remove_partial(Path("out") / "any" if out is None else out, process)


def entry() -> NoReturn:
    """Runs the command line of this process and exits with its status."""
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="backslashreplace")
    signal.signal(signal.SIGTERM, _terminate)
    try:
        supervised = sys.argv[1:2] == ["build"] and can_supervise()
        status = run_supervised(main, _clean_after) if supervised else main()
        sys.stdout.flush()
    except BrokenPipeError:  # the reader of our output has gone, as in `morph explain | head`
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        status = EXIT_ERROR
    sys.exit(status)
