"""One table of a settings file, read key by key: every value is checked, every unknown key refused.

A Table is made with the keys it knows and those that belong to a part which does not exist yet;
the getters return plain Python values of the promised type, or raise a SettingError that names
file, table, key, value and limit.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Mapping
from enum import StrEnum
from typing import Any, NoReturn, TypeVar

from morph.core.errors import SettingError

Choice = TypeVar("Choice", bound=StrEnum)

LONGEST_TEXT = 1024


def show(value: Any) -> str:
    """Returns `value` as it would stand in a TOML file, shortened to 60 characters.

    >>> show(True), show("a"), show([1, 2.5])
    ('true', '"a"', '[1, 2.5]')
    """
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, str):
        text = '"' + value[:80].encode("unicode_escape").decode("ascii") + '"'
    elif isinstance(value, list):
        text = "[" + ", ".join(show(item) for item in value[:8]) + (", ..." if len(value) > 8 else "") + "]"
    elif isinstance(value, dict):
        text = f"a table of {len(value)} keys"
    elif isinstance(value, int) and abs(value) > 10**15:
        text = f"a whole number of {value.bit_length()} bits"
    else:
        text = str(value)
    return text if len(text) <= 60 else text[:57] + "..."


def nearest(word: str, known: Iterable[str]) -> str:
    """Returns a sentence naming the known words most like `word`, or all of them when none is like it."""
    names = sorted(known)
    close = difflib.get_close_matches(word[:64], names, n=3, cutoff=0.5)
    if close:
        return "Did you mean " + " or ".join(close) + "?"
    return "Known: " + ", ".join(names) + "."


class Table:
    """A table of a settings file and where it stands.

    Args:
        values: the parsed table.
        file: base name of the file.
        label: how the table is called in messages, such as "[carrier]"; "" for the top level.
        known: keys that can be read.
        later: keys of parts that do not exist yet, each with what it belongs to.

    Raises:
        SettingError: a key is unknown, or belongs to a part that does not exist yet.
    """

    def __init__(
        self, values: Any, file: str, label: str, known: Iterable[str], later: Mapping[str, str] | None = None
    ) -> None:
        self.file = file
        self.label = label
        self._known = frozenset(known)
        later = later or {}
        if not isinstance(values, dict):
            raise SettingError(
                "setting-type",
                expected="a table",
                found=show(values),
                where=self.where(),
                do=f"Write {label} on a line of its own and its keys below it.",
            )
        self._values: dict[str, Any] = values
        for key in values:
            if key in later:
                self.not_available(key, later[key])
            if key not in self._known:
                raise SettingError(
                    "setting-unknown",
                    expected="a setting morph knows",
                    found=f"the unknown key {show(key)}",
                    where=self.where(),
                    do=nearest(key, self._known | set(later)),
                )

    def where(self, key: str = "") -> str:
        """Returns file, table and key for a message."""
        return ": ".join(part for part in (self.file, f"{self.label} {key}".strip()) if part)

    def has(self, key: str) -> bool:
        """Returns whether the key stands in the table."""
        return key in self._values

    def raw(self, key: str) -> Any:
        """Returns the parsed value of a key, or None when it is absent."""
        return self._values.get(key)

    def refuse(self, code: str, key: str, *, expected: str, found: str | None = None, do: str) -> NoReturn:
        """Raises a SettingError about `key`; `found` defaults to its value."""
        said = show(self._values.get(key)) if found is None else found
        raise SettingError(code, expected=expected, found=said, where=self.where(key), do=do)

    def not_available(self, key: str, part: str) -> NoReturn:
        """Raises the error for a setting that morph recognises but whose part does not exist yet."""
        self.refuse(
            "not-available",
            key,
            expected="a setting of a part that exists in this version",
            do=f"{part} is not available yet; remove or change this setting.",
        )

    def not_used(self, keys: Iterable[str], because: str) -> None:
        """Refuses the first of `keys` that stands in the table, because another setting makes it meaningless."""
        for key in sorted(keys):
            if self.has(key):
                self.refuse("setting-conflict", key, expected=f"no {key} {because}", do=f"Remove {key}.")

    def require(self, key: str) -> Any:
        """Returns the parsed value of a key that must be there."""
        if key not in self._values:
            self.refuse(
                "setting-missing",
                key,
                expected="a value",
                found="nothing",
                do=f"Add a line {key} = ... to {self.label or 'the top of the file'}.",
            )
        return self._values[key]

    def text(self, key: str) -> str:
        """Returns a required text without control characters, 1 to 1024 characters."""
        value = self.require(key)
        if not isinstance(value, str):
            self.refuse("setting-type", key, expected="text in quotes", do="Write the value in quotes.")
        if not value or len(value) > LONGEST_TEXT or not value.isprintable():
            self.refuse(
                "setting-text",
                key,
                expected=f"1 to {LONGEST_TEXT} printable characters",
                found=f"{len(value)} characters, {show(value)}",
                do="Write it without line breaks and control characters.",
            )
        return value

    def choice(self, key: str, kind: type[Choice], default: Choice | None = None) -> Choice:
        """Returns one of the values of an enum; `default` None means that the key is required."""
        if default is not None and not self.has(key):
            return default
        return kind(self.word(key, [item.value for item in kind]))

    def word(self, key: str, allowed: Iterable[str], later: Mapping[str, str] | None = None) -> str:
        """Returns a required text that is one of `allowed`; words in `later` are refused as not available."""
        value = self.require(key)
        later = later or {}
        allowed = list(allowed)
        if not isinstance(value, str):
            self.refuse(
                "setting-type", key, expected="one of " + ", ".join(allowed), do="Write one of these words in quotes."
            )
        if value in later:
            self.not_available(key, later[value])
        if value not in allowed:
            self.refuse("setting-choice", key, expected="one of " + ", ".join(allowed), do=nearest(value, allowed))
        return value

    def number(
        self,
        key: str,
        default: float | None = None,
        *,
        above: float | None = None,
        least: float | None = None,
        most: float | None = None,
        unit: str = "mm",
    ) -> float:
        """Returns a finite number within its limits.

        Args:
            key: the key.
            default: the value when the key is absent; None means that it is required.
            above: the value must be larger than this.
            least: the value must be at least this.
            most: the value must be at most this.
            unit: unit of the value in messages, "" for none.

        Raises:
            SettingError: missing, not a number, not finite, or out of range.
        """
        if default is not None and not self.has(key):
            return default
        return self._checked(key, self.require(key), above, least, most, unit)

    def optional_number(
        self,
        key: str,
        *,
        above: float | None = None,
        least: float | None = None,
        most: float | None = None,
        unit: str = "mm",
    ) -> float | None:
        """Returns a finite number within its limits, or None when the key is absent."""
        return self._checked(key, self._values[key], above, least, most, unit) if self.has(key) else None

    def numbers(
        self,
        key: str,
        count: int,
        *,
        above: float | None = None,
        least: float | None = None,
        most: float | None = None,
        unit: str = "mm",
    ) -> tuple[float, ...]:
        """Returns a required list of `count` finite numbers, each within the limits.

        Raises:
            SettingError: missing, not a list of that many numbers, not finite, or out of range.
        """
        value = self.require(key)
        if not isinstance(value, list) or len(value) != count:
            example = "[" + ", ".join(["0.0"] * count) + "]"
            self.refuse("setting-type", key, expected=f"a list of {count} numbers", do=f"Write it like {example}.")
        return tuple(self._checked(key, item, above, least, most, unit) for item in value)

    def names(self, key: str, allowed: Iterable[str]) -> tuple[str, ...]:
        """Returns a required list of distinct words, each one of `allowed`."""
        value = self.require(key)
        allowed = list(allowed)
        if not isinstance(value, list) or not all(isinstance(item, str) for item in value):
            self.refuse(
                "setting-type", key, expected="a list of names in quotes", do='Write it like ["' + allowed[0] + '"].'
            )
        for item in value:
            if item not in allowed:
                self.refuse(
                    "setting-choice",
                    key,
                    expected="names out of " + ", ".join(allowed),
                    found=show(item),
                    do=nearest(item, allowed),
                )
        if len(set(value)) != len(value):
            self.refuse("setting-conflict", key, expected="each name once", do="Remove the repeated name.")
        return tuple(value)

    def tables(self, key: str, most: int) -> list[Any]:
        """Returns a list of tables such as [[port]], empty when absent, at most `most` of them."""
        value = self._values.get(key, [])
        if not isinstance(value, list):
            self.refuse(
                "setting-type", key, expected=f"a list of tables [[{key}]]", do=f"Write [[{key}]] with double brackets."
            )
        if len(value) > most:
            self.refuse(
                "setting-range",
                key,
                expected=f"at most {most} tables [[{key}]]",
                found=f"{len(value)} of them",
                do="Remove some.",
            )
        return value

    def _checked(
        self, key: str, value: Any, above: float | None, least: float | None, most: float | None, unit: str
    ) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            self.refuse(
                "setting-type",
                key,
                expected=f"a number{f' in {unit}' if unit else ''}",
                found=show(value),
                do="Write a plain number without quotes or unit.",
            )
        try:
            number = float(value)
        except OverflowError:
            number = math.inf
        if not math.isfinite(number):
            self.refuse(
                "setting-not-finite", key, expected="a finite number", found=show(value), do="Write a plain number."
            )
        if (
            (above is not None and not number > above)
            or (least is not None and number < least)
            or (most is not None and number > most)
        ):
            self.refuse(
                "setting-range",
                key,
                expected=_range_text(above, least, most, unit),
                found=f"{show(value)}{f' {unit}' if unit else ''}",
                do="Give a value in that range.",
            )
        return number + 0.0


def _range_text(above: float | None, least: float | None, most: float | None, unit: str) -> str:
    parts = []
    if above is not None:
        parts.append(f"more than {above:g}")
    if least is not None:
        parts.append(f"at least {least:g}")
    if most is not None:
        parts.append(f"at most {most:g}")
    return " and ".join(parts) + (f" {unit}" if unit else "")
