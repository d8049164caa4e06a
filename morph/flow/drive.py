"""What drives the coolant: a given flow, a given pressure drop, or a pump with its curve."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import FlowError


@dataclass(frozen=True, slots=True)
class GivenFlow:
    """The whole flow of a supply in m3/s, > 0."""

    flow_m3_s: float


@dataclass(frozen=True, slots=True)
class GivenDrop:
    """The pressure drop between feed and return in Pa, > 0."""

    drop_pa: float


@dataclass(frozen=True, slots=True, eq=False)
class PumpCurve:
    """A pump: head in Pa by flow in m3/s, straight between its points.

    Args:
        flow_m3_s: (k,) growing, from >= 0, two or more.
        head_pa: (k,) never growing, the first > 0.
    """

    flow_m3_s: Floats
    head_pa: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "flow_m3_s", frozen_floats("flow_m3_s", self.flow_m3_s, (None,)))
        object.__setattr__(self, "head_pa", frozen_floats("head_pa", self.head_pa, self.flow_m3_s.shape))
        if len(self.flow_m3_s) < 2 or self.flow_m3_s[0] < 0.0 or (np.diff(self.flow_m3_s) <= 0.0).any():
            raise ValueError("flow_m3_s: expected two or more growing flows from 0 up")
        if self.head_pa[0] <= 0.0 or (np.diff(self.head_pa) > 0.0).any():
            raise ValueError("head_pa: expected a head that never grows with flow, above 0 at first")

    def at(self, flow_m3_s: float) -> float:
        """Returns the head in Pa at a flow; below the first point the first head holds."""
        return float(np.interp(flow_m3_s, self.flow_m3_s, self.head_pa))


Drive = GivenFlow | GivenDrop | PumpCurve


def require_meeting(curve: PumpCurve, drop_at_most_pa: float, l_min: float) -> None:
    """Raises `pump-never-meets` when the pump still pushes more than the system holds at the end of its curve.

    Args:
        curve: the pump.
        drop_at_most_pa: drop of the system at the last flow of the curve.
        l_min: that flow in L/min, for the message.
    """
    head = float(curve.head_pa[-1])
    if drop_at_most_pa < head:
        raise FlowError(
            "pump-never-meets",
            expected="a pump curve that crosses the curve of the insert",
            found=f"at its last point, {l_min:.3g} L/min, the pump gives {1e-5 * head:.3g} bar and insert and hoses "
            f"take {1e-5 * drop_at_most_pa:.3g} bar",
            where="[coolant] pump",
            do="Add the points of larger flow down to where the head falls to zero.",
        )
