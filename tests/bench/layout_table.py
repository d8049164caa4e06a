"""Prints the table of the layout stage per mode, beside the plain scikit-image and skan script.

Run: python -m tests.bench.layout_table [first_seed last_seed]
"""

from __future__ import annotations

import sys
import time

import numpy as np

from tests.layout.compare import measure, same_graph
from tests.layout.plain import plain_graph
from tests.layout.proof import prove
from tests.layout.synthetic import MODES
from tests.layout.synthetic_more import MORE_MODES, lay

COLUMNS = (
    "mode           right cut-right loops-lost | centre px: median  p90 | half px: median  p90 | missing surplus px |"
    " branches over-bound bend median share<=1/1.5 | plain: right  centre  half  missing surplus | CPU ratio"
)
WIDE_BEND = 1.0 / 1.5
"""Curvature times bore of a bend whose radius is 1.5 bores."""


def main() -> None:
    from morph.layout.extract import find_graph

    first, last = (int(v) for v in sys.argv[1:3]) if len(sys.argv) > 2 else (1, 12)
    print(COLUMNS)
    everything = []
    for mode in MODES + MORE_MODES:
        rows = []
        for seed in range(first, last + 1):
            laid = lay(seed, mode)
            value = np.roll(laid.density.value, -laid.turned, axis=1)
            start = time.process_time()
            plain = plain_graph(value)
            plain_s = time.process_time() - start
            start = time.process_time()
            find_graph(laid.density, laid.settings, laid.ports)
            ours_s = time.process_time() - start
            right = same_graph(plain, laid.cut, 2 * laid.width)
            errors = measure(plain, laid.cut, laid.width)
            rows.append((prove(laid), right, errors, ours_s / plain_s))
        print(line(mode, rows), flush=True)
        everything += rows
    print(line("all", everything))


def line(name, rows) -> str:
    ours = [o for o, *_ in rows]
    centre = np.array([o.errors.centre_px for o in ours])
    half = np.array([o.errors.half_px for o in ours])
    plain = [e for _, _, e, _ in rows]
    bends = np.array([bend for o in ours for bend in o.bends])
    return (
        f"{name:14s} {sum(o.right for o in ours):3d}/{len(ours)} {sum(o.right_cut for o in ours):6d}"
        f" {sum(o.loops_lost for o in ours):9d}  | {np.median(centre):17.3f} {np.quantile(centre, 0.9):6.3f}"
        f" | {np.median(half):14.3f} {np.quantile(half, 0.9):6.3f}"
        f" | {sum(o.errors.missing_px for o in ours):6.0f} {sum(o.errors.surplus_px for o in ours):8.0f}  "
        f" | {len(bends):8d} {sum(o.over_bound for o in ours):10d} {np.median(bends):11.3f}"
        f" {np.mean(bends <= WIDE_BEND):12.3f}"
        f" | {sum(right for _, right, _, _ in rows):12d} {np.nanmedian([e.centre_px for e in plain]):7.3f}"
        f" {np.nanmedian([e.half_px for e in plain]):6.3f} {sum(e.missing_px for e in plain):6.0f}"
        f" {sum(e.surplus_px for e in plain):7.0f}"
        f" | {np.median([r for *_, r in rows]):6.2f}"
    )


if __name__ == "__main__":
    main()
