"""Makes a sample's image again: `python samples/remake.py NAME` (seconds for the small one, minutes for the rich).

Writes samples/NAME/density.npy (float32, 0..1, 1 = coolant) and samples/NAME/descent.json (the course
of the objective). The same machine and library versions give the same image; on others the last
digits of a solved equation differ, and a descent of many steps may then end in a slightly other layout.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

import numpy as np
from optimiser.descent import Descent, descend
from optimiser.problem import DesignProblem
from scenarios import SCENARIOS

HERE = Path(__file__).resolve().parent


def write_sample(folder: Path, descent: Descent, *, top_down: bool) -> None:
    """Writes the image and the course of the descent into `folder`, which is made if need be."""
    folder.mkdir(parents=True, exist_ok=True)
    picture = descent.density[::-1] if top_down else descent.density
    np.save(folder / "density.npy", picture.astype(np.float32))
    record = {
        "objective_first": float(f"{descent.first:.6g}"),
        "objective_last": float(f"{descent.last:.6g}"),
        "objective_fall_ratio": round(1.0 - descent.last / descent.first, 6),
        "limits_last": [round(value, 6) for value in descent.limits],
        "course": [float(f"{value:.6g}") for value in descent.course],
    }
    (folder / "descent.json").write_text(json.dumps(record, indent=1, sort_keys=True) + "\n", encoding="utf-8")


def main(names: list[str]) -> int:
    """Makes the named samples; returns the exit status."""
    unknown = sorted(set(names) - set(SCENARIOS))
    if unknown or not names:
        print(f"usage: python samples/remake.py NAME...; names: {', '.join(SCENARIOS)}", file=sys.stderr)
        return 2
    for name in names:
        scenario = SCENARIOS[name]
        descent = descend(DesignProblem(scenario), lambda line: print(line, file=sys.stderr))
        write_sample(HERE / name, descent, top_down=scenario.top_down)
        print(f"{name}: objective {descent.first:.4g} -> {descent.last:.4g}")
    return 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
