"""The Job: every setting a build reads, as frozen records; each stage gets its own slice of it.

Lengths in mm, angles in degrees (the edge of the program). Reading and validating the TOML lives
in ``settings/parse.py``; here stands only what a valid job is.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum
from pathlib import Path

from morph.read.mesh_file import LengthUnit
from morph.settings.profile import Profile
from morph.settings.sheet import (
    AcceptSettings,
    CoolantEnd,
    KeepOutSettings,
    LayoutSettings,
    LevelRule,
    MirrorAt,
    Rows,
    Samples,
    Seam,
    SeenFrom,
    WideRule,
)

__all__ = [
    "AcceptSettings",
    "CoolantEnd",
    "KeepOutSettings",
    "LayoutSettings",
    "LevelRule",
    "MirrorAt",
    "Rows",
    "Samples",
    "Seam",
    "SeenFrom",
    "WideRule",
]
"""Records of the sheet, defined in ``settings/sheet.py`` and handed on from here with those below."""


class Role(StrEnum):
    """What a port is for."""

    IN = "in"
    OUT = "out"
    ACCESS = "access"


@dataclass(frozen=True, slots=True)
class PlainEnd:
    """An end that is used as printed."""


@dataclass(frozen=True, slots=True)
class ThreadEnd:
    """A thread cut after printing; lengths that are None follow from the thread (body/end.py).

    Args:
        designation: such as "G1/4" or "M10x1".
        thread_depth_mm: full thread below the finished face. run_out_mm: what the drill goes deeper.
        drill_stock_mm: metal the drill takes per side of the printed pilot (0.3: common practice, no source).
        land_mm: diameter of the flat seal land around the thread.
    """

    designation: str
    thread_depth_mm: float | None = None
    run_out_mm: float | None = None
    drill_stock_mm: float = 0.3
    land_mm: float | None = None


@dataclass(frozen=True, slots=True)
class FaceSealEnd:
    """A seal ring in a groove in the face, machined after printing; all sizes are the user's."""

    groove_inner_mm: float
    groove_outer_mm: float
    groove_depth_mm: float
    land_mm: float


EndSettings = PlainEnd | ThreadEnd | FaceSealEnd


@dataclass(frozen=True, slots=True)
class PortSettings:
    """One [[port]]: `exit_mm` and `leave` are None when morph chooses the exit; `end` is how it is finished."""

    name: str
    role: Role
    at_mm: tuple[float, float]
    exit_mm: tuple[float, float, float] | None = None
    leave: tuple[float, float, float] | None = None
    end: EndSettings = field(default_factory=PlainEnd)


class Metal(StrEnum):
    """On which side of the carrier the metal lies."""

    TOWARD_AXIS = "toward-axis"
    AWAY_FROM_AXIS = "away-from-axis"


class TrueAt(StrEnum):
    """Where the sheet's lengths are kept."""

    DEPTH = "depth"
    FACE = "face"


@dataclass(frozen=True, slots=True)
class CarrierSettings:
    """The [carrier] table of a cylinder: exactly one of depth_mm and wall_to_face_mm is given."""

    radius_mm: float
    metal: Metal
    depth_mm: float | None = None
    wall_to_face_mm: float | None = None
    true_at: TrueAt = TrueAt.DEPTH


class ConeMap(StrEnum):
    """How the sheet lies on a cone: flat keeps its lengths, polar closes a full wrap."""

    FLAT = "flat"
    POLAR = "polar"


@dataclass(frozen=True, slots=True)
class ConeSettings:
    """The [carrier] table of a cone: `radius_mm` at the sheet's centre, `half_angle_deg` > 0 when it widens upwards."""

    radius_mm: float
    half_angle_deg: float
    metal: Metal
    depth_mm: float | None = None
    wall_to_face_mm: float | None = None
    true_at: TrueAt = TrueAt.DEPTH
    map: ConeMap = ConeMap.FLAT


@dataclass(frozen=True, slots=True)
class RevolvedSettings:
    """The [carrier] table of a revolved surface: a smooth curve runs through the `profile_mm` rows (r, z), upwards."""

    profile_mm: tuple[tuple[float, float], ...]
    metal: Metal
    depth_mm: float | None = None
    wall_to_face_mm: float | None = None
    true_at: TrueAt = TrueAt.DEPTH


class Least(StrEnum):
    """What the laying of a free-form sheet keeps least: the root mean square length error, or the worst one."""

    RMS = "rms"
    WORST = "worst"


@dataclass(frozen=True, slots=True)
class FreeformSettings:
    """The [carrier] table of a free-form surface.

    Args:
        file: the part face, STL, 3MF, OBJ, PLY or STEP.
        anchor_mm: where the sheet's centre goes; taken to the nearest point of the face.
        up: the direction of sheet y (any length); only its part along the face counts.
        metal_at_mm: a point in the metal, nearer to the part face under the sheet than to any other.
        depth_mm: see CarrierSettings.
        wall_to_face_mm: see CarrierSettings.
        true_at: where lengths are kept.
        least: which length error is made least.
    """

    file: Path
    anchor_mm: tuple[float, float, float]
    up: tuple[float, float, float]
    metal_at_mm: tuple[float, float, float]
    depth_mm: float | None = None
    wall_to_face_mm: float | None = None
    true_at: TrueAt = TrueAt.DEPTH
    least: Least = Least.RMS


class SectionShape(StrEnum):
    """The cross-section of a channel; auto is round where a round ceiling prints freely, else roofed."""

    ROUND = "round"
    ROOFED = "roofed"
    ARCHED = "arched"
    AUTO = "auto"


@dataclass(frozen=True, slots=True)
class SectionSettings:
    """The [section] table; `bore_range_mm` None means from service and process."""

    shape: SectionShape = SectionShape.AUTO
    bore_scale: float = 1.0
    bore_range_mm: tuple[float, float] | None = None
    blend_mm: float = 0.6


@dataclass(frozen=True, slots=True)
class PrintSettings:
    """The [print] table: the process profile and the build direction (part frame, any length)."""

    profile: Profile
    build_direction: tuple[float, float, float] = (0.0, 0.0, 1.0)


@dataclass(frozen=True, slots=True)
class ServiceSettings:
    """The [service] table: what must survive, not only print."""

    wall_face_mm: float = 3.0
    wall_face_bores: float = 1.0
    wall_between_mm: float = 3.0
    wall_outer_mm: float = 3.0
    wall_hole_mm: float = 3.0
    smallest_bore_mm: float = 3.0


@dataclass(frozen=True, slots=True)
class CarrierBlankSettings:
    """A blank bounded by the carrier: `margin_mm` below and above the sheet, `thickness_mm` for a shell."""

    margin_mm: tuple[float, float] = (10.0, 10.0)
    thickness_mm: float | None = None


@dataclass(frozen=True, slots=True)
class CylinderBlankSettings:
    """A cylinder about the carrier's axis from z_mm[0] to z_mm[1]."""

    radius_mm: float
    z_mm: tuple[float, float]


@dataclass(frozen=True, slots=True)
class BoxBlankSettings:
    """An axis-parallel box in the part frame."""

    min_mm: tuple[float, float, float]
    max_mm: tuple[float, float, float]


@dataclass(frozen=True, slots=True)
class MeshBlankSettings:
    """A body in a mesh file, as it lies; `unit` is what it is drawn in, None when the job does not say."""

    file: Path
    unit: LengthUnit | None = None


@dataclass(frozen=True, slots=True)
class FlangeSettings:
    """A disc about z at the foot, `height_mm` high from the foot, wider than the body."""

    radius_mm: float
    height_mm: float


@dataclass(frozen=True, slots=True)
class BlankSettings:
    """The [blank] table: its shape, which faces touch the part, where ports may come out, stock per face, flange."""

    shape: CarrierBlankSettings | CylinderBlankSettings | BoxBlankSettings | MeshBlankSettings = field(
        default_factory=CarrierBlankSettings
    )
    part_faces: tuple[str, ...] = ("carrier",)
    port_faces: tuple[str, ...] = ("foot",)
    stock_mm: tuple[tuple[str, float], ...] = ()
    flange: FlangeSettings | None = None


@dataclass(frozen=True, slots=True)
class HoleSettings:
    """One [[hole]]: starts at `at_mm`, runs along `axis`, `depth_mm` None means through; `wall_mm` None: service."""

    at_mm: tuple[float, float, float]
    axis: tuple[float, float, float]
    diameter_mm: float
    wall_mm: float | None = None
    depth_mm: float | None = None


@dataclass(frozen=True, slots=True)
class QualitySettings:
    """The [quality] table: `h_mm` None means clamp(smallest bore / 12, 0.15, 0.30)."""

    h_mm: float | None = None


class Balance(StrEnum):
    """What the bores are changed for: nothing, equal velocities, equal flows, or flow in proportion to heat."""

    NONE = "none"
    EQUAL_VELOCITY = "equal-velocity"
    EQUAL_FLOW = "equal-flow"
    BY_HEAT = "by-heat"


class Supply(StrEnum):
    """Whether all circuits hang in parallel on one supply, or each has the same supply for itself."""

    SHARED = "shared"
    PER_CIRCUIT = "per-circuit"


class FluidKind(StrEnum):
    """What the coolant is; own means that the job gives its properties."""

    WATER = "water"
    ETHYLENE_GLYCOL = "ethylene-glycol"
    PROPYLENE_GLYCOL = "propylene-glycol"
    OWN = "own"


@dataclass(frozen=True, slots=True)
class OwnFluid:
    """Properties of the user's own coolant at its inlet temperature; freezing and boiling None: not checked."""

    density_kg_m3: float
    viscosity_mpa_s: float
    conductivity_w_mk: float
    heat_capacity_j_kgk: float
    freezes_c: float | None = None
    boils_c: float | None = None


@dataclass(frozen=True, slots=True)
class FluidSettings:
    """The coolant: its kind, glycol in per cent of mass (0 for others), the user's own properties or None."""

    kind: FluidKind = FluidKind.WATER
    glycol_percent: float = 0.0
    own: OwnFluid | None = None


@dataclass(frozen=True, slots=True)
class CoolantSettings:
    """The [coolant] table; exactly one of flow_l_min, drop_bar and pump is given.

    Args:
        fluid: what flows. inlet_c: its temperature where it enters.
        flow_l_min: whole flow through the supply. drop_bar: between feed and return, hoses included. pump: path of its
            curve, flow in L/min and head in bar.
        supply: one supply for all circuits in parallel, or the same one for each.
        balance: what the bores are changed for. reversible: both flow directions count as one.
        flux: for by-heat, the path of an image of the heat flux on the sheet; None: uniform.
        check_3d: compare with a laminar 3D solution on the solid.
        hose_mm: bore and length of the hoses in series with each in port, feed and return counted together.
        pressure_bar: gauge pressure where coolant enters; None: it leaves at atmospheric pressure.
        roughness_um: sand-grain roughness everywhere; None: from the process profile.
    """

    fluid: FluidSettings = field(default_factory=FluidSettings)
    inlet_c: float = 20.0
    flow_l_min: float | None = None
    drop_bar: float | None = None
    pump: Path | None = None
    supply: Supply = Supply.SHARED
    balance: Balance = Balance.NONE
    reversible: bool = False
    flux: Path | None = None
    check_3d: bool = False
    hose_mm: tuple[float, float] | None = None
    pressure_bar: float | None = None
    roughness_um: float | None = None


@dataclass(frozen=True, slots=True)
class Job:
    """A whole valid job; `file` is the job's path (its base name alone ever reaches an output)."""

    name: str
    file: Path
    layout: LayoutSettings
    ports: tuple[PortSettings, ...]
    carrier: CarrierSettings | ConeSettings
    printing: PrintSettings
    section: SectionSettings = field(default_factory=SectionSettings)
    service: ServiceSettings = field(default_factory=ServiceSettings)
    blank: BlankSettings = field(default_factory=BlankSettings)
    holes: tuple[HoleSettings, ...] = ()
    quality: QualitySettings = field(default_factory=QualitySettings)
    accepts: tuple[AcceptSettings, ...] = ()
    keep_outs: tuple[KeepOutSettings, ...] = ()
    coolant: CoolantSettings | None = None
