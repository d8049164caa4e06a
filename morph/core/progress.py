"""Progress of long stages: a stage name, how much is done, and a way to stop.

Numerics call ``progress.step(stage, done, total)`` between slabs of work; the default does
nothing. A front end may raise Cancelled from it.
"""

from __future__ import annotations

from typing import Protocol


class Progress(Protocol):
    """What a stage reports to."""

    def step(self, stage: str, done: int, total: int) -> None:
        """Takes note that `done` of `total` parts of `stage` are finished; may raise Cancelled."""


class Silent:
    """The Progress that says nothing."""

    def step(self, stage: str, done: int, total: int) -> None:
        """Does nothing."""


SILENT = Silent()
