"""Prints what balancing does to every sample and shared layout, against random draws, and under printed scatter.

Run: python -m tests.bench.balance_table [draws]     (300 draws unless told; 10 000 for the long table)

Per layout, with velocities to be equal at a given flow and the range of every bore settled before: how far velocities
spread before and after, branches with through-flow below a quarter of the mean after (and whether their range holds
them), draws inside the same range that reach a lower aim, and what remains of it when every branch is printed up to
0.15 mm wider or narrower.
"""

from __future__ import annotations

import sys
import time
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from morph.core.errors import MorphError
from morph.core.progress import SILENT
from morph.core.threads import single_thread
from morph.flow.aim import LEAST_Y, WEIGHT_OF_DROP, Aim
from morph.flow.bore_range import make_bore_range
from morph.flow.branch_rows import DEAD_SHARE, weighted_percentile
from morph.flow.solve_network import Liquid, NetworkSolver
from morph.pipeline import Planned, _Clock, _flow, plan_channels
from morph.settings.job import Balance, CoolantSettings, Job
from morph.settings.read_job import read_job
from morph.surface.wrap import bore_range_mm

ROOT = Path(__file__).parents[2]
FLOW_L_MIN, DRAWS, PRINTS, SCATTER_MM = 5.0, 300, 200, 0.15
COLUMNS = (
    "layout           branches | p95/p5 before  after | max/min before   after | slow (not bound) bound | draws better"
    "  best aim    ours | printed: p95/p5 median  p95 | branch flow +-% median worst | total flow +-% | CPU s"
)


@dataclass(frozen=True, slots=True)
class Row:
    """What the table says of a layout; `slow` are ids below a quarter of the mean after, `free_slow` those not bound."""

    n_channels: int
    before: tuple[float, float]
    after: tuple[float, float]
    slow: tuple[str, ...]
    free_slow: tuple[str, ...]
    n_bound: int
    better_draws: int
    best_draw: float
    aim_before: float
    aim_after: float
    printed_spread: tuple[float, float]
    branch_flow_percent: tuple[float, float]
    total_flow_percent: float
    cpu_s: float


def jobs() -> dict[str, Path]:
    """Returns the job files of samples and shared layouts by name."""
    samples = {path.parent.name: path for path in sorted((ROOT / "samples").glob("*/job.toml"))}
    shared = {path.stem[:16]: path for path in sorted((ROOT / "tests/data/layouts").glob("*.toml"))}
    return samples | shared


def measure(path: Path, draws: int = DRAWS) -> Row:
    """Returns the row of a job file."""
    begin = time.process_time()
    coolant = CoolantSettings(flow_l_min=FLOW_L_MIN)
    job = replace(read_job(path), coolant=coolant)
    planned = plan_channels(job, _Clock(SILENT))
    wanted = replace(job, coolant=replace(coolant, balance=Balance.EQUAL_VELOCITY))
    done = _flow(wanted, planned, _Clock(SILENT))
    flow, balance = done.flow, done.balance
    chosen = [row for row in flow.branches if row.is_channel and row.through]
    slow = tuple(row.id for row in chosen if row.velocity_m_s < DEAD_SHARE * flow.velocity_mean_m_s)
    bound = {row.id for row in balance.found.bound}
    better, best = _random(wanted, planned, balance.found.aim_after, draws)
    return Row(
        len(chosen),
        (balance.before.velocity_p95_over_p5, balance.before.velocity_max_over_min),
        (flow.velocity_p95_over_p5, flow.velocity_max_over_min),
        slow,
        tuple(name for name in slow if name not in bound),
        len(bound),
        better,
        best,
        balance.found.aim_before,
        balance.found.aim_after,
        *_printed(done),
        time.process_time() - begin,
    )


def _random(job: Job, planned: Planned, aim_after: float, draws: int) -> tuple[int, float]:
    """Returns how many draws inside the range reach a lower aim than the balance, and the lowest aim of all."""
    before = planned.flow
    bores = make_bore_range(planned.plan, bore_range_mm(job.section, job.service, job.printing.profile))
    liquid = Liquid(before.fluid.density_kg_m3, before.fluid.viscosity_pa_s)
    given = before.state.supply_flow_m3_s
    kind = Balance.EQUAL_VELOCITY
    aim = Aim(before.network, bores, kind, np.ones(before.network.n_branches), liquid, given)
    solver = NetworkSolver(before.network)
    first = float(before.state.supply_flow_m3_s @ before.state.supply_drop_pa)
    low, high = bores.ends()
    found = []
    for x in np.random.default_rng(len(low)).uniform(low, high, (draws, len(low))):
        network = before.network.scaled_along(bores.at(x).ratio)
        try:
            state = solver.with_network(network).solve_flows(liquid, given)
        except MorphError:  # a draw whose flows do not settle is no better
            continue
        y, _ = aim.equal_of(network, state)
        log = 0.5 * np.log(y**2 + LEAST_Y**2 * float(aim.weight @ y**2))[aim.chosen]
        weight = aim.weight[aim.chosen]
        power = float(state.supply_flow_m3_s @ state.supply_drop_pa)
        found.append(float(weight @ (log - weight @ log) ** 2) + WEIGHT_OF_DROP * float(np.log(power / first)))
    return sum(value < aim_after for value in found), min(found, default=float("inf"))


def _printed(done: Planned) -> tuple[tuple[float, float], tuple[float, float], float]:
    """Returns p95/p5 of velocity (median and 95th of the prints), half of the 5 to 95 % band of the flow of the median
    and the worst branch, and of the whole flow at the same drop, both in %.
    """
    flow = done.flow
    network, state = flow.network, flow.state
    liquid = Liquid(flow.fluid.density_kg_m3, flow.fluid.viscosity_pa_s)
    solver = NetworkSolver(network)
    bore = np.concatenate([0.5 * (b.bore_mm[1:] + b.bore_mm[:-1]) for b in done.plan.branches])
    chosen = network.is_channel & network.through
    random = np.random.default_rng(len(bore))
    spreads, flows, totals = [], [], []
    for _ in range(PRINTS):
        off = random.uniform(-SCATTER_MM, SCATTER_MM, network.n_branches)[network.segments.pipe]
        printed = network.scaled_along(1.0 + off / bore)
        part, here = printed.segments, solver.with_network(printed)
        now = here.solve_flows(liquid, state.supply_flow_m3_s, state)
        length = part.summed(part.length_m)
        speed = np.abs(now.flow_m3_s) * part.summed(part.length_m / part.area_m2) / length
        ends = [weighted_percentile(speed[chosen], length[chosen], share) for share in (0.05, 0.95)]
        spreads.append(ends[1] / max(ends[0], 1e-300))
        flows.append(now.flow_m3_s[chosen] / np.where(state.flow_m3_s == 0.0, 1e-300, state.flow_m3_s)[chosen])
        totals.append(float(here.solve_drops(liquid, state.supply_drop_pa, state).supply_flow_m3_s.sum()))
    band = 50.0 * np.subtract(*np.percentile(np.array(flows), [95, 5], axis=0))
    total = 50.0 * float(np.subtract(*np.percentile(totals, [95, 5]))) / float(state.supply_flow_m3_s.sum())
    spread = float(np.median(spreads)), float(np.percentile(spreads, 95))
    return spread, (float(np.median(band)), float(band.max())), total


def line(name: str, row: Row) -> str:
    """Returns a line of the table."""
    return (
        f"{name:16s} {row.n_channels:8d} | {row.before[0]:13.2f} {row.after[0]:6.2f}"
        f" | {row.before[1]:14.2f} {row.after[1]:7.2f} | {len(row.slow):4d} {len(row.free_slow):11d} {row.n_bound:5d}"
        f" | {row.better_draws:12d} {row.best_draw:9.4f} {row.aim_after:7.4f} | {row.printed_spread[0]:22.2f} {row.printed_spread[1]:4.2f}"
        f" | {row.branch_flow_percent[0]:21.1f} {row.branch_flow_percent[1]:5.1f} | {row.total_flow_percent:14.1f}"
        f" | {row.cpu_s:5.1f}"
    )


def main() -> None:
    """Prints the table."""
    draws = int(sys.argv[1]) if len(sys.argv) > 1 else DRAWS
    print(COLUMNS)
    with single_thread():
        for name, path in jobs().items():
            try:
                print(line(name, measure(path, draws)), flush=True)
            except MorphError as error:
                print(f"{name:16s} {error.code}: {error}", flush=True)


if __name__ == "__main__":
    main()
