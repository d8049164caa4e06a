"""The network against the channels in three dimensions, both at creeping flow.

The network is solved with a liquid so viscous that only its laminar law, its section factors and its junction
lengths speak; the lattice solves Stokes flow in the actual solid at two resolutions. What is compared is the share of
the total each branch carries, and the total at the same pressure drop. It judges geometry and split, not turbulence,
roughness or the losses that grow with velocity.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.arrays import Floats, frozen_floats
from morph.core.errors import FlowError
from morph.core.progress import SILENT, Progress
from morph.core.verdict import Outcome, Verdict
from morph.flow.drive import GivenDrop
from morph.flow.lattice import LatticeFlow, solve_channel_flow
from morph.flow.lattice_domain import predict_bytes
from morph.flow.network import FlowNetwork
from morph.flow.solve_network import Liquid, NetworkSolver
from morph.geometry.mesh import Mesh

CELLS_PER_BORE, LEAST_CELLS_PER_BORE = 12.0, 6.0
"""Cells across the smallest bore: flows of round tubes are then within 1 %; fewer than the least say nothing."""

COARSE_RATIO = 1.5
MOST_CELLS = 2e6

SPLIT_LIMIT, TOTAL_LIMIT = 0.02, 0.10
"""Shares of the total flow; of the total itself. Beyond, the network's figures carry that much doubt."""

CREEPING = Liquid(1000.0, 10.0)
"""Density kg/m3, viscosity Pa s: with 10 Pa across an insert the Reynolds number stays below 1e-3."""

CREEPING_DROP_PA = 10.0

SOURCE = "Stokes flow on the channel solid (own lattice solution) against the network's laminar limit"


@dataclass(frozen=True, slots=True, eq=False)
class FlowCheck3D:
    """The comparison; flows are flow times viscosity over pressure drop, mm^3, positive from start to end.

    Args:
        fine: the lattice solution that counts. coarse: the same with cells 1.5 times as large.
        branch_ids: as in the plan. network_mm3: (b,) of the network. total_network_mm3: through all its ports.
        spread: (b,) by how much the share of each branch may still move with the resolution: the difference of the two
            solutions over 1.25, as an error of second order would leave it.
        split_error: (b,) share on the lattice less share in the network.
        total_error: total on the lattice over that of the network, less 1. total_spread: as spread.
    """

    fine: LatticeFlow
    coarse: LatticeFlow
    branch_ids: tuple[str, ...]
    network_mm3: Floats
    total_network_mm3: float
    spread: Floats
    split_error: Floats
    total_error: float
    total_spread: float

    def __post_init__(self) -> None:
        for name in ("network_mm3", "spread", "split_error"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (len(self.branch_ids),)))


def check_flow_3d(mesh: Mesh, plan: ChannelPlan, network: FlowNetwork, progress: Progress = SILENT) -> FlowCheck3D:
    """Returns the lattice's flow beside that of the network.

    Args:
        mesh: the channel solid trimmed at its openings (`ChannelSolid.trimmed`).
        plan: what it was made from.
        network: made from the same plan; its hoses are left out.
        progress: told after every round; may raise Cancelled.

    Raises:
        FlowError: ``lattice-too-large``, ``lattice-no-opening``, ``lattice-not-settled``, ``flow-not-converged``.
    """
    cells = choose_cells_per_bore(mesh, plan)
    creeping, total = creeping_flow_mm3(network)
    coarse = solve_channel_flow(mesh, plan, cells / COARSE_RATIO, progress)
    fine = solve_channel_flow(mesh, plan, cells, progress)
    left = 1.0 / (COARSE_RATIO**2 - 1.0)
    share = fine.branch_mm3 / fine.total_mm3
    return FlowCheck3D(
        fine=fine,
        coarse=coarse,
        branch_ids=fine.branch_ids,
        network_mm3=creeping,
        total_network_mm3=total,
        spread=left * np.abs(share - coarse.branch_mm3 / coarse.total_mm3),
        split_error=share - creeping / total,
        total_error=fine.total_mm3 / total - 1.0,
        total_spread=left * abs(fine.total_mm3 - coarse.total_mm3) / total,
    )


def creeping_flow_mm3(network: FlowNetwork) -> tuple[Floats, float]:
    """Returns flow times viscosity over pressure drop of each branch (b,), and of all ports that are in together."""
    bare = replace(network, hose=None)
    state = NetworkSolver(bare).solve(CREEPING, GivenDrop(CREEPING_DROP_PA))
    flow = 1e9 * CREEPING.viscosity_pa_s / CREEPING_DROP_PA * state.pipe_flow_m3_s[: len(bare.branch_ids)]
    at_port = np.isin(bare.end, [port.node for port in bare.ports])
    return flow, 0.5 * float(np.abs(flow[at_port]).sum())


def choose_cells_per_bore(mesh: Mesh, plan: ChannelPlan) -> float:
    """Returns 12 cells across the smallest bore, or as many as keep the lattice below its largest number of cells.

    Raises:
        FlowError: ``lattice-too-large`` when that leaves fewer than 6.
    """
    smallest = min(float(branch.bore_mm.min()) for branch in plan.branches)
    cells, _ = predict_bytes(mesh, smallest / CELLS_PER_BORE)
    fits = CELLS_PER_BORE * float(np.cbrt(min(1.0, MOST_CELLS / max(cells, 1.0))))
    if fits < LEAST_CELLS_PER_BORE:
        raise FlowError(
            "lattice-too-large",
            expected=f"{LEAST_CELLS_PER_BORE:.0f} cells across the smallest bore within {MOST_CELLS / 1e6:.0f} million",
            found=f"room for {fits:.2g} cells across {smallest:.3g} mm",
            where="[coolant] check_3d",
            do="Raise the smallest bore, or set check_3d = false.",
        )
    return fits


def flow_check_verdicts(check: FlowCheck3D) -> tuple[Verdict, Verdict]:
    """Returns a row for the split and one for the total; both pass or watch, a network cannot fail an insert."""
    worst = int(np.abs(check.split_error).argmax())
    order = np.argsort(-np.abs(check.split_error), kind="stable")
    over = tuple(check.branch_ids[i] for i in order if abs(check.split_error[i]) + check.spread[i] > SPLIT_LIMIT)
    split = abs(float(check.split_error[worst]))
    band = float(check.spread[worst])
    theirs = abs(float(check.network_mm3[worst])) / check.total_network_mm3
    ours = abs(float(check.fine.branch_mm3[worst])) / check.fine.total_mm3
    fine, way = check.fine, "more" if check.total_error > 0.0 else "less"
    how = f"{fine.cells_per_bore:.3g} cells of {fine.h_mm:.3g} mm across the smallest bore, {fine.n_cells} cells"
    scope = "It checks geometry and split at creeping flow, not turbulence."
    rows = (
        ("flow-3d-split", split, band, SPLIT_LIMIT, over or (check.branch_ids[worst],),
         f"In three dimensions {check.branch_ids[worst]} carries {100.0 * ours:.1f} % of the total flow, in "
         f"the network {100.0 * theirs:.1f} %: the largest difference ({how}). {scope}",
         "Take the flows of the branches named with this much doubt, or change the junction they share."),
        ("flow-3d-total", abs(check.total_error), check.total_spread, TOTAL_LIMIT, (),
         f"In three dimensions the insert lets {100.0 * abs(check.total_error):.1f} % {way} "
         f"through than in the network at the same creeping pressure drop ({how}). {scope}",
         "Take the pressure drop with this much doubt; short branches between wide junctions are the usual reason."),
    )  # fmt: skip
    made = [
        Verdict(
            code,
            Outcome.PASS if value + spread <= limit else Outcome.WATCH,
            text,
            value=100.0 * value,
            unit="%",
            limit=100.0 * limit,
            limit_is="most",
            band=100.0 * spread,
            source=SOURCE,
            branch_ids=ids,
            hint=hint,
        )
        for code, value, spread, limit, ids, text, hint in rows
    ]
    return made[0], made[1]
