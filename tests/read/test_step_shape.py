"""STEP through the geometry kernel of the extra: exact volumes, units, and what is no solid."""

import math
import os

import pytest

from morph.core.errors import MorphError
from morph.geometry.mesh import measure_condition, mesh_volume_mm3
from morph.read.mesh_body import require_body
from morph.read.mesh_file import LengthUnit, read_mesh
from morph.read.step_shape import CHORD_MM

pytest.importorskip("OCP")

RADIUS_MM, HEIGHT_MM = 30.0, 100.0


def write_step(path, shape, unit="MM"):
    from OCP.Interface import Interface_Static
    from OCP.STEPControl import STEPControl_StepModelType, STEPControl_Writer

    writer = STEPControl_Writer()
    Interface_Static.SetCVal_s("write.step.unit", unit)
    writer.Transfer(shape, STEPControl_StepModelType.STEPControl_AsIs)
    writer.Write(str(path))
    Interface_Static.SetCVal_s("write.step.unit", "MM")
    return path


def cylinder():
    from OCP.BRepPrimAPI import BRepPrimAPI_MakeCylinder

    return BRepPrimAPI_MakeCylinder(RADIUS_MM, HEIGHT_MM).Shape()


@pytest.mark.parametrize("unit", ["MM", "INCH", "M"])
def test_a_cylinder_in_any_unit_keeps_its_size(tmp_path, unit):
    found = read_mesh(write_step(tmp_path / "a.step", cylinder(), unit))
    mesh, _ = require_body(found.mesh, "a.step")
    assert measure_condition(mesh).closed and found.unit_from == "file"
    # n flat sides within a chord c of a circle r: the area lost is at most 2 c / r of it
    exact = math.pi * RADIUS_MM**2 * HEIGHT_MM
    assert 1.0 - 2.0 * CHORD_MM / RADIUS_MM < mesh_volume_mm3(mesh) / exact < 1.0


def test_a_cut_body_in_two_places_of_an_assembly_is_two_bodies(tmp_path):
    from OCP.BRep import BRep_Builder
    from OCP.BRepPrimAPI import BRepPrimAPI_MakeBox
    from OCP.gp import gp_Pnt
    from OCP.TopoDS import TopoDS_Compound

    both, builder = TopoDS_Compound(), BRep_Builder()
    builder.MakeCompound(both)
    builder.Add(both, cylinder())
    builder.Add(both, BRepPrimAPI_MakeBox(gp_Pnt(50.0, 0.0, 0.0), 10.0, 10.0, 10.0).Shape())
    found = read_mesh(write_step(tmp_path / "a.stp", both))
    with pytest.raises(MorphError) as caught:
        require_body(found.mesh, "a.stp")
    assert caught.value.code == "mesh-several-bodies" and ", 1000 mm3" in caught.value.found


def test_a_face_alone_is_no_solid(tmp_path):
    from OCP.BRepBuilderAPI import BRepBuilderAPI_MakeFace
    from OCP.gp import gp_Pln

    face = BRepBuilderAPI_MakeFace(gp_Pln(), 0.0, 20.0, 0.0, 20.0).Shape()
    with pytest.raises(MorphError) as caught:
        read_mesh(write_step(tmp_path / "a.step", face))
    assert caught.value.code == "mesh-no-triangles"


def test_nonsense_between_the_right_ends_is_damaged(tmp_path):
    (tmp_path / "a.step").write_bytes(b"ISO-10303-21;\nHEADER;\nrubbish(((\nENDSEC;\nEND-ISO-10303-21;\n")
    with pytest.raises(MorphError) as caught:
        read_mesh(tmp_path / "a.step")
    assert caught.value.code == "mesh-damaged"


def test_a_unit_in_the_job_contradicts_the_file(tmp_path):
    with pytest.raises(MorphError) as caught:
        read_mesh(write_step(tmp_path / "a.step", cylinder()), LengthUnit.INCH)
    assert caught.value.code == "mesh-unit-conflict"


def test_without_the_extra_the_cure_is_named(tmp_path, monkeypatch):
    path = write_step(tmp_path / "a.step", cylinder())
    monkeypatch.setattr("importlib.util.find_spec", lambda name: None)
    with pytest.raises(MorphError) as caught:
        read_mesh(path)
    assert caught.value.code == "step-reader-missing" and "[step]" in caught.value.do


def test_a_kernel_that_does_not_load_is_told_as_such(tmp_path, monkeypatch):
    path = write_step(tmp_path / "a.step", cylinder())
    (tmp_path / "broken" / "OCP").mkdir(parents=True)
    (tmp_path / "broken" / "OCP" / "__init__.py").write_text("raise ImportError('libGL.so.1')")
    monkeypatch.setenv("PYTHONPATH", str(tmp_path / "broken"), prepend=os.pathsep)
    with pytest.raises(MorphError) as caught:
        read_mesh(path)
    assert caught.value.code == "step-reader-missing" and "does not load" in caught.value.found
