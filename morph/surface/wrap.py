"""The wrapped graph: the channel graph laid on its carrier at depth.

Every sheet sample maps through the carrier, so a sheet point and its 3D point agree to 1e-9 mm;
lengths are integrals of |J t| along the sheet curve, not chords.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.core.arrays import Floats, frozen_floats, unit_rows
from morph.core.errors import SettingError
from morph.core.tolerance import BUILD_BORE_MM
from morph.geometry.curve import curve_at, gauss_on_spans
from morph.layout.graph import Branch, ChannelGraph
from morph.settings.job import CarrierSettings, ConeSettings, SectionSettings, ServiceSettings
from morph.settings.profile import Profile
from morph.surface.carrier import Carrier

LEAST_BORE_MM = 0.5
"""No process leaves a smaller channel open (common practice, no source), and the field would lose it."""

LENGTH_ORDER = 20
"""Gauss points per knot span for lengths: a span that turns by 90 degrees is still exact to about 1e-10."""


@dataclass(frozen=True, slots=True, eq=False)
class WrappedBranch:
    """A branch in the part frame, sample by sample beside the layout's branch of the same id.

    Args:
        id: the branch id.
        xyz_mm: (k, 3) centreline. tangent: (k, 3) unit. into_metal: (k, 3) unit, away from the part face.
        length_mm: arc length at depth by quadrature.
    """

    id: str
    xyz_mm: Floats
    tangent: Floats
    into_metal: Floats
    length_mm: float

    def __post_init__(self) -> None:
        points = frozen_floats("xyz_mm", self.xyz_mm, (None, 3))
        object.__setattr__(self, "xyz_mm", points)
        for name in ("tangent", "into_metal"):
            object.__setattr__(self, name, frozen_floats(name, getattr(self, name), (len(points), 3)))


@dataclass(frozen=True, slots=True)
class Distortion:
    """How far the map is from keeping the sheet, over the channels at depth, as ratios minus 1.

    `length_error_max`, `length_error_rms` over both principal stretches; `area_error_max`;
    `angle_error_max_deg`; `face_scale`: length on the face over length on the sheet along x.
    """

    length_error_max: float
    length_error_rms: float
    area_error_max: float
    angle_error_max_deg: float
    face_scale: float


@dataclass(frozen=True, slots=True, eq=False)
class WrappedGraph:
    """The layout on its carrier: `branches[i]` belongs to `graph.branches[i]`, `nodes_mm (n, 3)` likewise."""

    graph: ChannelGraph
    carrier: Carrier
    depth_mm: float
    nodes_mm: Floats
    branches: tuple[WrappedBranch, ...]
    distortion: Distortion

    def __post_init__(self) -> None:
        object.__setattr__(self, "nodes_mm", frozen_floats("nodes_mm", self.nodes_mm, (len(self.graph.nodes), 3)))


def bore_range_mm(section: SectionSettings, service: ServiceSettings, profile: Profile) -> tuple[float, float]:
    """Returns the least and greatest bore allowed: the job's own, or what service and process leave.

    The process leaves its bore band (and what meshing may take on both sides) above the smallest bore, so that a
    bore built at the least one still passes after its band.

    Raises:
        SettingError: `bore-range-empty` when the least is below LEAST_BORE_MM or exceeds the greatest.
    """
    if section.bore_range_mm is not None:
        low, high, where = *section.bore_range_mm, "[section] bore_range_mm"
    else:
        smallest = max(service.smallest_bore_mm, profile.smallest_bore_mm.value)
        low = smallest + profile.bore_band_mm.value + BUILD_BORE_MM
        high = profile.largest_bore_mm.value
        where = f"[service] smallest_bore_mm and the process profile {profile.name}"
    if not LEAST_BORE_MM <= low <= high < np.inf:
        raise SettingError(
            "bore-range-empty",
            expected=f"a least bore of {LEAST_BORE_MM} mm or more, not above the greatest",
            found=f"{low:.3f} mm to {high:.3f} mm",
            where=where,
            do="Give [section] bore_range_mm with two increasing bores, or lower smallest_bore_mm.",
        )
    return low, high


def wanted_bore_mm(layout_mm: Floats, scale: float, allowed_mm: tuple[float, float]) -> Floats:
    """Returns the bores (k,) wanted: the layout's own times `scale`, clamped to `allowed_mm`."""
    return np.clip(layout_mm * scale, *allowed_mm)


def choose_depth_mm(
    carrier: CarrierSettings | ConeSettings,
    graph: ChannelGraph,
    section: SectionSettings,
    service: ServiceSettings,
    profile: Profile,
) -> float:
    """Returns the depth of the centrelines below the face, in mm.

    That is `depth_mm`, or `wall_to_face_mm` plus half the widest bore after scale and range.

    Raises:
        SettingError: `depth-not-one-way` unless exactly one of the two is given; `bore-range-empty`.
    """
    depth, wall = carrier.depth_mm, carrier.wall_to_face_mm
    if depth is not None and wall is None:
        return depth
    if wall is None or depth is not None:
        raise SettingError(
            "depth-not-one-way",
            expected="exactly one of depth_mm and wall_to_face_mm",
            found="neither" if depth is None else "both",
            where="[carrier]",
            do="Keep depth_mm (to the centreline) or wall_to_face_mm (to the channel wall), not both.",
        )
    allowed = bore_range_mm(section, service, profile)
    widest = max(
        (float(wanted_bore_mm(branch.bore_mm, section.bore_scale, allowed).max()) for branch in graph.branches),
        default=allowed[0],
    )
    return wall + 0.5 * widest


def wrap_graph(graph: ChannelGraph, carrier: Carrier, depth_mm: float) -> WrappedGraph:
    """Returns `graph` laid on `carrier` at `depth_mm`, sample by sample, with its distortion."""
    sheet = np.array([node.sheet_mm for node in graph.nodes]).reshape(-1, 2)
    branches = tuple(_wrap_branch(branch, carrier, depth_mm) for branch in graph.branches)
    return WrappedGraph(
        graph=graph,
        carrier=carrier,
        depth_mm=depth_mm,
        nodes_mm=carrier.point_mm(sheet, depth_mm),
        branches=branches,
        distortion=measure_distortion(graph, carrier, depth_mm),
    )


def _wrap_branch(branch: Branch, carrier: Carrier, depth_mm: float) -> WrappedBranch:
    along = curve_at(branch.curve, branch.parameter, 1)
    return WrappedBranch(
        id=branch.id,
        xyz_mm=carrier.point_mm(branch.sheet_mm, depth_mm),
        tangent=unit_rows(push_forward(carrier, branch.sheet_mm, along, depth_mm)),
        into_metal=carrier.into_metal(branch.sheet_mm),
        length_mm=measure_length_mm(branch, carrier, depth_mm),
    )


def push_forward(carrier: Carrier, sheet_mm: Floats, vectors: Floats, depth_mm: float) -> Floats:
    """Returns the sheet vectors (k, 2) at sheet points (k, 2) as vectors (k, 3) in the part frame at depth."""
    return np.asarray(np.einsum("kij,kj->ki", carrier.jacobian(sheet_mm, depth_mm), vectors), dtype=np.float64)


def measure_length_mm(branch: Branch, carrier: Carrier, depth_mm: float) -> float:
    """Returns the length of `branch` at `depth_mm`: the integral of |J t| by Gauss quadrature on each knot span."""
    parameter, weight = gauss_on_spans(branch.curve, LENGTH_ORDER)
    sheet = curve_at(branch.curve, parameter)
    speed = push_forward(carrier, sheet, curve_at(branch.curve, parameter, 1), depth_mm)
    return float(weight @ np.linalg.norm(speed, axis=1))


def measure_distortion(graph: ChannelGraph, carrier: Carrier, depth_mm: float) -> Distortion:
    """Returns how far the map departs from the sheet along the channels, weighted by their length on the sheet.

    Stretches are the singular values of J at depth: s1 >= s2. Length error s - 1, area error s1 s2 - 1,
    angle error 2 asin((s1 - s2) / (s1 + s2)) (Tissot 1859, the greatest change of an angle).
    """
    if not graph.branches:
        return Distortion(0.0, 0.0, 0.0, 0.0, 1.0)
    spans = [(branch.curve, *gauss_on_spans(branch.curve)) for branch in graph.branches]
    sheet = np.concatenate([curve_at(curve, parameter) for curve, parameter, _ in spans])
    weight = np.concatenate(
        [w * np.linalg.norm(curve_at(curve, parameter, 1), axis=1) for curve, parameter, w in spans]
    )
    stretch = np.linalg.svd(carrier.jacobian(sheet, depth_mm), compute_uv=False)
    error = stretch - 1.0
    angle = 2.0 * np.arcsin(np.clip((stretch[:, 0] - stretch[:, 1]) / stretch.sum(axis=1), 0.0, 1.0))
    across = np.linalg.norm(carrier.jacobian(sheet, 0.0)[:, :, 0], axis=1)
    return Distortion(
        length_error_max=float(np.abs(error).max()),
        length_error_rms=float(np.sqrt(weight @ (error**2).mean(axis=1) / weight.sum())),
        area_error_max=float(np.abs(stretch.prod(axis=1) - 1.0).max()),
        angle_error_max_deg=float(np.degrees(angle.max())),
        face_scale=float(weight @ across / weight.sum()),
    )
