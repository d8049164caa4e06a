"""Progress on a terminal or in a log: one line per stage on stderr, with the seconds it took."""

from __future__ import annotations

import os
import sys
import time
from pathlib import Path
from typing import TextIO

_DOING = {
    "layout": "channel graph out of the density",
    "surface": "graph laid on the carrier at depth",
    "body": "blank, room for every bore, leads",
    "flow": "flow and pressure in every branch",
    "solid": "channels as one closed body",
    "insert": "channels cut from the blank",
    "flow-3d": "laminar flow in the solid, against the network",
    "check": "walls, openings, ceilings, powder",
    "export": "meshes, curves, tables",
    "report": "figures and page",
}
_WITH_KERNELS = {"solid": "; compiling, first run only: about half a minute", "check": "; compiling, first run only"}


def kernels_are_cold() -> bool:
    """Returns whether no compiled kernel lies in the cache, so that the first use takes long."""
    import morph.kernels  # noqa: F401  (names the cache folder)

    folder = Path(os.environ["NUMBA_CACHE_DIR"])
    return not any(folder.rglob("*.nbc")) if folder.is_dir() else True


class StageLines:
    """A Progress that writes a line when a stage begins and ends it with the seconds when the next one does.

    Args:
        stream: where the lines go; None is stderr.
    """

    def __init__(self, stream: TextIO | None = None) -> None:
        self._stream = stream or sys.stderr
        self._seen: set[str] = set()
        self._begin: float | None = None
        self._cold: bool | None = None

    def step(self, stage: str, done: int, total: int) -> None:
        """Begins a line when `stage` is a stage of the build not seen yet; steps inside a stage say nothing."""
        del done, total
        if stage not in _DOING or stage in self._seen:
            return
        self._end_line()
        self._seen.add(stage)
        if self._cold is None:
            self._cold = kernels_are_cold()
        note = _WITH_KERNELS.get(stage, "") if self._cold else ""
        self._write(f"  {stage:<8} {_DOING[stage]}{note} ...")
        self._begin = time.monotonic()

    def close(self) -> None:
        """Ends the last line."""
        self._end_line()

    def _end_line(self) -> None:
        if self._begin is not None:
            self._write(f" {time.monotonic() - self._begin:.1f} s\n")
            self._begin = None

    def _write(self, text: str) -> None:
        self._stream.write(text)
        self._stream.flush()
