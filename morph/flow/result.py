"""What the flow stage found: flow, velocity, regime and pressure of every branch, totals with their band."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from morph.flow.drive import Drive
from morph.flow.fluid import Fluid
from morph.flow.network import FlowNetwork
from morph.flow.solve_network import NetworkState

LAMINAR_TO, TURBULENT_FROM = 2300.0, 4000.0
"""Reynolds numbers between which the flow may be either (common textbook limits)."""

DEAD_SHARE = 0.25
"""Water slower than this share of the mean velocity counts as dead (common practice, no source)."""


class Regime(StrEnum):
    """How a branch flows, by its mean Reynolds number; between 2300 and 4000 both laws are possible."""

    STILL = "still"
    LAMINAR = "laminar"
    TRANSITION = "transition, uncertain"
    TURBULENT = "turbulent"


@dataclass(frozen=True, slots=True)
class BranchFlow:
    """One branch or lead.

    Args:
        id: of the branch. is_channel: it lies on the carrier; else a lead. through: on a way from in to out.
        flow_l_min: positive from `from` to `to`.
        velocity_m_s, velocity_max_m_s: mean along its length, and at its narrowest; without sign.
        reynolds: mean along its length, on the hydraulic diameter. regime: by that.
        drop_bar: total pressure at `from` less that at `to`; the four parts below add up to it.
        friction_bar, bends_bar, ends_bar: with the sign of the flow; ends are entry, exit and steps of the bore.
        junctions_bar: what its junctions take, or give back where a faster flow draws it along.
        drop_between_bar: friction by the laminar and by the turbulent law alone, only in transition.
    """

    id: str
    is_channel: bool
    through: bool
    flow_l_min: float
    velocity_m_s: float
    velocity_max_m_s: float
    reynolds: float
    regime: Regime
    drop_bar: float
    friction_bar: float
    bends_bar: float
    ends_bar: float
    junctions_bar: float
    drop_between_bar: tuple[float, float] | None


@dataclass(frozen=True, slots=True)
class SupplyFlow:
    """One supply: its flow, the drop between feed and return, and how much of that the hoses take."""

    flow_l_min: float
    drop_bar: float
    hose_bar: float


@dataclass(frozen=True, slots=True)
class FlowBand:
    """What the printed bores may do to a supply: (low, nominal, high).

    Args:
        bore_mm: how far a printed bore may differ from nominal, all bores alike.
        drop_at_flow_bar: drop at the nominal flow.
        flow_at_drop_l_min: flow at the nominal drop.
    """

    bore_mm: float
    drop_at_flow_bar: tuple[float, float, float]
    flow_at_drop_l_min: tuple[float, float, float]


@dataclass(frozen=True, slots=True)
class DeadWater:
    """A branch that hardly flows: its id and its velocity over the mean of the channels; 0: still."""

    id: str
    velocity_ratio: float


@dataclass(frozen=True, slots=True, eq=False)
class FlowResult:
    """The flow through an insert.

    Args:
        fluid: the coolant at inlet temperature. drive: what moves it. reverse: fed by the out ports.
        branches: in the order of the plan. node_bar: total pressure above the return by node id; None where
            no supply reaches.
        supplies: flow and drop. bands: the same with the bore band, one per supply.
        velocity_mean_m_s: length-weighted mean over channel branches with through-flow.
        velocity_max_over_min, velocity_p95_over_p5: of the mean velocities of those branches; the
            percentiles by length.
        dead_water: slowest first.
        static_least_bar: least absolute static pressure anywhere. static_least_in: the branch of that.
        network, state: what was solved.
    """

    fluid: Fluid
    drive: Drive
    reverse: bool
    branches: tuple[BranchFlow, ...]
    node_bar: tuple[tuple[str, float | None], ...]
    supplies: tuple[SupplyFlow, ...]
    bands: tuple[FlowBand, ...]
    velocity_mean_m_s: float
    velocity_max_over_min: float
    velocity_p95_over_p5: float
    dead_water: tuple[DeadWater, ...]
    static_least_bar: float
    static_least_in: str
    network: FlowNetwork
    state: NetworkState
