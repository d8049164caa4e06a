"""The finish of an exit as a record: what is printed there, what is cut later, and the room that takes.

A plain exit is used as printed. A thread is drilled and cut, a seal groove is milled, after printing:
both take metal around the exit's axis from the finished face inwards, the cut, and a flat circle of
the face around it, the land.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.hole import Hole
from morph.body.thread import Thread
from morph.core.arrays import Floats
from morph.settings.job import FaceSealEnd, PlainEnd


@dataclass(frozen=True, slots=True)
class ThreadHole:
    """A thread to be cut: its sizes, and depths from the finished face in mm.

    Args:
        thread: sizes. thread_depth_mm: full thread. run_out_mm: what the drill goes deeper.
        drill_stock_mm: least metal per side that the drill takes from the printed pilot.
    """

    thread: Thread
    thread_depth_mm: float
    run_out_mm: float
    drill_stock_mm: float

    @property
    def drill_depth_mm(self) -> float:
        """How far the drill goes below the finished face."""
        return self.thread_depth_mm + self.run_out_mm


@dataclass(frozen=True, slots=True)
class Finish:
    """How an exit is finished; lengths of 0 mean that there is none.

    Args:
        detail: plain, the thread, or the seal groove.
        pilot_mm: widest bore printed at the exit, over `cut_depth_mm`; 0: the lead's own bore.
        cut_mm, cut_depth_mm: diameter and depth of what is cut later around the axis.
        land_mm: diameter of the flat circle of the face the seal needs.
        pilot_reach_mm: how far the ball that sweeps the pilot, with its roof, reaches from its centre.
    """

    detail: PlainEnd | ThreadHole | FaceSealEnd
    pilot_mm: float = 0.0
    cut_mm: float = 0.0
    cut_depth_mm: float = 0.0
    land_mm: float = 0.0
    pilot_reach_mm: float = 0.0

    @property
    def is_plain(self) -> bool:
        """Whether the exit is used as printed."""
        return isinstance(self.detail, PlainEnd)

    @property
    def _reach_back_mm(self) -> float:
        return max(0.5 * self.pilot_mm, self.pilot_reach_mm)

    def straight_mm(self, bore_mm: float, taper: float) -> float:
        """Returns the straight run behind the exit: the cut, and the taper from the pilot to a lead of `bore_mm`."""
        if self.pilot_mm == 0.0:
            return self.cut_depth_mm
        wait = self._reach_back_mm if self.pilot_mm < bore_mm else 0.0
        return self.cut_depth_mm + wait + abs(self.pilot_mm - bore_mm) / taper

    def bore_mm(self, lead_mm: Floats, from_exit_mm: Floats, taper: float) -> Floats:
        """Returns the bores (k,) of a lead whose own are `lead_mm (k,)`, `from_exit_mm (k,)` before its exit.

        A channel that widens is swept by balls that reach back over its narrow part, with their roofs, so from a
        narrow pilot the taper starts that far behind the cut.
        """
        if self.pilot_mm == 0.0:
            return lead_mm
        behind = from_exit_mm - self.cut_depth_mm
        wide = np.maximum(lead_mm, self.pilot_mm - taper * np.maximum(behind, 0.0))
        narrow = np.minimum(lead_mm, self.pilot_mm + taper * np.maximum(behind - self._reach_back_mm, 0.0))
        widened = np.where(lead_mm > self.pilot_mm, narrow, wide)
        return np.where(behind <= 0.0, self.pilot_mm, widened)

    def cut(self, port: str, xyz_mm: Floats, leave: Floats, wall_mm: float) -> tuple[Hole, ...]:
        """Returns what is cut later at an exit as a hole kept clear by `wall_mm`; nothing for a plain exit.

        Args:
            port: the port's name.
            xyz_mm: (3,) on the finished face.
            leave: (3,) unit, out of the metal.
            wall_mm: least metal around it.
        """
        if self.cut_mm == 0.0:
            return ()
        name = f"{self.words} of {port}"
        return (Hole(name, xyz_mm, -leave, self.cut_depth_mm, self.cut_mm, wall_mm),)

    @property
    def words(self) -> str:
        """What the finish is called in a message."""
        if isinstance(self.detail, ThreadHole):
            return f"thread {self.detail.thread.designation}"
        return "seal groove" if isinstance(self.detail, FaceSealEnd) else "plain end"


PLAIN = Finish(PlainEnd())
