"""Stock on the flat ends of a mesh: closed, volumes by hand, corners between two ends filled."""

import numpy as np
import pytest

from morph.body.blank import make_blank
from morph.geometry.mesh import measure_condition, mesh_volume_mm3
from morph.settings.job import BlankSettings, MeshBlankSettings, ServiceSettings
from morph.solid.blank import blank_mesh
from morph.solid.stock import with_stock
from tests.body import mesh_bodies
from tests.body.test_mesh_blank import SIZE_MM, carrier_of


def blank_with(tmp_path, body, **stock):
    body.export(tmp_path / "body.stl")
    stock_mm = tuple((name.replace("plus_", "+").replace("minus_", "-"), mm) for name, mm in stock.items())
    settings = BlankSettings(MeshBlankSettings(tmp_path / "body.stl"), stock_mm=stock_mm)
    return make_blank(settings, (), carrier_of(), SIZE_MM, ServiceSettings())


@pytest.fixture
def front():
    return mesh_bodies.round_front()


def volumes(blank):
    meshes = [with_stock(blank), blank_mesh(blank, printed=True), blank_mesh(blank, printed=False)]
    assert all(measure_condition(mesh).closed and measure_condition(mesh).genus == 0 for mesh in meshes)
    return [mesh_volume_mm3(mesh) for mesh in meshes]


def test_one_end_gains_its_area_times_the_stock(tmp_path, front):
    raw, printed, finished = volumes(blank_with(tmp_path, front, back=2.0))
    # the back is 76 x 60 mm
    assert raw - finished == pytest.approx(76.0 * 60.0 * 2.0, rel=1e-4) and printed == pytest.approx(raw, rel=1e-6)


def test_without_stock_nothing_is_added(tmp_path, front):
    blank = blank_with(tmp_path, front)
    assert with_stock(blank) is blank.skin.mesh


def test_the_corner_between_two_ends_is_filled(tmp_path, front):
    foot_mm2 = mesh_bodies.common(front, mesh_bodies.block((-1, -50, -30), (90, 50, -29))).volume  # 1 mm of it
    raw, _, finished = volumes(blank_with(tmp_path, front, back=2.0, foot=1.5))
    corner = 76.0 * 2.0 * 1.5
    assert raw - finished == pytest.approx(76.0 * 60.0 * 2.0 + foot_mm2 * 1.5 + corner, rel=1e-4)


def test_three_ends_meet_in_one_corner(tmp_path, front):
    blank = blank_with(tmp_path, front, back=2.0, foot=1.5, minus_y=1.0)
    low = with_stock(blank).vertices_mm.min(axis=0)
    np.testing.assert_allclose(low, [-2.0, -39.0, -31.5], atol=1e-5)
    # the corner itself is there
    assert np.linalg.norm(with_stock(blank).vertices_mm - low, axis=1).min() < 1e-5


def test_several_feet_are_carried_out_each(tmp_path):
    foot = mesh_bodies.block((0, -38, -32), (20, -20, -29)), mesh_bodies.block((0, 20, -32), (20, 37, -29))
    raw, _, finished = volumes(blank_with(tmp_path, mesh_bodies.united(mesh_bodies.round_front(), *foot), foot=1.0))
    assert raw - finished == pytest.approx(20.0 * (18.0 + 17.0), rel=1e-4)
