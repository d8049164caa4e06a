"""What the checks look at: the written insert, the plan it was made from, and the limits it must hold."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from morph.body.blank import Blank
from morph.body.plan import ChannelPlan
from morph.layout.graph import ChannelGraph
from morph.settings.job import ServiceSettings
from morph.settings.profile import Profile
from morph.solid.result import ChannelSolid, Insert


@dataclass(frozen=True, slots=True, eq=False)
class CheckSubject:
    """One insert with everything it is judged by.

    Args:
        insert: the insert as printed and written. solid: its channels.
        blank: the finished body. plan: branches, leads and exits.
        profile: limits of the printing process. service: limits of use.
        build_direction: from the plate into the part, part frame; any length, made unit here.
        graph: the layout as drawn, None when there is none to compare with. bore_scale: by which the job scales it.
        balanced: bores were changed to share the flow.
    """

    insert: Insert
    solid: ChannelSolid
    blank: Blank
    plan: ChannelPlan
    profile: Profile
    service: ServiceSettings
    build_direction: tuple[float, float, float] = (0.0, 0.0, 1.0)
    graph: ChannelGraph | None = None
    bore_scale: float = 1.0
    balanced: bool = False

    def __post_init__(self) -> None:
        length = float(np.linalg.norm(self.build_direction))
        if not np.isfinite(length) or length == 0.0:
            raise ValueError(f"build_direction: expected a direction, found {self.build_direction}")
        x, y, z = (float(v) / length for v in self.build_direction)
        object.__setattr__(self, "build_direction", (x, y, z))
