"""A job that builds, its image, and how to look at a folder and at a verdict."""

import numpy as np

from morph.core.verdict import Verdict

JOB = """
name = "lamp"
[layout]
image = "density.npy"
size_mm = [60.0, 40.0]
[[port]]
name = "feed"
role = "in"
at_mm = [0.0, 20.0]
[[port]]
name = "return"
role = "out"
at_mm = [60.0, 20.0]
[carrier]
kind = "cylinder"
radius_mm = 30.0
metal = "toward-axis"
depth_mm = 9.0
"""


def straight_channel():
    """A straight channel 5 mm wide across a sheet of 60 x 40 mm, 0.5 mm pixels, soft edges."""
    y = (np.arange(80) + 0.5) * 0.5
    column = np.clip(0.5 + (2.5 - np.abs(y - 20.0)) / 1.0, 0.0, 1.0)
    return np.repeat(column[:, None], 120, axis=1)


def tree(folder):
    """Every path below `folder` with its content."""
    return {
        str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
        for path in sorted(folder.rglob("*"))
    }


def wall(outcome, value):
    """A wall of the given figure on branch B1."""
    text = f"Wall to the part face on B1 is {value} mm."
    return Verdict(
        "wall-face", outcome, text, value, "mm", 3.0, band=0.15, branch_ids=("B1",), xyz_mm=(29.0, 1.25, -3.0)
    )
