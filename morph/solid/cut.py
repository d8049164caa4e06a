"""The insert: the printed blank with the swept channels cut out, its openings found on the result."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from morph.body.blank import Blank
from morph.body.plan import ChannelPlan
from morph.core.progress import SILENT, Progress
from morph.geometry.mesh import Mesh, measure_condition, mesh_volume_mm3
from morph.solid.blank import blank_mesh
from morph.solid.body import arrays_of, body_from, body_of, require_valid
from morph.solid.channel import WHAT
from morph.solid.openings import find_openings
from morph.solid.result import ChannelSolid, Insert
from morph.solid.tidy import make_file_mesh

__all__ = ["blank_mesh", "expected_channel_genus", "expected_genus", "make_finished", "make_insert"]


def make_insert(solid: ChannelSolid, blank: Blank, plan: ChannelPlan, progress: Progress = SILENT) -> Insert:
    """Returns the insert as printed: `blank` with its stock, minus the swept channels.

    Args:
        solid: the channels.
        blank: the body with its faces and their stock.
        plan: names the branches in messages.
        progress: told between steps; may raise Cancelled.

    Raises:
        GeometryError: ``solid-empty`` when no metal is left, ``solid-not-closed``.
    """
    progress.step("insert: cut", 0, 3)
    what = f"the insert with {len(plan.branches)} branches cut"
    channels, channel_source = body_of(solid.swept, WHAT)
    printed = blank_mesh(blank, printed=True)
    metal, _ = body_of(printed, "the blank")
    progress.step("insert: cut", 1, 3)
    body = metal - channels
    require_valid(body, what)
    vertices, triangles, source = arrays_of(body)
    progress.step("insert: cut", 2, 3)
    mesh, label = make_file_mesh(vertices, triangles, (source == channel_source).astype(np.int64), what)
    insert = Insert(
        mesh=mesh,
        channel_triangle=label,
        blank_volume_mm3=mesh_volume_mm3(printed),
        blank_genus=measure_condition(printed).genus,
        openings=find_openings(mesh, label, blank),
    )
    progress.step("insert: cut", 3, 3)
    return insert


def make_finished(solid: ChannelSolid, blank: Blank) -> Mesh | None:
    """Returns the insert after its stock is machined off, or None when no face carries stock.

    It is the finished blank minus the swept channels, not the printed insert cut again: so no cut runs along
    a face that is there already. Holes and threads are made later and are not cut.

    Raises:
        GeometryError: ``solid-empty`` when no metal is left, ``solid-not-closed``.
    """
    if not any(face.stock_mm > 0.0 for face in blank.faces):
        return None
    channels, _ = body_of(solid.swept, WHAT)
    bare = blank_mesh(blank, printed=False)
    body = body_from(bare.vertices_mm, bare.triangles, "the finished blank")[0] - channels
    require_valid(body, "the finished insert")
    vertices, triangles, _ = arrays_of(body)
    return make_file_mesh(vertices, triangles, np.zeros(len(triangles), np.int64), "the finished insert")[0]


def expected_genus(blank_genus: int, circuits: Iterable[tuple[int, int]]) -> int:
    """Returns the genus an insert must have: that of its blank plus, per circuit, loops + openings - 1.

    A circuit of L loops with n openings on the skin adds the handles of its own wall and n - 1 more, because n tubes
    from the skin to one connected wall close n - 1 rings through the metal.

    Args:
        blank_genus: of the blank before cutting.
        circuits: (loops, openings) of each connected piece of the channel plan that opens at least once.

    >>> expected_genus(0, [(0, 2)])  # a straight hole
    1
    >>> expected_genus(1, [(3, 2), (0, 3)])
    7
    """
    return blank_genus + sum(loops + openings - 1 for loops, openings in circuits)


def expected_channel_genus(circuits: Iterable[tuple[int, int]]) -> int:
    """Returns the genus the channel solid must have: the loops of all circuits together."""
    return sum(loops for loops, _ in circuits)
