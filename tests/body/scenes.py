"""Jobs made by hand for the body stage: a graph on a carrier in a blank, and the plan of it."""

from __future__ import annotations

from dataclasses import dataclass, field

from morph.body.blank import Blank, make_blank
from morph.body.make import make_plan
from morph.body.plan import ChannelPlan
from morph.body.room import Limits, make_limits
from morph.layout.graph import ChannelGraph
from morph.settings.job import (
    BlankSettings,
    CarrierBlankSettings,
    CarrierSettings,
    ConeMap,
    ConeSettings,
    FlangeSettings,
    HoleSettings,
    Metal,
    PortSettings,
    Role,
    SectionSettings,
    SeenFrom,
    ServiceSettings,
)
from morph.settings.profile import Profile
from morph.surface.make import RoundCarrier, make_carrier
from morph.surface.wrap import WrappedGraph, wrap_graph
from tests.surface.graphs import make_profile


@dataclass(frozen=True)
class Scene:
    """Everything the body stage reads, with defaults that build."""

    graph: ChannelGraph
    radius_mm: float = 34.0
    depth_mm: float = 8.0
    metal: Metal = Metal.TOWARD_AXIS
    seen_from: SeenFrom = SeenFrom.PART
    half_angle_deg: float = 0.0
    map: ConeMap = ConeMap.FLAT
    shape: object = None
    part_faces: tuple[str, ...] = ("carrier",)
    port_faces: tuple[str, ...] = ("foot",)
    stock_mm: tuple = ()
    holes: tuple[HoleSettings, ...] = ()
    service: ServiceSettings = field(default_factory=ServiceSettings)
    # Round numbers for hand-worked figures; by itself the range starts a band above the smallest bore.
    section: SectionSettings = field(default_factory=lambda: SectionSettings(bore_range_mm=(3.0, 12.0)))
    profile: Profile = None
    exits: dict = None
    flange: FlangeSettings = None

    @property
    def made_profile(self) -> Profile:
        return self.profile or make_profile()

    @property
    def carrier(self) -> RoundCarrier:
        settings = CarrierSettings(self.radius_mm, self.metal, depth_mm=self.depth_mm)
        if self.half_angle_deg:
            settings = ConeSettings(
                self.radius_mm, self.half_angle_deg, self.metal, depth_mm=self.depth_mm, map=self.map
            )
        return make_carrier(settings, self.graph.size_mm, self.seen_from, self.depth_mm)

    @property
    def blank(self) -> Blank:
        settings = BlankSettings(
            self.shape or CarrierBlankSettings((15.0, 15.0)),
            self.part_faces,
            self.port_faces,
            self.stock_mm,
            self.flange,
        )
        return make_blank(settings, self.holes, self.carrier, self.graph.size_mm, self.service)

    @property
    def wrapped(self) -> WrappedGraph:
        return wrap_graph(self.graph, self.carrier, self.depth_mm)

    @property
    def limits(self) -> Limits:
        return make_limits(self.section, self.service, self.made_profile)

    @property
    def ports(self) -> tuple[PortSettings, ...]:
        named = [node for node in self.graph.nodes if node.port]
        more = self.exits or {}
        return tuple(
            PortSettings(n.port, Role.OUT if k else Role.IN, tuple(n.sheet_mm), **more.get(n.port, {}))
            for k, n in enumerate(named)
        )

    def plan(self) -> ChannelPlan:
        return make_plan(self.wrapped, self.blank, self.ports, self.section, self.service, self.made_profile)
