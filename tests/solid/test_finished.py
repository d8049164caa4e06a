"""The finished insert: what is left of the printed one when its stock is machined off."""

import dataclasses

import numpy as np
import pytest

from morph.geometry.mesh import measure_condition, mesh_volume_mm3
from morph.solid.channel import make_channel_solid
from morph.solid.cut import make_finished, make_insert
from tests.solid import plans
from tests.solid.test_blank import cone_blank

STOCK = {"-x": 1.5, "+z": 0.5}


def test_it_is_the_insert_that_a_blank_without_stock_would_give():
    printed, bare = plans.box_blank(stock=STOCK), plans.box_blank()
    plan = plans.straight_pipe(stock_mm=1.5)
    solid = make_channel_solid(plan, printed, 0.3)
    finished = make_finished(solid, printed)
    # The box is given in the part frame: its corners return to where the blank's faces are.
    np.testing.assert_allclose(finished.vertices_mm.min(axis=0), (0, 0, 0), atol=1e-6)
    np.testing.assert_allclose(finished.vertices_mm.max(axis=0), (60, 40, 30), atol=1e-6)
    assert mesh_volume_mm3(finished) == pytest.approx(60 * 40 * 30 - np.pi * 9 * 60, rel=1e-4)
    reference = make_insert(solid, bare, plan).mesh
    assert mesh_volume_mm3(finished) == pytest.approx(mesh_volume_mm3(reference), rel=1e-6)
    condition = measure_condition(finished)
    assert condition.closed and condition.genus == 1 and condition.bodies == 1
    assert make_finished(solid, bare) is None


def test_stock_in_a_round_and_in_a_conical_bore():
    plan = plans.plan_of([plans.branch("B1", "N1", "N2", plans.sampled([(22, 0, 5), (22, 0, 15)], 3.0), 3.0)])
    for blank in (
        plans.cylinder_blank(z_mm=(-10.0, 25.0), inner_radius_mm=11.0, stock={"foot": 2.0, "bore": 0.5}),
        cone_blank(12.0, (-10.0, 25.0), 12.0, {"foot": 2.0, "bore": 0.5}),
    ):
        bare = dataclasses.replace(blank, faces=tuple(dataclasses.replace(face, stock_mm=0.0) for face in blank.faces))
        solid = make_channel_solid(plan, blank, 0.3)
        assert mesh_volume_mm3(make_insert(solid, blank, plan).mesh) > mesh_volume_mm3(
            make_insert(solid, bare, plan).mesh
        )
        finished = make_finished(solid, blank)
        reference = make_insert(solid, bare, plan).mesh
        assert mesh_volume_mm3(finished) == pytest.approx(mesh_volume_mm3(reference), rel=1e-6)
        assert finished.vertices_mm[:, 2].min() == pytest.approx(-10.0, abs=1e-6)
        radius = np.hypot(finished.vertices_mm[:, 0], finished.vertices_mm[:, 1])
        assert radius.min() == pytest.approx(np.hypot(*reference.vertices_mm[:, :2].T).min(), abs=1e-4)
        assert measure_condition(finished).closed
