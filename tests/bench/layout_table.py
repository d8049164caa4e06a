"""Prints the table of the layout stage per mode, beside the plain scikit-image and skan script.

Run: python -m tests.bench.layout_table [first_seed last_seed]
"""

from __future__ import annotations

import sys
import time

import numpy as np

from tests.layout.cases import inputs, run_case
from tests.layout.compare import measure, same_graph
from tests.layout.plain import plain_graph
from tests.layout.synthetic import MODES, make_case

COLUMNS = (
    "mode          right  cut-right loops-lost | centre px: median  p90 | half px: median  p90 | missing surplus px |"
    " plain: right  centre  half  missing surplus | time ratio"
)


def main() -> None:
    from morph.layout.extract import find_graph

    first, last = (int(v) for v in sys.argv[1:3]) if len(sys.argv) > 2 else (1, 12)
    print(COLUMNS)
    everything = []
    for mode in MODES:
        rows = []
        for seed in range(first, last + 1):
            case = make_case(seed, mode)
            plain_graph(case.value)
            start = time.perf_counter()
            plain = plain_graph(case.value)
            plain_s = time.perf_counter() - start
            start = time.perf_counter()
            find_graph(*inputs(case))
            ours_s = time.perf_counter() - start
            plain_errors = measure(plain, case.cut, case.width)
            rows.append((run_case(case), same_graph(plain, case.cut, 2 * case.width), plain_errors, ours_s / plain_s))
        print(line(mode, rows), flush=True)
        everything += rows
    print(line("all", everything))


def line(name, rows) -> str:
    ours = [o for o, _, _, _ in rows]
    centre = np.array([o.errors.centre_px for o in ours])
    half = np.array([o.errors.half_px for o in ours])
    plain = [e for _, _, e, _ in rows]
    return (
        f"{name:13s} {sum(o.right for o in ours):3d}/{len(ours)} {sum(o.right_cut for o in ours):6d}"
        f" {sum(o.loops_lost for o in ours):9d}  | {np.median(centre):17.3f} {np.quantile(centre, 0.9):6.3f}"
        f" | {np.median(half):14.3f} {np.quantile(half, 0.9):6.3f}"
        f" | {sum(o.errors.missing_px for o in ours):6.0f} {sum(o.errors.surplus_px for o in ours):8.0f}  "
        f" | {sum(p for _, p, _, _ in rows):8d} {np.nanmedian([e.centre_px for e in plain]):10.3f}"
        f" {np.nanmedian([e.half_px for e in plain]):6.3f} {sum(e.missing_px for e in plain):6.0f}"
        f" {sum(e.surplus_px for e in plain):7.0f} | {np.median([r for _, _, _, r in rows]):6.2f}"
    )


if __name__ == "__main__":
    main()
