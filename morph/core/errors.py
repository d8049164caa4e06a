"""The errors a user can cause, each with a stable code and one sentence that says what to do.

Every raise names a code that stands in one of the tables under ``core/codes/`` (cause and cure,
printed by ``morph explain CODE``). A failed check is not an error: it is a Verdict.
"""

from __future__ import annotations


class MorphError(Exception):
    """A bad input or an impossible request: what was expected, what was found, where, what to do.

    Args:
        code: stable name such as ``depth-past-axis``; explained by ``morph explain``.
        expected: what would have been right.
        found: what was there instead, with its value.
        where: file and key, branch id, or place in mm.
        do: the next step for the user.
    """

    def __init__(self, code: str, *, expected: str, found: str, where: str, do: str) -> None:
        self.code = code
        self.expected = expected
        self.found = found
        self.where = where
        self.do = do
        super().__init__(self.sentence())

    def sentence(self) -> str:
        """Returns the error as one line for a person."""
        return f"{self.where}: found {self.found}; expected {self.expected}. {self.do}"


class InputError(MorphError):
    """A file or an array is not what it should be."""


class SettingError(MorphError):
    """A job or profile setting is missing, unknown, of the wrong type or out of range."""


class GeometryError(MorphError):
    """The shapes asked for cannot exist together."""


class FlowError(MorphError):
    """The coolant cannot flow as asked."""


class ExportError(MorphError):
    """A result could not be written."""


class Cancelled(Exception):
    """Raised by a Progress to stop a long stage; the command line turns it into exit status 130."""
