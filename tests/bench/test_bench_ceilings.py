"""How much of the channel wall is ceiling flatter than 44 degrees, on every sample and on the real layouts.

Round as drawn, auto (the default) and roofed at 45 degrees side by side. Roofed channels keep at most 0.2 % of their
wall as ceiling; roofed or auto, no circle inside a flat patch is wider than what the process spans freely.
Run with `pytest -m slow tests/bench/test_bench_ceilings.py -s` for the table and for where the rest sits.
"""

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from morph.body.make import make_plan
from morph.check.ceiling import list_flat_patches, measure_ceiling
from morph.geometry.mesh import Mesh
from morph.pipeline import build
from morph.settings.job import QualitySettings, SectionSettings, SectionShape, ServiceSettings
from morph.settings.profile import read_profile
from morph.settings.read_job import read_job
from morph.solid.channel import make_channel_solid
from morph.solid.field import choose_h_mm
from tests.body.scenes import Scene
from tests.body.test_shared_layouts import BODIES, LAYOUTS, read
from tests.solid.exact import ceiling_share

pytestmark = pytest.mark.slow

SAMPLES = Path(__file__).parent.parent.parent / "samples"
NAMES = sorted(path.parent.name for path in SAMPLES.glob("*/job.toml"))
LIMIT_DEG, MOST = 44.0, 0.002
SHAPES = (SectionShape.ROUND, SectionShape.AUTO, SectionShape.ROOFED)


def tell(name, swept, direction, profile):
    """Prints a row of the table and the largest patches; asserts the share and the widest flat circles."""
    up = np.asarray(direction, dtype=np.float64) / np.linalg.norm(direction)
    share, span, cut, inward = {}, {}, {}, {}
    for shape, mesh in swept.items():
        inward[shape] = Mesh(mesh.vertices_mm, mesh.triangles[:, ::-1])
        share[shape] = ceiling_share(mesh, up, LIMIT_DEG)
        found = measure_ceiling(inward[shape], up, LIMIT_DEG)
        span[shape], cut[shape] = found.span_mm, found.share
    cells = "   ".join(f"{s} {100.0 * share[s]:6.3f} % (circle {span[s]:.2f} mm)" for s in SHAPES)
    print(f"{name:30s} {cells}")
    for patch in list_flat_patches(inward[SectionShape.ROOFED], up, LIMIT_DEG)[:3]:
        print(f"    roofed rest: {patch.area_mm2:.2f} mm2 at {np.round(patch.xyz_mm, 1).tolist()} mm")
    assert share[SectionShape.ROOFED] <= MOST < share[SectionShape.ROUND]
    # compared as cut along the angle, because whole facets of a round wall count or not by how they happen to lie
    assert cut[SectionShape.AUTO] <= 1.005 * cut[SectionShape.ROUND]
    assert max(span[SectionShape.ROOFED], span[SectionShape.AUTO]) <= profile.free_span_mm.value


@pytest.mark.parametrize("name", NAMES)
def test_samples(name):
    job = read_job(SAMPLES / name / "job.toml")
    swept = {}
    for shape in SHAPES:
        own = dataclasses.replace(job, section=dataclasses.replace(job.section, shape=shape))
        records = build(own).records
        swept[shape] = records.solid.trimmed
        capped = sum(cap.length_mm for cap in records.plan.caps)
        assert capped < 0.3 * sum(branch.length_mm for branch in records.plan.branches)
    tell(name, swept, job.printing.build_direction, job.printing.profile)


@pytest.mark.parametrize("name", sorted(LAYOUTS))
def test_real_layouts(name):
    graph, ports = read(name)
    scene, profile = Scene(graph, **BODIES["core 30"]), read_profile("steel-40um", Path())
    swept = {}
    for shape in SHAPES:
        section = SectionSettings(shape=shape)
        plan = make_plan(scene.wrapped, scene.blank, ports, section, ServiceSettings(), profile)
        solid = make_channel_solid(plan, scene.blank, choose_h_mm(plan, QualitySettings()))
        swept[shape] = solid.trimmed
    tell(name, swept, (0.0, 0.0, 1.0), profile)
