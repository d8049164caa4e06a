"""The clear-text exchange structure of ISO 10303-21: literals, and numbered entity instances.

Only what the curve file needs: text, numbers, references, enumerations and lists. Instances are
numbered in the order they are added, so the same content gives the same bytes.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

REAL_DIGITS = 12


def text(value: str) -> str:
    r"""Returns `value` as a string literal: quotes and backslashes doubled, other letters as \X2\ or \X4\.

    >>> text("it's")
    "'it''s'"
    """
    out = []
    for letter in value:
        number = ord(letter)
        if letter in "'\\":
            out.append(letter * 2)
        elif 32 <= number < 127:
            out.append(letter)
        elif number <= 0xFFFF:
            out.append(f"\\X2\\{number:04X}\\X0\\")
        else:
            out.append(f"\\X4\\{number:08X}\\X0\\")
    return "'" + "".join(out) + "'"


def real(value: float) -> str:
    """Returns `value` as a real literal, which must hold a decimal point.

    >>> real(3.0), real(-0.0), real(1.5e-7)
    ('3.', '0.', '1.5E-07')
    """
    digits = f"{value + 0.0:.{REAL_DIGITS}G}"
    mantissa, exponent_sign, exponent = digits.partition("E")
    if "." not in mantissa:
        mantissa += "."
    return mantissa + exponent_sign + exponent


def ref(number: int) -> str:
    """Returns the reference to instance `number`."""
    return f"#{number}"


def refs(numbers: Iterable[int]) -> str:
    """Returns a list of references."""
    return "(" + ",".join(map(ref, numbers)) + ")"


def reals(values: Iterable[float]) -> str:
    """Returns a list of real literals."""
    return "(" + ",".join(map(real, values)) + ")"


def integers(values: Iterable[int]) -> str:
    """Returns a list of integer literals."""
    return "(" + ",".join(str(int(value)) for value in values) + ")"


class Data:
    """The DATA section while it grows: `add` returns the number of the new instance."""

    def __init__(self) -> None:
        self._lines: list[str] = []

    def add(self, entity: str, *arguments: str) -> int:
        """Adds one instance of `entity` with written `arguments` and returns its number."""
        return self.add_written(f"{entity}({','.join(arguments)})")

    def add_written(self, instance: str) -> int:
        """Adds an instance that is already written out (several types in one) and returns its number."""
        self._lines.append(f"#{len(self._lines) + 1}={instance};")
        return len(self._lines)

    def lines(self) -> Sequence[str]:
        """Returns the lines of the section in order."""
        return tuple(self._lines)


def exchange_bytes(header: Sequence[str], data: Data) -> bytes:
    """Returns the whole file: frame, `header` lines and the instances of `data`, in ASCII with line feeds."""
    lines = ["ISO-10303-21;", "HEADER;", *header, "ENDSEC;", "DATA;", *data.lines(), "ENDSEC;", "END-ISO-10303-21;"]
    return ("\n".join(lines) + "\n").encode("ascii")
