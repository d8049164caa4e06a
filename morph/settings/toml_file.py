"""A TOML file from a stranger as a plain dictionary: bounded before it is parsed.

The standard parser stores every prefix of a dotted key, so one long key costs memory with the
square of its length; the size of the file and the depth of its keys are checked first.
"""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

from morph.core.errors import InputError, SettingError

LARGEST_BYTES = 1_000_000
DEEPEST_KEY = 16

_KEY_PART = r"""(?:[\w-]+|"[^"\n]*"|'[^'\n]*')[ \t]*\.[ \t]*"""
_DEEP_KEY = re.compile(rf"(?<![\w-])(?:{_KEY_PART}){{{DEEPEST_KEY}}}")


def read_bounded(path: Path, kind: str, code_prefix: str) -> bytes:
    """Returns the bytes of a settings file of at most 1 MB.

    Args:
        path: the file.
        kind: what the file is called in a message, such as "a job file".
        code_prefix: "job" or "profile"; the codes are ``<prefix>-missing``, ``-unreadable``, ``-too-large``.

    Raises:
        InputError: there is no such file, it is a folder or cannot be read, or it is larger than 1 MB.
    """
    where = path.name or str(path)
    try:
        exists, is_file = path.exists(), path.is_file()
    except (OSError, ValueError):  # a name the system cannot hold, such as one of 300 characters
        exists = is_file = False
    if not exists:
        raise InputError(
            f"{code_prefix}-missing",
            expected=kind,
            found="no such file",
            where=where[:80],
            do="Check the path and the spelling of the file name.",
        )
    if not is_file:
        raise InputError(
            f"{code_prefix}-unreadable",
            expected=kind,
            found="a folder" if path.is_dir() else "something that is not a file",
            where=where,
            do="Give the TOML file itself.",
        )
    try:
        with path.open("rb") as stream:
            content = stream.read(LARGEST_BYTES + 1)
    except OSError as error:
        raise InputError(
            f"{code_prefix}-unreadable",
            expected=f"{kind} that this user may read",
            found=error.strerror or type(error).__name__,
            where=where,
            do="Change its permissions or copy it somewhere readable.",
        ) from error
    if len(content) > LARGEST_BYTES:
        raise InputError(
            f"{code_prefix}-too-large",
            expected=f"{kind} of at most {LARGEST_BYTES} bytes",
            found="a larger file",
            where=where,
            do="Give the TOML file, not the layout image; layouts are named in [layout] image.",
        )
    return content


def parse_toml(content: bytes, where: str) -> dict[str, Any]:
    """Returns the tables of a TOML file.

    Args:
        content: the bytes of the file.
        where: its base name, for messages.

    Raises:
        InputError: the bytes are not UTF-8 text.
        SettingError: the text is not TOML, or a key is nested too deeply.
    """
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError(
            "toml-not-text",
            expected="UTF-8 text",
            found=f"the byte 0x{content[error.start]:02x} at offset {error.start}",
            where=where,
            do="Save the file as UTF-8 text.",
        ) from error
    deep = _DEEP_KEY.search(text)
    if deep:
        raise SettingError(
            "toml-too-deep",
            expected=f"keys of fewer than {DEEPEST_KEY} parts",
            found=f"a deeper key starting {deep.group(0)[:30]!r}",
            where=f"{where}: line {text.count(chr(10), 0, deep.start()) + 1}",
            do="No setting of a job needs more than three parts.",
        )
    try:
        return tomllib.loads(text)
    except RecursionError as error:
        raise SettingError(
            "toml-too-deep",
            expected="lists and tables nested a few deep",
            found="hundreds of nested lists or tables",
            where=where,
            do="No setting of a job nests more than twice.",
        ) from error
    except ValueError as error:
        raise SettingError(
            "toml-syntax",
            expected="valid TOML",
            found=_one_line(str(error)),
            where=where,
            do="Correct that line; text needs quotes, and each table and key may stand once.",
        ) from error


def _one_line(text: str) -> str:
    return " ".join(text.split())[:200]
