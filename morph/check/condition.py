"""Condition of the written meshes: closed, one body, as many circuits as planned, and the right genus.

Genus by Euler's formula. The channels of a circuit with L loops are a body of genus L; cutting them
with K openings out of a blank of genus g leaves genus g + sum over circuits of (L + K - 1).
"""

from __future__ import annotations

from morph.body.plan import ChannelPlan
from morph.core.verdict import Outcome, Verdict
from morph.core.words import counted
from morph.geometry.crossings import measure_crossings
from morph.geometry.mesh import Mesh, MeshCondition, measure_condition
from morph.layout.graph import count_loops
from morph.solid.cut import expected_channel_genus, expected_genus
from morph.solid.result import ChannelSolid, Insert

COUNTED = "counted on the written triangles"


def circuit_loops(plan: ChannelPlan) -> list[tuple[int, int]]:
    """Returns loops and openings of each circuit of `plan`."""
    by_id = {branch.id: branch for branch in plan.branches}
    found = []
    for ids in plan.circuits:
        branches = [by_id[name] for name in ids]
        nodes = sorted({name for branch in branches for name in (branch.start, branch.end)})
        number = {name: index for index, name in enumerate(nodes)}
        _, loops = count_loops(len(nodes), [(number[b.start], number[b.end]) for b in branches])
        found.append((loops, sum(exit_.node in number for exit_ in plan.exits)))
    return found


def check_closed(mesh: Mesh, what: str, condition: MeshCondition | None = None) -> Verdict:
    """Returns the `closed` row of one mesh: every edge between exactly two triangles that agree which side is out."""
    found = measure_condition(mesh) if condition is None else condition
    wrong = found.open_edges + found.odd_edges
    return Verdict(
        "closed",
        Outcome.PASS if found.closed else Outcome.FAIL,
        f"The mesh of the {what} is {'closed and consistent' if found.closed else 'not closed'}: {found.open_edges} "
        f"open edges, {found.odd_edges} shared wrongly, {len(mesh.triangles)} triangles.",
        value=float(wrong),
        unit="count",
        limit=0.0,
        limit_is="equal",
        source=COUNTED,
        hint="" if found.closed else "Set [quality] h_mm a little smaller or larger and build again.",
    )


def _count_row(code: str, text: str, value: int, limit: int, source: str, hint: str) -> Verdict:
    return Verdict(
        code,
        Outcome.PASS if value == limit else Outcome.FAIL,
        text,
        value=float(value),
        unit="count",
        limit=float(limit),
        limit_is="equal",
        source=source,
        hint="" if value == limit else hint,
    )


def check_condition(insert: Insert, solid: ChannelSolid, plan: ChannelPlan) -> list[Verdict]:
    """Returns the `closed`, `crossings`, `bodies` and `genus` rows of insert and channels."""
    whole, channels = measure_condition(insert.mesh), measure_condition(solid.trimmed)
    crossings = measure_crossings(insert.mesh).pairs
    n = len(plan.circuits)
    split = "Look for branches whose bore vanishes, or circuits that touch; see wall-between."
    rows = [
        check_closed(insert.mesh, "insert", whole),
        check_closed(solid.trimmed, "channels", channels),
        _count_row(
            "crossings",
            f"{counted(crossings, 'pair')} of the written insert's triangles cross each other.",
            crossings,
            0,
            COUNTED,
            "Set [quality] h_mm a little smaller and build again.",
        ),
        _count_row(
            "bodies",
            f"The insert is {counted(whole.bodies, 'body', 'bodies')} (1 expected).",
            whole.bodies,
            1,
            COUNTED,
            split,
        ),
        _count_row(
            "bodies",
            f"The channels are {counted(channels.bodies, 'body', 'bodies')} for {counted(n, 'circuit')}.",
            channels.bodies,
            n,
            COUNTED,
            split,
        ),
    ]
    return rows + _genus_rows(insert, plan, whole, channels)


def _genus_rows(insert: Insert, plan: ChannelPlan, whole: MeshCondition, channels: MeshCondition) -> list[Verdict]:
    """Returns the `genus` rows of channels and insert, or one row that says why the genus tells nothing."""
    # A fillet may bridge less metal than its radius.
    merged = any(merge.wall_mm <= plan.blend_mm for merge in plan.merges)
    if merged or not (whole.closed and channels.closed):
        why = "branches run together" if merged else "a mesh is not closed"
        return [Verdict("genus", Outcome.NOT_CHECKED, f"The genus says nothing while {why}.", source=COUNTED)]
    circuits = circuit_loops(plan)
    loops = expected_channel_genus(circuits)
    expected = expected_genus(insert.blank_genus, circuits)
    hint = "A loop was closed or opened that the layout does not have; look at wall-between and the openings."
    return [
        _count_row(
            "genus",
            f"The channels have genus {channels.genus}; the plan has {counted(loops, 'loop')}.",
            channels.genus,
            loops,
            "Euler's formula: the genus of a circuit is its loops",
            hint,
        ),
        _count_row(
            "genus",
            f"The insert has genus {whole.genus}; {expected} by its loops and openings.",
            whole.genus,
            expected,
            "Euler's formula: blank + sum over circuits of (loops + openings - 1)",
            hint,
        ),
    ]
