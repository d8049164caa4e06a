"""The channel plan of a job: bores that fit, leads to the outside, and what was lowered or merged.

Order: bores wanted from the layout, capped by faces and holes, thinned against each other, kept
smooth; then the leads, against the final channels; then the room everywhere once more, for the
record. Channel samples are refined to min(least bore / 4, 1 mm) by the layout's own curve, so a
sheet point still maps to its 3D point.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from morph.body.assemble import Parts, assemble_plan, with_bores
from morph.body.blank import Blank
from morph.body.cap import clamp_notices, fit_bores, require_least_bore_fits
from morph.body.end import list_finishes, require_groove_clear
from morph.body.lead import Ground, PortStart, lay_leads
from morph.body.neighbour import Network, Strand, make_network, polyline_arc_mm
from morph.body.plan import ChannelPlan
from morph.body.room import Limits, make_limits, measure_room
from morph.body.section import make_section_rule
from morph.core.arrays import Floats
from morph.core.errors import GeometryError
from morph.core.progress import SILENT, Progress
from morph.geometry.curve import curve_at
from morph.layout.graph import Branch
from morph.settings.job import PortSettings, SectionSettings, ServiceSettings
from morph.settings.profile import Profile
from morph.surface.wrap import WrappedGraph, push_forward, wanted_bore_mm


@dataclass(frozen=True, slots=True, eq=False)
class _Laid:
    """A channel branch with fine samples: sheet (k, 2), 3D (k, 3), and scaled layout bore (k,) before the clamp."""

    branch: Branch
    sheet_mm: Floats
    xyz_mm: Floats
    scaled_mm: Floats


def make_plan(
    wrapped: WrappedGraph,
    blank: Blank,
    job_ports: tuple[PortSettings, ...],
    section: SectionSettings,
    service: ServiceSettings,
    profile: Profile,
    progress: Progress = SILENT,
    build_direction: tuple[float, float, float] = (0.0, 0.0, 1.0),
    bores_mm: Mapping[str, Floats] | None = None,
) -> ChannelPlan:
    """Returns every channel and lead with its final bore and the room it has.

    Args:
        wrapped: the graph at depth.
        blank: the finished body.
        job_ports: the job's ports; each is the port node of that name.
        section: shape, bore scale, range and blend.
        service: walls that must survive.
        profile: what the process can do.
        progress: told between channels, leads and room.
        build_direction: from the plate into the part; roofs point that way.
        bores_mm: bores wanted (k,) at the samples of each channel by id, instead of the layout's own.

    Raises:
        SettingError: `bore-range-empty`, `leave-into-metal`, `leave-without-direction`; of an end `thread-unknown`,
            `thread-too-small`, `land-too-small`.
        GeometryError: `no-room-for-smallest-bore`, `ports-meet`, `lead-blocked`, `exit-off-port-face`,
            `exit-without-wall`, `exits-too-near`; of an end `land-not-flat`, `end-not-square`, `land-off-face`,
            `lands-overlap`, `end-without-wall`, `end-no-place`, `end-no-straight`, `groove-too-near-bore`.
    """
    limits = make_limits(section, service, profile, build_direction)
    allowed = (limits.least_bore_mm, limits.greatest_bore_mm)
    laid = [_refine(branch, wrapped, section.bore_scale, limits) for branch in wrapped.graph.branches]
    index = {node.id: k for k, node in enumerate(wrapped.graph.nodes)}
    wanted = replace(_channel_network(laid, index, allowed, bores_mm or {}), section=limits.section)
    progress.step("bores", 0, 3)
    require_least_bore_fits(blank, wanted, limits)
    fitted = fit_bores(wanted, measure_room(blank, limits, wanted.xyz_mm), limits)
    progress.step("bores", 1, 3)
    ground = Ground(blank, wrapped.carrier, limits, with_bores(fitted), len(index), profile.bend_radius_bores.value)
    rule = make_section_rule(section, profile, build_direction)
    finishes = [list_finishes(port, blank, rule, service, profile) for port in job_ports]
    starts = [
        replace(_port_start(port, wrapped, laid, fitted, index), finishes=finish)
        for port, finish in zip(job_ports, finishes, strict=True)
    ]
    for start in starts:
        require_groove_clear(start.settings, start.bore_mm, limits)
    _require_ports_apart(starts)
    leads = lay_leads(ground, starts, progress)
    progress.step("bores", 2, 3)
    notices = (
        ()
        if bores_mm
        else clamp_notices(
            [one.branch.id for one in laid],
            [one.scaled_mm for one in laid],
            [strand.arc_mm for strand in wanted.strands],
            allowed,
        )
    )
    notices = (*blank.notices, *notices)
    parts = Parts(wrapped, blank, limits, tuple(one.sheet_mm for one in laid), wanted, fitted, leads)
    plan = assemble_plan(parts, section.blend_mm, notices)
    return replace(plan, section=rule)


def _refine(branch: Branch, wrapped: WrappedGraph, scale: float, limits: Limits) -> _Laid:
    """Returns the branch with samples close enough for the least bore, every layout sample kept."""
    spacing = min(0.25 * limits.least_bore_mm, 1.0)
    coarse = wrapped.carrier.point_mm(branch.sheet_mm, wrapped.depth_mm)
    step = np.linalg.norm(np.diff(coarse, axis=0), axis=1)
    parts = np.maximum(np.ceil(1.02 * step / spacing).astype(np.int64), 1)
    place = np.concatenate([[0.0], *(k + np.arange(1, n + 1) / n for k, n in enumerate(parts))])
    whole = np.arange(len(coarse), dtype=np.float64)
    sheet = curve_at(branch.curve, np.interp(place, whole, branch.parameter))
    kept = np.flatnonzero(place == np.round(place))
    sheet[kept] = branch.sheet_mm
    bore = scale * np.interp(place, whole, branch.bore_mm)
    return _Laid(branch, sheet, wrapped.carrier.point_mm(sheet, wrapped.depth_mm), bore)


def _channel_network(
    laid: Sequence[_Laid], index: dict[str, int], allowed: tuple[float, float], bores_mm: Mapping[str, Floats]
) -> Network:
    strands = [
        Strand(
            one.branch.id,
            index[one.branch.start],
            index[one.branch.end],
            one.xyz_mm,
            polyline_arc_mm(one.xyz_mm),
            bores_mm.get(one.branch.id, wanted_bore_mm(one.scaled_mm, 1.0, allowed)),
        )
        for one in laid
    ]
    return make_network(strands, len(index))


def _require_ports_apart(starts: Sequence[PortStart]) -> None:
    """Raises `ports-meet` when two ports lie within half a bore of each other in the part.

    Apart on the sheet they may still meet where the sheet's edges do, after a full turn of the carrier.
    """
    for k, one in enumerate(starts):
        for two in starts[:k]:
            away = float(np.linalg.norm(one.xyz_mm - two.xyz_mm))
            if away < 0.5 * max(one.bore_mm, two.bore_mm):
                x, y, z = one.xyz_mm
                names = f"'{two.settings.name}' and '{one.settings.name}'"
                raise GeometryError(
                    "ports-meet",
                    expected="ports apart from each other in the part",
                    found=f"{away:.3f} mm between {names}, because the sheet's edges meet there",
                    where=f"[[port]] {names} at ({x:.2f}, {y:.2f}, {z:.2f}) mm",
                    do="Make the sheet narrower than a full turn, move one of the ports, or join the seam.",
                )


def _port_start(
    port: PortSettings, wrapped: WrappedGraph, laid: Sequence[_Laid], fitted: Network, index: dict[str, int]
) -> PortStart:
    """Returns where the lead of `port` starts: its node, the way its channel carries on, and the bore there."""
    node = {n.port: n for n in wrapped.graph.nodes}[port.name]
    ends: list[tuple[Floats, float]] = []
    for k, one in enumerate(laid):
        for at, sign in ((one.branch.start, -1.0), (one.branch.end, 1.0)):
            if at == node.id:
                sample = 0 if sign < 0.0 else -1
                along = curve_at(one.branch.curve, one.branch.parameter[[sample]], 1)
                push = push_forward(wrapped.carrier, one.sheet_mm[[sample]], along, wrapped.depth_mm)[0]
                low, high = fitted.first[k], fitted.first[k + 1]
                ends.append(
                    (sign * push / np.linalg.norm(push), float(fitted.bore_mm[low if sign < 0.0 else high - 1]))
                )
    return PortStart(
        settings=port,
        node=index[node.id],
        xyz_mm=wrapped.carrier.point_mm(node.sheet_mm[None, :], wrapped.depth_mm)[0],
        heading=ends[0][0] if len(ends) == 1 else None,
        into_metal=wrapped.carrier.into_metal(node.sheet_mm[None, :])[0],
        bore_mm=max(bore for _, bore in ends),
    )
