"""Commands that belong to parts which do not exist yet: recognised, and refused in one sentence."""

from __future__ import annotations

import argparse
from typing import Any, NoReturn

from morph.core.errors import SettingError

_LATER = {
    "check": "checking a foreign STL, 3MF or STEP file",
    "page": "the local page",
    "vary": "a study of many variants",
    "quote": "a quotation sheet",
}


def add_to(commands: Any) -> None:
    """Adds the commands to the sub-parsers `commands`."""
    for name, what in _LATER.items():
        parser = commands.add_parser(
            name, help=f"not available yet: {what}", description=f"Not available yet: {what}.", add_help=False
        )
        parser.add_argument("rest", nargs=argparse.REMAINDER)
        parser.set_defaults(run=_refuse)


def _refuse(arguments: argparse.Namespace) -> NoReturn:
    arguments.json = "--json" in arguments.rest
    name = str(arguments.command)
    raise SettingError(
        "not-available",
        expected="a command that exists in this version",
        found=f"morph {name}",
        where="command line",
        do=f"{_LATER[name][0].upper()}{_LATER[name][1:]} is not available yet; use build, start, profiles or explain.",
    )
