"""What this version or this job does not look at, so that nobody takes silence for a pass."""

from __future__ import annotations

from morph.core.verdict import Outcome, Verdict

FLOW_NOT_RUN = Verdict(
    "flow",
    Outcome.NOT_CHECKED,
    "Flow, velocity and pressure drop were not calculated: the job has no [coolant] table.",
    hint="Add [coolant] with flow_l_min, drop_bar or pump, and measure flow against pressure on the printed insert.",
)
TEMPERATURE_NOT_RUN = Verdict(
    "temperature",
    Outcome.NOT_CHECKED,
    "Face temperature and cooling time were not calculated: this version cannot.",
    hint="Check the face temperature at the press before series production.",
)
