"""The channel solid as lattice cells: which lie inside, where their links leave it, and at what fraction.

A cell belongs to the flow when its centre lies inside the closed mesh. Every link from such a cell to a centre outside
is followed to the triangle it meets: on the flat end of an opening it carries that opening's pressure, elsewhere it is
wall at the fraction met, so that walls stand where the mesh has them and not in steps of a cell. A wall thinner than
a cell between two channels can fall between the centres and is then not seen.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from morph.body.plan import ChannelPlan
from morph.core.arrays import Floats, Ints
from morph.core.errors import FlowError
from morph.core.progress import Progress
from morph.geometry.mesh import Mesh, mesh_volume_mm3, triangle_normals
from morph.geometry.tree import cast_rays, make_tree
from morph.kernels.lattice import DIRECTIONS, Indices, Singles
from morph.settings.job import Role

BYTES_PER_CELL = 420.0
"""Peak memory per fluid cell: populations twice, their sources, links, and the moments (measured, see the tests)."""

BYTES_PER_BOX_CELL = 4.0
MOST_BYTES = 8e9
RAYS_AT_ONCE = 1 << 18
CELLS_AT_ONCE = 1 << 18

END_COSINE, END_BORES, END_WIDTH_BORES = 0.7, 0.5, 1.0
"""A triangle is the end of an opening when it faces out along it within this cosine, lies within so many bores of its
plane and within so many of its axis."""


@dataclass(frozen=True, slots=True, eq=False)
class LatticeDomain:
    """The cells of the flow and their links; work arrays, not copied.

    Args:
        h_mm: size of a cell. origin_mm: (3,) centre of cell (0, 0, 0).
        cells: (n, 3) places of the cells in the grid.
        source: (n, 18), link_place: (links, 3), link_factor: (links, 3): see kernels/lattice.py.
        link_cell: (links,) cell of each link. link_opening: (links,) row in `plan.exits`, -1 for wall.
        link_fraction: (links,) where along the link it leaves the flow, 0 to 1.
        link_direction: (links,) q of the population that comes back.
    """

    h_mm: float
    origin_mm: Floats
    cells: Indices
    source: Indices
    link_place: Indices
    link_factor: Singles
    link_cell: Ints
    link_opening: Ints
    link_fraction: Floats
    link_direction: Ints

    @property
    def n_cells(self) -> int:
        """Number of cells in the flow."""
        return len(self.cells)

    @property
    def places_mm(self) -> Floats:
        """Centres (n, 3) of the cells."""
        return np.asarray(self.origin_mm + self.h_mm * self.cells)


def predict_bytes(mesh: Mesh, h_mm: float) -> tuple[float, float]:
    """Returns about how many cells and how many bytes the flow inside `mesh` takes at cells of `h_mm`."""
    size = np.ptp(mesh.vertices_mm, axis=0) / h_mm + 3.0
    cells = abs(mesh_volume_mm3(mesh)) / h_mm**3
    return cells, cells * BYTES_PER_CELL + float(np.prod(size)) * BYTES_PER_BOX_CELL


def require_memory(mesh: Mesh, h_mm: float) -> None:
    """Refuses a lattice that would not fit.

    Raises:
        FlowError: ``lattice-too-large``.
    """
    cells, size = predict_bytes(mesh, h_mm)
    if size > MOST_BYTES:
        least = h_mm * (size / MOST_BYTES) ** (1.0 / 3.0)
        raise FlowError(
            "lattice-too-large",
            expected=f"at most {MOST_BYTES / 1e9:.0f} GB for the 3D flow check",
            found=f"{cells / 1e6:.3g} million cells and {size / 1e9:.3g} GB predicted at cells of {h_mm:.3g} mm",
            where="[coolant] check_3d",
            do=f"Raise the smallest bore so that cells may be {least:.3g} mm or more, or set check_3d = false.",
        )


def make_domain(mesh: Mesh, plan: ChannelPlan, h_mm: float, progress: Progress) -> LatticeDomain:
    """Returns the lattice inside a closed mesh of the channels, open at the ports that are in or out.

    Args:
        mesh: the channels, trimmed at their openings; closed.
        plan: its exits say where the openings are; access ports are closed in service.
        h_mm: size of a cell.
        progress: told between slabs of work.

    Raises:
        FlowError: ``lattice-too-large``, ``lattice-no-opening``.
    """
    require_memory(mesh, h_mm)
    origin = mesh.vertices_mm.min(axis=0) - (1.0 + _offsets()) * h_mm
    cells, source = _cells(mesh, origin, h_mm, progress)
    link_cell, slot = np.nonzero(source < 0)
    direction = slot + 1
    fraction, triangle = _follow(mesh, origin + h_mm * cells, link_cell, direction, h_mm, progress)
    openings = _opening_of_triangle(mesh, plan)
    opening = np.where(triangle >= 0, openings[triangle], -1)
    _require_open(plan, opening, h_mm)
    place, factor = _links(source, link_cell, direction, fraction, opening)
    source[link_cell, slot] = 19 * len(cells) + np.arange(len(link_cell), dtype=np.int32)
    return LatticeDomain(h_mm, origin, cells, source, place, factor, link_cell, opening, fraction, direction)


def _offsets() -> Floats:
    """Returns by how much of a cell (3,) the grid is shifted, so that flat faces of the mesh fall on no centre."""
    return np.array([math.sqrt(2.0) - 1.0, math.sqrt(3.0) - 1.5, math.sqrt(5.0) - 2.0])


def _cells(mesh: Mesh, origin: Floats, h_mm: float, progress: Progress) -> tuple[Indices, Indices]:
    """Returns the cells (n, 3) inside the mesh and the sources (n, 18) of their populations, -1 at links."""
    from morph.kernels.lattice_fill import column_crossings, fill_columns, join_cells

    vertices = (mesh.vertices_mm - origin) / h_mm
    n_x, n_y, n_z = (int(n) for n in np.ceil(vertices.max(axis=0)) + 2)
    count = np.zeros(n_x * n_y, np.int64)
    column_crossings(vertices, mesh.triangles, n_x, n_y, False, count, np.empty(0))
    start = np.concatenate([[0], np.cumsum(count)])
    height = np.empty(int(start[-1]))
    column_crossings(vertices, mesh.triangles, n_x, n_y, True, start[:-1].copy(), height)
    number = np.full((n_x * n_y, n_z), -1, np.int32)
    n = int(fill_columns(n_y, n_z, start, height, number, np.empty((0, 3), np.int32), False))
    cells = np.empty((n, 3), np.int32)
    fill_columns(n_y, n_z, start, height, number, cells, True)
    source = np.empty((n, 18), np.int32)
    for first in range(0, n, CELLS_AT_ONCE):
        last = min(first + CELLS_AT_ONCE, n)
        join_cells(first, last, number, n_y, cells, source)
        progress.step("flow: cells", last, n)
    return cells, source


def _follow(
    mesh: Mesh, places: Floats, link_cell: Ints, direction: Ints, h_mm: float, progress: Progress
) -> tuple[Floats, Ints]:
    """Returns the fraction (links,) at which each link meets the mesh, and the triangle (links,) met (-1: none)."""
    tree = make_tree(mesh)
    n = len(link_cell)
    fraction, triangle = np.full(n, 0.5), np.full(n, -1, np.int64)
    for first in range(0, n, RAYS_AT_ONCE):
        rows = slice(first, min(first + RAYS_AT_ONCE, n))
        way = -DIRECTIONS[direction[rows]].astype(np.float64)
        length = np.linalg.norm(way, axis=1)
        met, hit = cast_rays(tree, places[link_cell[rows]], way / length[:, None], 0.0)
        found = met <= 1.5 * length * h_mm
        fraction[rows] = np.where(found, np.clip(met / (length * h_mm), 0.0, 1.0), 0.5)
        triangle[rows] = np.where(found, hit, -1)
        progress.step("flow: walls", rows.stop, n)
    return fraction, triangle


def _opening_of_triangle(mesh: Mesh, plan: ChannelPlan) -> Ints:
    """Returns the row in `plan.exits` (m,) whose open end each triangle is, -1 for wall."""
    opening = np.full(len(mesh.triangles), -1, np.int64)
    normal, _ = triangle_normals(mesh)
    middle = mesh.vertices_mm[mesh.triangles].mean(axis=1)
    for row, exit_ in enumerate(plan.exits):
        if exit_.role is Role.ACCESS:
            continue
        away = middle - exit_.xyz_mm
        along = away @ exit_.leave
        across = np.linalg.norm(away - along[:, None] * exit_.leave, axis=1)
        is_end = (normal @ exit_.leave > END_COSINE) & (np.abs(along) < END_BORES * exit_.bore_mm)
        opening[is_end & (across < END_WIDTH_BORES * exit_.bore_mm)] = row
    return opening


def _require_open(plan: ChannelPlan, opening: Ints, h_mm: float) -> None:
    for row, exit_ in enumerate(plan.exits):
        if exit_.role is not Role.ACCESS and not (opening == row).any():
            x, y, z = exit_.xyz_mm
            raise FlowError(
                "lattice-no-opening",
                expected="an open end of the channel solid at every port that is in or out",
                found=f"no open end that cells of {h_mm:.3g} mm can see",
                where=f"port {exit_.port} at ({x:.2f}, {y:.2f}, {z:.2f}) mm",
                do="Look at the channel solid there: the lead must end in a face of the blank, wider than a cell.",
            )


def _links(
    source: Indices, link_cell: Ints, direction: Ints, fraction: Floats, opening: Ints
) -> tuple[Indices, Singles]:
    """Returns place (links, 3) and factor (links, 3) of the links, see kernels/lattice.py; openings at pressure 0."""
    back = np.where(direction % 2 == 1, direction + 1, direction - 1)
    out, own = 19 * link_cell + back, 19 * link_cell + direction
    behind = source[link_cell, back - 1]
    is_wall = opening < 0
    slope = np.where(is_wall & (behind >= 0), (1.0 - 2.0 * fraction) / (1.0 + 2.0 * fraction), 0.0)
    place = np.stack([out, np.where(behind >= 0, behind, own), own], axis=1)
    factor = np.stack([np.where(is_wall, 1.0, -1.0), slope, np.zeros(len(slope))], axis=1)
    return place.astype(np.int32), factor.astype(np.float32)
