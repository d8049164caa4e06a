"""Slow laminar flow through the channel solid in three dimensions: what geometry alone does to the split.

Stokes flow on lattice cells inside the actual mesh (lattice_domain.py; kernels/lattice.py), driven by pressure 1 at
the ports that are in and 0 at those that are out, from the pressures of a coarse network of the same centrelines
(lattice_guide.py) until neither the flows nor the mass that gathers anywhere move. It sees every bend, junction, roof
and blend as built, but no turbulence, no inertia and no roughness: it checks the geometry and the split of the
network model in its laminar limit, not the flow at the working point.

Flows are given as flow times viscosity over pressure drop, in mm^3: independent of the fluid.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Executor, ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.arrays import Floats, Ints, frozen_floats
from morph.core.errors import FlowError
from morph.core.progress import SILENT, Progress
from morph.flow.lattice_cut import make_cuts, opening_links
from morph.flow.lattice_domain import LatticeDomain, make_domain
from morph.flow.lattice_guide import Guide, conductance, make_guide, make_network, start_density
from morph.geometry.mesh import Mesh
from morph.kernels.lattice import DIRECTIONS, Singles
from morph.settings.job import Role

VISCOSITY = 0.5
"""Kinematic viscosity in lattice units: high, so that a cross-section settles in few steps."""

END_LENGTH_BORES = 0.05
"""A held pressure also frees the flow of shear across the end, which then resists by so many bores of tube less (own
measurement on round tubes at 12 to 24 cells per bore, 0.048 to 0.056); the opening is held lower by as much."""

MAGIC = 0.375
"""Product of the two relaxation times less a half each: it sets where interpolated walls stand for a parabolic flow.
3 / 16 is exact for walls half-way along links; 3 / 8 keeps round tubes in any of five directions to the grid within
0.8 % at 12 cells per bore, with a mean near zero (own measurement; 3 / 16: 1.7 % too little at worst)."""

SETTLE_TIMES = 2.5
"""Steps between two corrections, in times of the slowest decay across the widest channel, R^2 / (5.783 viscosity)."""

CORRECTION = 0.7
"""Share of the network's correction that is taken: the flow it asks for is not all there when it is measured next."""

SETTLED = 2e-4
"""Solved when no flow moves by more than this share of the total from one correction to the next, twice."""

MOST_ROUNDS = 60


@dataclass(frozen=True, slots=True, eq=False)
class LatticeFlow:
    """The flow at one resolution; flows are flow times viscosity over pressure drop, mm^3.

    Args:
        h_mm: size of a cell. cells_per_bore: smallest bore over it. n_cells: cells in the flow.
        branch_ids: as in the plan. branch_mm3: (b,) through the middle of each branch, from its start to its end.
        port_ids: names of the ports in the plan's order. port_mm3: (p,) into the channels through each port, 0 for
            access.
        total_mm3: through the insert, mean of what goes in and comes out.
        imbalance: in less out, over the total.
        steps: time steps taken. change: largest move of a flow in the last round, over the total.
    """

    h_mm: float
    cells_per_bore: float
    n_cells: int
    branch_ids: tuple[str, ...]
    branch_mm3: Floats
    port_ids: tuple[str, ...]
    port_mm3: Floats
    total_mm3: float
    imbalance: float
    steps: int
    change: float

    def __post_init__(self) -> None:
        object.__setattr__(self, "branch_mm3", frozen_floats("branch_mm3", self.branch_mm3, (len(self.branch_ids),)))
        object.__setattr__(self, "port_mm3", frozen_floats("port_mm3", self.port_mm3, (len(self.port_ids),)))

    @property
    def share(self) -> dict[str, float]:
        """Flow of each branch over the total, signed from its start to its end."""
        return {name: float(q / self.total_mm3) for name, q in zip(self.branch_ids, self.branch_mm3, strict=True)}


@dataclass(slots=True)
class _Bed:
    """The work arrays of a solution and the threads that step it."""

    domain: LatticeDomain
    pool: Executor
    parts: list[tuple[int, int, int, int]]
    state: Singles
    following: Singles
    density: Floats
    flux: Floats
    ports: Floats

    def each(self, work: Callable[[int, int, int, int], object]) -> None:
        """Calls work(first cell, last cell, first link, last link) for each part, side by side."""
        for future in [self.pool.submit(work, *part) for part in self.parts]:
            future.result()

    def step(self, n: int) -> None:
        """Takes n time steps."""
        from morph.kernels.lattice import lattice_step, return_links

        domain = self.domain
        even = np.float32(1.0 / (0.5 + 3.0 * VISCOSITY))
        odd = np.float32(1.0 / (0.5 + MAGIC / (3.0 * VISCOSITY)))
        for _ in range(n):
            state, following = self.state, self.following

            def one(first: int, last: int, low: int, high: int, a: Singles = state, b: Singles = following) -> None:
                return_links(low, high, a, domain.n_cells, domain.link_place, domain.link_factor)
                lattice_step(first, last, a, b, domain.source, even, odd)

            self.each(one)
            self.state, self.following = following, state

    def measure(self) -> Floats:
        """Returns the density (n,), kept in `density`; the flux (n, 3) is in `flux`."""
        from morph.kernels.lattice import lattice_moments

        self.each(lambda first, last, _low, _high: lattice_moments(first, last, self.state, self.density, self.flux))
        return self.density

    def add(self, change: Floats) -> None:
        """Adds to the density (n,) of the cells."""
        from morph.kernels.lattice import lattice_shift

        self.each(lambda first, last, _low, _high: lattice_shift(first, last, self.state, change))


def solve_channel_flow(
    mesh: Mesh, plan: ChannelPlan, cells_per_bore: float = 12.0, progress: Progress = SILENT
) -> LatticeFlow:
    """Returns the Stokes flow through the channels between the ports that are in and those that are out.

    Args:
        mesh: the channel solid trimmed at its openings, closed (`ChannelSolid.trimmed`).
        plan: its centrelines, bores and exits; access ports are closed.
        cells_per_bore: cells across the smallest bore of the plan, at least 4.
        progress: told after every round; may raise Cancelled.

    Raises:
        FlowError: ``lattice-too-coarse``, ``lattice-too-large``, ``lattice-no-opening``, ``lattice-not-settled``.
    """
    smallest = min(float(branch.bore_mm.min()) for branch in plan.branches)
    if not 4.0 <= cells_per_bore < np.inf:
        raise FlowError(
            "lattice-too-coarse",
            expected="at least 4 cells across the smallest bore",
            found=f"{cells_per_bore:.3g}",
            where=f"3D flow check, smallest bore {smallest:.3g} mm",
            do="Ask for more cells; 12 holds flows within 1.5 %.",
        )
    domain = make_domain(mesh, plan, smallest / cells_per_bore, progress)
    guide = make_guide(plan, domain)
    cuts = make_cuts(plan, domain, guide)
    from morph.kernels.workers import worker_count

    workers = worker_count()
    with ThreadPoolExecutor(workers) as pool:
        bed = _make_bed(domain, pool, workers, len(plan.exits))
        return _settle(bed, plan, guide, cuts, cells_per_bore, progress)


def _make_bed(domain: LatticeDomain, pool: Executor, workers: int, n_ports: int) -> _Bed:
    n = domain.n_cells
    bounds = np.linspace(0, n, workers + 1).astype(np.int64)
    link_bounds = np.searchsorted(domain.link_cell, bounds)
    parts = [(int(bounds[i]), int(bounds[i + 1]), int(link_bounds[i]), int(link_bounds[i + 1])) for i in range(workers)]
    size = 19 * n + len(domain.link_cell)
    return _Bed(
        domain,
        pool,
        parts,
        np.zeros(size, np.float32),
        np.zeros(size, np.float32),
        np.zeros(n),
        np.zeros((n, 3)),
        np.zeros(n_ports),
    )


def _steps_between(plan: ChannelPlan, h_mm: float) -> int:
    widest = max(float(np.median(branch.bore_mm)) for branch in plan.branches)
    return max(20, int(np.ceil(SETTLE_TIMES * (0.5 * widest / h_mm) ** 2 / (5.783 * VISCOSITY))))


def _settle(
    bed: _Bed, plan: ChannelPlan, guide: Guide, cuts: tuple[Ints, ...], cells_per_bore: float, progress: Progress
) -> LatticeFlow:
    """Returns the settled flow; see the head of lattice_guide.py for the correction between rounds."""
    weight = conductance(guide, VISCOSITY)
    network = make_network(guide, weight)
    bed.add(guide.spread(start_density(guide, weight)))
    openings = opening_links(bed.domain, len(plan.exits))
    burst = _steps_between(plan, bed.domain.h_mm)
    before, calm, steps, change = np.full(len(cuts) + len(openings), np.inf), 0, 0, np.inf
    taken = CORRECTION
    for done in range(MOST_ROUNDS):
        _hold_pressures(bed, plan)
        bed.step(burst - 1)
        gathered = -bed.measure()
        bed.step(1)
        gathered += bed.measure()
        steps += burst
        through, ports = _flows(bed, cuts, openings)
        bed.ports = ports
        total = 0.5 * float(np.abs(ports).sum())
        now = np.concatenate([through, ports])
        last, change = change, float(np.abs(now - before).max() / total) if total > 0.0 else np.inf
        taken *= 0.5 if last < change < np.inf else 1.0  # it swings: less of the correction
        before = now
        progress.step("flow: 3D check", done + 1, MOST_ROUNDS)
        calm = calm + 1 if change < SETTLED else 0
        if calm == 2:
            break
        bed.add(taken * guide.spread(network(guide.gather(gathered))))
    else:
        raise FlowError(
            "lattice-not-settled",
            expected=f"flows that move by less than {SETTLED:.0e} of the total between rounds",
            found=f"{change:.2g} after {steps} steps",
            where="3D flow check",
            do="Set [coolant] check_3d = false and report the job; the network's figures stand unchecked.",
        )
    scale = 3.0 * VISCOSITY * bed.domain.h_mm**3
    return LatticeFlow(
        h_mm=bed.domain.h_mm,
        cells_per_bore=cells_per_bore,
        n_cells=bed.domain.n_cells,
        branch_ids=tuple(branch.id for branch in plan.branches),
        branch_mm3=scale * through,
        port_ids=tuple(exit_.port for exit_ in plan.exits),
        port_mm3=scale * ports,
        total_mm3=scale * total,
        imbalance=float(ports.sum() / total),
        steps=steps,
        change=change,
    )


def _hold_pressures(bed: _Bed, plan: ChannelPlan) -> None:
    """Sets the openings' pressures where their links are cut.

    The method holds a pressure half-way along a link; where the opening cuts it at the fraction d, the pressure there
    is the opening's less (d - 1/2) of the fall over one link, taken from the two cells behind.
    """
    domain = bed.domain
    density = bed.measure()
    rows = np.flatnonzero(domain.link_opening >= 0)
    held = np.array([float(exit_.role is Role.IN) for exit_ in plan.exits])[domain.link_opening[rows]]
    cell, q = domain.link_cell[rows], domain.link_direction[rows]
    back = np.where(q % 2 == 1, q + 1, q - 1)
    at = domain.source[cell, back - 1]
    inside = at < 19 * domain.n_cells
    rise = np.where(inside, density[cell] - density[np.where(inside, at // 19, 0)], 0.0)
    value = held + (0.5 - domain.link_fraction[rows]) * rise - _end_loss(bed, plan)[domain.link_opening[rows]]
    weight = np.where((DIRECTIONS[q] != 0).sum(axis=1) == 1, 1.0 / 18.0, 1.0 / 36.0)
    domain.link_factor[rows, 2] = (2.0 * weight * value).astype(np.float32)


def _end_loss(bed: _Bed, plan: ChannelPlan) -> Floats:
    """Returns the fall of density (p,) each opening must be given less, from the flow into it at the moment."""
    bore = np.array([exit_.bore_mm for exit_ in plan.exits]) / bed.domain.h_mm
    return np.asarray(END_LENGTH_BORES * 3.0 * 128.0 * VISCOSITY * bed.ports / (np.pi * bore**3))


def _flows(bed: _Bed, cuts: tuple[Ints, ...], openings: tuple[Ints, ...]) -> tuple[Floats, Floats]:
    """Returns the flow over each cut, and into the channels through each opening, in lattice units."""
    from morph.kernels.lattice import flow_across

    domain, state = bed.domain, bed.state
    through = np.array([flow_across(state, links) for links in cuts])
    ports = np.zeros(len(openings))
    for row, links in enumerate(openings):
        out = state[domain.link_place[links, 0]].astype(np.float64)
        ports[row] = float((domain.link_factor[links, 2] - 2.0 * out).sum())
    return through, ports
