"""Absurd but well-typed jobs end in a plan or in one clear sentence, quickly, never in a traceback."""

import time

import numpy as np
import pytest

from morph.core.codes import explanations
from morph.core.errors import MorphError
from morph.settings.job import (
    BoxBlankSettings,
    CarrierBlankSettings,
    CylinderBlankSettings,
    HoleSettings,
    Metal,
    SectionSettings,
    ServiceSettings,
)
from tests.body.scenes import Scene
from tests.surface.graphs import make_graph, make_profile

SLOWEST_S = 20.0
"""Processor time of one refusal on a busy machine; alone on it none takes 5 s."""


def pick(rng, usual, *odd):
    return usual if rng.random() < 0.7 else odd[int(rng.integers(len(odd)))]


def absurd_scene(seed):
    rng = np.random.default_rng(77000 + seed)
    size = (float(pick(rng, 60.0, 5.0, 200.0)), float(pick(rng, 40.0, 3.0, 150.0)))
    w, h = size
    bore = float(pick(rng, 4.0, 0.2, 25.0))
    places = {"N1": (0.5 * w, 0.0, "in"), "N2": (0.4 * w, h, "out"), "J": (0.5 * w, 0.5 * h), "D": (w, 0.6 * h)}
    graph = make_graph(size, places, [("N1", "J", bore), ("J", "N2", bore), ("J", "D", bore)])
    shape = pick(
        rng,
        CarrierBlankSettings((15.0, 15.0)),
        CarrierBlankSettings((0.0, 1e7)),
        CarrierBlankSettings((15.0, 15.0), 16.0),
        CarrierBlankSettings((15.0, 15.0), 1e-9),
        CylinderBlankSettings(1e9, (-1e9, 1e9)),
        CylinderBlankSettings(34.0, (-20.0, 20.0)),
        BoxBlankSettings((-1e5, -90.0, -40.0), (1e5, 90.0, 40.0)),
        BoxBlankSettings((0.0, -90.0, -90.0), (90.0, 90.0, 90.0)),
    )
    hole = HoleSettings((0.0, 0.0, -1e3), (0, 0, float(pick(rng, 1.0, -1.0, 1e-300))), float(pick(rng, 6.0, 60.0, 1e9)))
    far = {"in": {"exit_mm": (1e12, 0.0, 0.0)}}
    edge = {"in": {"exit_mm": (0.0, 0.0, -0.5 * h - 15.0), "leave": (0.0, 1e-200, -1e-200)}}
    nan = {"in": {"exit_mm": (float("nan"), 0.0, 0.0)}}
    return Scene(
        graph,
        radius_mm=float(pick(rng, 34.0, 1e-3, 9.0, 1e7)),
        depth_mm=float(pick(rng, 8.0, 1e-6, 33.0, 1e6)),
        metal=pick(rng, Metal.TOWARD_AXIS, Metal.AWAY_FROM_AXIS),
        shape=shape,
        port_faces=pick(rng, ("foot",), ("top",), ("outer",), ("-x", "+y"), ()),
        part_faces=pick(rng, ("carrier",), (), ("carrier", "foot")),
        holes=pick(rng, (), (hole,)),
        section=pick(rng, SectionSettings(), SectionSettings(bore_scale=1e-9), SectionSettings(bore_scale=1e9)),
        service=pick(
            rng,
            ServiceSettings(),
            ServiceSettings(wall_face_mm=1e9),
            ServiceSettings(wall_outer_mm=1e9),
            ServiceSettings(wall_between_mm=1e3),
            ServiceSettings(wall_face_bores=0.0, wall_face_mm=0.0, wall_outer_mm=0.0, wall_between_mm=0.0),
        ),
        profile=pick(rng, make_profile(), make_profile(bend_radius_bores=50.0), make_profile(position_band_mm=5.0)),
        exits=pick(rng, {}, far, edge, nan),
    )


@pytest.mark.parametrize("seed", range(80))
def test_an_absurd_job_is_built_or_refused_in_one_sentence(seed):
    begin = time.process_time()
    try:
        plan = absurd_scene(seed).plan()
    except MorphError as error:
        assert error.code in explanations()
        assert error.found and error.expected and error.where and error.do
        assert "\n" not in error.sentence()
    else:
        assert all(branch.bore_mm.min() > 0.0 for branch in plan.branches)
    assert time.process_time() - begin < SLOWEST_S
