"""Roofed at 45 degrees: how much of the channel wall is still ceiling, on the samples and the real layouts.

Run with `pytest -m slow tests/bench/test_bench_ceilings.py -s` for the table.
"""

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from morph.body.make import make_plan
from morph.check.ceiling import measure_ceiling
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
LIMIT_DEG, MOST = 44.0, 0.002
UP = np.array([0.0, 0.0, 1.0])


def tell(name, roofed, plain, profile):
    """Prints a row of the table; asserts the share and the widest flat circle."""
    inward = Mesh(roofed.vertices_mm, roofed.triangles[:, ::-1])
    share, before = ceiling_share(roofed, UP, LIMIT_DEG), ceiling_share(plain, UP, LIMIT_DEG)
    span = measure_ceiling(inward, UP, LIMIT_DEG).span_mm
    free = profile.free_span_mm.value
    print(f"{name:32s} round {100 * before:6.2f} %   roofed {100 * share:6.3f} %   widest flat circle {span:.2f} mm")
    assert share <= MOST < before
    assert span <= free


@pytest.mark.parametrize("name", ["lantern-sleeve", "tealight-cup"])
def test_samples(name):
    job = read_job(SAMPLES / name / "job.toml")
    swept = {}
    for shape in (SectionShape.ROOFED, SectionShape.ROUND):
        own = dataclasses.replace(job, section=dataclasses.replace(job.section, shape=shape))
        swept[shape] = build(own).records.solid.trimmed
    tell(name, swept[SectionShape.ROOFED], swept[SectionShape.ROUND], job.printing.profile)


@pytest.mark.parametrize("name", sorted(LAYOUTS))
def test_real_layouts(name):
    graph, ports = read(name)
    scene, profile = Scene(graph, **BODIES["core 30"]), read_profile("steel-40um", Path())
    swept = {}
    for shape in (SectionShape.ROOFED, SectionShape.ROUND):
        section = SectionSettings(shape=shape)
        plan = make_plan(scene.wrapped, scene.blank, ports, section, ServiceSettings(), profile)
        solid = make_channel_solid(plan, scene.blank, choose_h_mm(plan, QualitySettings()))
        swept[shape] = solid.trimmed
    tell(name, swept[SectionShape.ROOFED], swept[SectionShape.ROUND], profile)
