"""A solid written by a CAD kernel and tessellated by the reader: closed, sharp at its ends, cut into thin strips."""

from pathlib import Path

import numpy as np
import pytest
from OCP.BRepPrimAPI import BRepPrimAPI_MakeCylinder, BRepPrimAPI_MakeTorus
from OCP.gp import gp_Ax2, gp_Dir, gp_Pnt

from morph.core.errors import MorphError
from morph.read.mesh_file import read_mesh
from morph.settings.job import CarrierSettings, FreeformSettings, Metal, SeenFrom
from morph.surface.cylinder import make_cylinder
from morph.surface.lay import make_freeform
from tests.read.test_step_shape import write_step

SIZE, DEPTH_MM = (60.0, 50.0), 6.0
AXIS = gp_Ax2(gp_Pnt(0, 0, -60), gp_Dir(0, 0, 1))


@pytest.fixture(scope="module")
def cylinder(tmp_path_factory):
    path = tmp_path_factory.mktemp("step") / "core.step"
    write_step(path, BRepPrimAPI_MakeCylinder(AXIS, 30.0, 120.0).Shape())
    return read_mesh(path).mesh


def settings(anchor=(30.0, 0.0, 0.0)):
    return FreeformSettings(Path("core.step"), anchor, (0, 0, 1), (20.0, 0.0, 0.0), depth_mm=DEPTH_MM)


def test_a_step_cylinder_gives_the_closed_form(cylinder):
    sheet = make_freeform(settings(), cylinder, SIZE, SeenFrom.PART, DEPTH_MM)
    exact = make_cylinder(CarrierSettings(30.0, Metal.TOWARD_AXIS, DEPTH_MM), SIZE, SeenFrom.PART, DEPTH_MM)
    places = np.random.default_rng(1).uniform((0, 0), SIZE, (2000, 2))
    gap = np.linalg.norm(sheet.carrier.point_mm(places, DEPTH_MM) - exact.point_mm(places, DEPTH_MM), axis=1)
    print(gap.max(), np.abs(sheet.report.depth_error_mm).max(), len(cylinder.triangles))
    assert gap.max() < 0.02  # the reader's chord is 0.005 mm, and its strips have points at their ends only
    assert np.abs(sheet.report.depth_error_mm).max() < 0.015


def test_a_sheet_over_the_end_of_a_step_cylinder_is_refused(cylinder):
    with pytest.raises(MorphError) as caught:
        make_freeform(settings((30.0, 0.0, 45.0)), cylinder, SIZE, SeenFrom.PART, DEPTH_MM)
    assert caught.value.code == "surface-edge-under-sheet"
    assert "60.00) mm" in caught.value.where or "59." in caught.value.where or "58." in caught.value.where


def test_a_step_torus_is_at_depth(tmp_path):
    path = tmp_path / "ring.step"
    write_step(path, BRepPrimAPI_MakeTorus(80.0, 30.0).Shape())
    how = FreeformSettings(Path("ring.step"), (110.0, 0.0, 0.0), (0, 0, 1), (100.0, 0.0, 0.0), depth_mm=DEPTH_MM)
    carrier = make_freeform(how, read_mesh(path).mesh, (60.0, 40.0), SeenFrom.PART, DEPTH_MM).carrier
    points = carrier.point_mm(np.random.default_rng(1).uniform((0, 0), (60, 40), (2000, 2)), DEPTH_MM)
    inner = np.hypot(np.hypot(points[:, 0], points[:, 1]) - 80.0, points[:, 2])
    assert np.abs(inner - 24.0).max() < 0.01
