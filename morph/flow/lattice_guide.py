"""The centrelines as a coarse network on the lattice: where each cell stands along which branch.

The lattice carries a change of pressure along a channel only by diffusion, over a time that grows with the square of
the length. So between bursts of steps the mass that still gathers in each stretch of channel is taken to a network
of the same stretches, and the pressures that would let it go are added to the cells. The lattice alone decides what it
settles to: the network only has to be roughly right to bring it there fast.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.arrays import Bools, Floats, Ints
from morph.flow.lattice_domain import LatticeDomain
from morph.settings.job import Role

STRETCH_BORES = 1.0
"""Length of a stretch of the network, in bores."""

PLACES_AT_ONCE = 1 << 18


@dataclass(frozen=True, slots=True, eq=False)
class Guide:
    """Cells on the stretches of the centrelines.

    Args:
        ends: (m, 2) nodes of each stretch. length: (m,) in cells. branch: (m,) row in `plan.branches`.
        bore: (m,) mean bore of its branch, in cells.
        held: (k,) nodes at a given pressure. pressure: (k,) their pressure, 1 at ports in, 0 at ports out.
        cell_stretch: (n,) stretch of each cell. cell_share: (n,) how far along it, 0 to 1.
    """

    ends: Ints
    length: Floats
    branch: Ints
    bore: Floats
    held: Bools
    pressure: Floats
    cell_stretch: Ints
    cell_share: Floats

    def spread(self, at_nodes: Floats) -> Floats:
        """Returns values (n,) of the cells, linear along their stretches between those at the nodes (k,)."""
        one, two = self.ends[self.cell_stretch].T
        return np.asarray(at_nodes[one] + self.cell_share * (at_nodes[two] - at_nodes[one]))

    def gather(self, of_cells: Floats) -> Floats:
        """Returns what cells (n,) hold, shared between the nodes (k,) of their stretches."""
        one, two = self.ends[self.cell_stretch].T
        k = len(self.held)
        near = np.bincount(one, of_cells * (1.0 - self.cell_share), minlength=k)
        return np.asarray(near + np.bincount(two, of_cells * self.cell_share, minlength=k))


def make_guide(plan: ChannelPlan, domain: LatticeDomain) -> Guide:
    """Returns the stretches of all branches and leads, and the nearest place on them for each cell."""
    number = {node.id: i for i, node in enumerate(plan.nodes)}
    ends: list[tuple[int, int]] = []
    lengths: list[float] = []
    branch_of: list[int] = []
    bores: list[float] = []
    samples: list[tuple[Floats, Floats, Floats]] = []
    n_nodes = len(number)
    first_stretch = []
    for row, branch in enumerate(plan.branches):
        along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1))])
        n = max(1, round(float(along[-1]) / (STRETCH_BORES * float(branch.bore_mm.mean()))))
        chain = [number[branch.start], *range(n_nodes, n_nodes + n - 1), number[branch.end]]
        n_nodes += n - 1
        first_stretch.append(len(ends))
        ends += list(itertools.pairwise(chain))
        lengths += [max(float(along[-1]) / n / domain.h_mm, 1e-3)] * n
        branch_of += [row] * n
        bores += [float(branch.bore_mm.mean()) / domain.h_mm] * n
        samples.append((branch.xyz_mm, along, np.array([float(row), float(n)])))
    held, pressure = np.zeros(n_nodes, np.bool_), np.zeros(n_nodes)
    for exit_ in plan.exits:
        if exit_.role is not Role.ACCESS:
            held[number[exit_.node]] = True
            pressure[number[exit_.node]] = float(exit_.role is Role.IN)
    stretch, share = _nearest(samples, np.array(first_stretch), domain)
    return Guide(
        np.array(ends), np.array(lengths), np.array(branch_of), np.array(bores), held, pressure, stretch, share
    )


def _nearest(samples: list[tuple[Floats, Floats, Floats]], first: Ints, domain: LatticeDomain) -> tuple[Ints, Floats]:
    """Returns the stretch (n,) of each cell and how far along it (n,) its nearest place on a centreline lies."""
    from scipy.spatial import cKDTree

    points = np.concatenate([xyz for xyz, _, _ in samples])
    along = np.concatenate([length for _, length, _ in samples])
    row = np.concatenate([np.full(len(xyz), int(info[0])) for xyz, _, info in samples])
    count = np.array([int(info[1]) for _, _, info in samples])
    total = np.array([length[-1] for _, length, _ in samples])
    tangent = np.concatenate([np.gradient(xyz, axis=0) for xyz, _, _ in samples])
    tangent /= np.maximum(np.linalg.norm(tangent, axis=1, keepdims=True), 1e-12)
    tree = cKDTree(points)
    stretch, share = np.empty(domain.n_cells, np.int64), np.empty(domain.n_cells)
    for start in range(0, domain.n_cells, PLACES_AT_ONCE):
        rows = slice(start, start + PLACES_AT_ONCE)
        places = domain.origin_mm + domain.h_mm * domain.cells[rows]
        _, near = tree.query(places)
        near = np.asarray(near)
        b = row[near]
        s = along[near] + np.einsum("ij,ij->i", places - points[near], tangent[near])
        part = np.clip(s / np.maximum(total[b], 1e-12), 0.0, 1.0) * count[b]
        within = np.minimum(part.astype(np.int64), count[b] - 1)
        stretch[rows], share[rows] = first[b] + within, part - within
    return stretch, share


def conductance(guide: Guide, viscosity: float) -> Floats:
    """Returns flow over difference of density (m,) of each stretch, as of a tube of the same volume, in lattice units.

    Q = A^2 / (8 pi viscosity length) dp (Hagen, Poiseuille), pressure a third of the density. Where channels meet, one
    branch may stand on cells of another; no stretch counts as narrower than its bore, since too large a resistance
    would correct too much.
    """
    area = np.bincount(guide.cell_stretch, minlength=len(guide.length)) / guide.length
    area = np.maximum(area, 0.25 * np.pi * guide.bore**2)
    return np.asarray(area**2 / (24.0 * np.pi * viscosity * guide.length))


def make_network(guide: Guide, weight: Floats) -> Any:
    """Returns a function from sources (k,) to the potentials (k,) of the network, 0 at its held nodes.

    Args:
        guide: the stretches.
        weight: (m,) conductance of each.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.linalg import splu

    k = len(guide.held)
    one, two = guide.ends.T
    rows, columns = np.concatenate([one, two, one, two]), np.concatenate([one, two, two, one])
    values = np.concatenate([weight, weight, -weight, -weight])
    small = 1e-9 * float(weight.max())  # holds pieces without an opening
    matrix = coo_array((values, (rows, columns)), shape=(k, k)).tocsc() + small * _eye(k)
    free = np.flatnonzero(~guide.held)
    solved = splu(matrix[free][:, free].tocsc())

    def potentials(sources: Floats) -> Floats:
        out = np.zeros(k)
        out[free] = solved.solve(sources[free])
        return out

    return potentials


def _eye(k: int) -> Any:
    from scipy.sparse import eye_array

    return eye_array(k, format="csc")


def start_density(guide: Guide, weight: Floats) -> Floats:
    """Returns the density (k,) at the nodes when the network alone carries the flow, openings at their pressures."""
    push = np.zeros(len(guide.held))
    one, two = guide.ends.T
    np.add.at(push, one, weight * guide.pressure[two])
    np.add.at(push, two, weight * guide.pressure[one])
    return np.asarray(make_network(guide, weight)(push) + guide.pressure)
