"""The explanations behind every error, verdict and warning code, one TOML table per package.

Each table reads::

    [some-code]
    kind = "error"        # error | verdict | warning
    cause = "what leads to it"
    cure = "what to change"
"""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from functools import cache
from importlib import resources


@dataclass(frozen=True, slots=True)
class Explanation:
    """What a code means: its kind (error, verdict or warning), its cause and its cure."""

    code: str
    kind: str
    cause: str
    cure: str


@cache
def explanations() -> dict[str, Explanation]:
    """Returns every known code with its explanation, sorted by code."""
    found: dict[str, Explanation] = {}
    for entry in sorted(resources.files(__name__).iterdir(), key=lambda item: item.name):
        if not entry.name.endswith(".toml"):
            continue
        for code, row in tomllib.loads(entry.read_text(encoding="utf-8")).items():
            if code in found:
                raise RuntimeError(f"code {code} is explained twice")
            found[code] = Explanation(code, str(row["kind"]), str(row["cause"]), str(row["cure"]))
    return dict(sorted(found.items()))
