"""Tables of numbers as text (.csv): one row of the grid per line, separated by comma, semicolon, tab or blanks.

With semicolons, tabs or blanks a comma is a decimal comma. Lines that start with # are remarks.
"""

from __future__ import annotations

import io
import re

import numpy as np

from morph.core.errors import InputError
from morph.read.image_fault import LARGEST_SIDE, Decoded, require_shape, too_large

LONGEST_LINE = LARGEST_SIDE * 32
WORDS = {",": "commas", ";": "semicolons", "\t": "tabs", " ": "blanks"}
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*([eE][+-]?\d+)?|\.\d+([eE][+-]?\d+)?|nan|inf(inity)?)", re.IGNORECASE)


def read_table(content: bytes, name: str) -> Decoded:
    """Returns the numbers of a text table, first line first.

    Raises:
        InputError: not text, too large, a cell that is no number, or rows of unequal length.
    """
    lines = _lines(content, name)
    separator, rows = _separator(lines[0][1]), []
    decimal_comma = separator != "," and any("," in text for _, text in lines[:20])
    n_columns = len(_cells(lines[0][1], separator))
    for number, text in lines:
        plain = text.replace(",", ".") if decimal_comma else text
        rows.append(_row(plain, separator, n_columns, number, name))
        if len(rows) == 1:
            require_shape((len(lines), n_columns), name)
    value = np.vstack(rows)
    words = WORDS[separator] + (", decimal comma" if decimal_comma else "")
    return Decoded(value, f"text table of {value.shape[1]} x {value.shape[0]} values, separated by {words}")


def _refuse(expected: str, found: str, line: int, name: str) -> InputError:
    return InputError(
        "image-table",
        expected=expected,
        found=found,
        where=f"{name} line {line}" if line else name,
        do="Write one row of the grid per line, plain numbers 0..1, without headings (or behind #).",
    )


def _lines(content: bytes, name: str) -> list[tuple[int, str]]:
    """Returns the numbered lines that hold data."""
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise _refuse("UTF-8 text", f"other bytes at position {error.start}", 0, name) from error
    found = []
    for number, line in enumerate(io.StringIO(text), 1):
        plain = line.strip(" \r\n")
        if plain and not plain.startswith("#"):
            if len(plain) > LONGEST_LINE:
                raise too_large(f"a line of {len(plain)} characters", name)
            found.append((number, plain))
        if len(found) > LARGEST_SIDE:
            raise too_large(f"more than {LARGEST_SIDE} rows", name)
    if not found:
        raise _refuse("rows of numbers", "none", 0, name)
    return found


def _separator(text: str) -> str:
    for mark in (";", "\t"):
        if mark in text:
            return mark
    if "," in text and not re.search(r"\d,\d+ +\d", text):
        return ","
    return " "


def _cells(text: str, separator: str) -> list[str]:
    return text.split() if separator == " " else text.removesuffix(separator).split(separator)


def _row(text: str, separator: str, n_columns: int, number: int, name: str) -> np.ndarray:
    cells = _cells(text, separator)
    if len(cells) != n_columns:
        raise _refuse(f"{n_columns} values, as in the first row", f"{len(cells)} values", number, name)
    try:
        row = np.array(cells, dtype=np.float64)
    except ValueError:
        row = np.empty(0)
    if len(row) != n_columns or "_" in text:
        bad = next((cell.strip() for cell in cells if not _NUMBER.fullmatch(cell.strip())), cells[0])
        raise _refuse("a number in every cell", f'"{bad[:30].encode("unicode_escape").decode()}"', number, name)
    return row
