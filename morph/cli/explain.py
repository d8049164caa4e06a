"""``morph explain CODE``: what an error, verdict or warning means, and what to do about it."""

from __future__ import annotations

import argparse
import difflib
import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

from morph.core.errors import InputError

if TYPE_CHECKING:
    from morph.core.codes import Explanation


def add_to(commands: Any) -> None:
    """Adds the command to the sub-parsers `commands`."""
    parser = commands.add_parser(
        "explain",
        help="print cause and cure of a code",
        description="Prints kind, cause and cure of an error, verdict or warning code; without CODE lists all codes.",
        allow_abbrev=False,
    )
    parser.add_argument("code", nargs="?", metavar="CODE", help="a code as printed in [brackets]")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.add_argument("--out", metavar="FILE", type=Path, help="write to a new file instead of stdout")
    parser.add_argument("--force", action="store_true", help="replace an existing file")
    parser.set_defaults(run=run)


def _nearest_few(code: str, known: list[str]) -> str:
    close = difflib.get_close_matches(code[:64], known, n=3, cutoff=0.5)
    if close:
        return "Did you mean " + " or ".join(close) + "?"
    return "`morph explain` without a code lists all of them."


def run(arguments: argparse.Namespace) -> int:
    """Prints or writes the explanation of one code, or the list of codes.

    Raises:
        InputError: no such code; the nearest ones are named.
        ExportError: the file cannot be written.
    """
    from morph.core.codes import explanations
    from morph.core.files import write_file
    from morph.settings.table import show

    known = explanations()
    if arguments.code is None:
        rows = list(known.values())
    else:
        code = arguments.code.strip().strip("[]")
        if code not in known:
            raise InputError(
                "code-unknown",
                expected="a code that morph prints",
                found=show(code),
                where="command line: CODE",
                do=_nearest_few(code, list(known)),
            )
        rows = [known[code]]
    text = _text(rows, as_json=arguments.json, brief=arguments.code is None)
    if arguments.out is None:
        print(text)
    else:
        write_file(arguments.out, (text + "\n").encode("utf-8"), force=arguments.force)
    return 0


def _text(rows: list[Explanation], *, as_json: bool, brief: bool) -> str:
    """Returns the rows as JSON, as one line each, or as one whole explanation."""
    if as_json:
        table = {row.code: {"kind": row.kind, "cause": row.cause, "cure": row.cure} for row in rows}
        return json.dumps(table, indent=1, sort_keys=True)
    if brief:
        width = max(len(row.code) for row in rows)
        return "\n".join(f"{row.code:<{width}}  {row.kind:<7}  {row.cause.split('. ')[0].rstrip('.')}" for row in rows)
    return f"{rows[0].code} ({rows[0].kind})\ncause: {rows[0].cause}\ncure:  {rows[0].cure}"
