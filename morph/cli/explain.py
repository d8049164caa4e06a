"""``morph explain CODE``: what an error, verdict or warning means, and what to do about it."""

from __future__ import annotations

import argparse
import difflib
import json
from typing import Any

from morph.core.errors import InputError


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
    parser.set_defaults(run=run)


def _nearest_few(code: str, known: list[str]) -> str:
    close = difflib.get_close_matches(code[:64], known, n=3, cutoff=0.5)
    if close:
        return "Did you mean " + " or ".join(close) + "?"
    return "`morph explain` without a code lists all of them."


def run(arguments: argparse.Namespace) -> int:
    """Prints the explanation of one code, or the list of codes.

    Raises:
        InputError: no such code; the nearest ones are named.
    """
    from morph.core.codes import explanations
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
    if arguments.json:
        table = {row.code: {"kind": row.kind, "cause": row.cause, "cure": row.cure} for row in rows}
        print(json.dumps(table, indent=1, sort_keys=True))
    elif arguments.code is None:
        width = max(len(row.code) for row in rows)
        for row in rows:
            print(f"{row.code:<{width}}  {row.kind:<7}  {row.cause.split('. ')[0].rstrip('.')}")
    else:
        print(f"{rows[0].code} ({rows[0].kind})\ncause: {rows[0].cause}\ncure:  {rows[0].cure}")
    return 0
