"""The laminar factor f Re of a channel's section, by bore and by the way it runs."""

from __future__ import annotations

import numpy as np

from morph.body.section import SectionRule, climb_sine, roof_share
from morph.core.arrays import Floats
from morph.flow.friction import ROUND_FRICTION_RE

ROOFED_45_FRICTION_RE = 62.02
"""Circle with a tangent roof at 45 degrees to the plate; own finite elements, converged to 0.02 %."""


def friction_re(bore_mm: Floats, tangent: Floats, rule: SectionRule) -> Floats:
    """Returns the laminar Darcy factor times Reynolds number (k,), on the hydraulic diameter.

    Args:
        bore_mm: (k,) bores.
        tangent: (k, 3) along the channel.
        rule: the section.
    """
    sine = climb_sine(tangent, rule)
    roofed = np.clip((sine - rule.roof_cosine) / max(1.0 - rule.roof_cosine, 1e-9), 0.0, 1.0)
    share = roofed * roof_share(bore_mm, rule)
    return ROUND_FRICTION_RE + (ROOFED_45_FRICTION_RE - ROUND_FRICTION_RE) * share
