"""What leads are made from and what they are: ports to be led out, the ground they share, and a lead that was found."""

from __future__ import annotations

from dataclasses import dataclass

from morph.body.blank import Blank
from morph.body.cap import TAPER
from morph.body.end import straight_run_mm
from morph.body.end_fit import EndFits
from morph.body.end_room import Land
from morph.body.finish import PLAIN, Finish
from morph.body.lead_candidate import Bend
from morph.body.lead_check import Judged
from morph.body.neighbour import Strand
from morph.body.room import Limits
from morph.core.arrays import Floats
from morph.settings.job import PortSettings
from morph.surface.carrier import Carrier

LEAST_BEND_BORES = 1.5
"""Least centreline bend radius of a lead in bores (common practice, no source)."""

STRAIGHT_BORES = 0.5
"""Least straight end square to the face, in bores, so that an end can be machined (common practice, no source)."""

NARROWING_BEND_BORES = 1.4
"""Where a lead still narrows from its port's bore it may bend this tightly: else it would have to start with a kink."""

BEND_MARGIN = 1.105
"""Bends are built this much wider than asked: a bend that clears its limit by less than a tenth is watched, and
it is judged on samples up to 1 mm apart."""


@dataclass(frozen=True, slots=True, eq=False)
class PortStart:
    """A port to be led out.

    Args:
        settings: the job's port. node: index of its node. xyz_mm: (3,).
        heading: (3,) unit, the channel's direction carried on, or None for a port amid a channel.
        into_metal: (3,) unit. bore_mm: bore of the channel there.
        finishes: the faces where an end that is not plain can be made, each with its finish.
    """

    settings: PortSettings
    node: int
    xyz_mm: Floats
    heading: Floats | None
    into_metal: Floats
    bore_mm: float
    finishes: tuple[tuple[str, Finish], ...] = ()

    def finish_on(self, face: str) -> Finish:
        """Returns the finish of an exit on `face`."""
        return dict(self.finishes).get(face, PLAIN)

    def straight_mm(self, bore_mm: float) -> float:
        """Returns the longest straight run that a finish needs behind the exit of a lead of `bore_mm`."""
        return max((straight_run_mm(finish, bore_mm) for _, finish in self.finishes), default=0.0)


@dataclass(frozen=True, slots=True, eq=False)
class Lead:
    """A lead that keeps its walls: the judged path, face and direction of its exit, and how it differs from the ideal.

    `kink_rad`: turn at the port; 0 when it carries on smoothly.
    """

    port: PortStart
    path: Judged
    face: str
    leave: Floats
    length_mm: float
    kink_rad: float


@dataclass(frozen=True, slots=True, eq=False)
class Ground:
    """What all leads share: body, carrier, limits, the laid channels, the profile's bend radius in bores.

    For one lead the blank also holds what other ends will cut, as holes, and `lands` the circles they take.
    """

    blank: Blank
    carrier: Carrier
    limits: Limits
    strands: tuple[Strand, ...]
    n_nodes: int
    bend_bores: float
    lands: tuple[Land, ...] = ()


class Blocked(Exception):
    """No legal way for one port: the best path tried and its face, and how its end fitted, for the message."""

    def __init__(self, best: tuple[Judged, str] | None, fits: EndFits) -> None:
        self.best = best
        self.fits = fits
        super().__init__()


def make_bend(ground: Ground, port: PortStart, bore_mm: float) -> Bend:
    """Returns the bends and straight ends of a lead of `bore_mm` from `port`."""
    radius = max(LEAST_BEND_BORES, ground.bend_bores) * bore_mm
    whole = port.straight_mm(bore_mm)
    start = max(port.bore_mm - BEND_MARGIN * LEAST_BEND_BORES / NARROWING_BEND_BORES * bore_mm, 0.0) / TAPER
    return Bend(radius * BEND_MARGIN, max(STRAIGHT_BORES * bore_mm, whole), bore_mm, whole, start)
