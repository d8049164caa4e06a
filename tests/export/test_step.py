"""The curve file, re-read by a CAD kernel (OCP): schema, unit, count, names, bores and places."""

import re

import numpy as np
import pytest

from morph.core.errors import ExportError
from morph.export.step import curve_name, step_bytes, step_fit_error_mm

pytestmark = pytest.mark.quick

MATCH_MM = 1e-3  # the promised distance between the curves and graph.json


def wavy_plan(plans, n=200):
    """One branch with changing curvature, twist and taper, and one straight lead of three samples."""
    t = np.linspace(0.0, 3.0, n)
    xyz = np.column_stack([20 * np.cos(t), 20 * np.sin(t), 6 * np.sin(2 * t) + 4 * t])
    items = [
        plans.branch("B1", "N1", "N2", xyz, np.linspace(4.2, 5.1, n)),
        plans.branch("L-é'n", "N2", "X1", [xyz[-1], xyz[-1] + [0, 0, -1], xyz[-1] + [0, 0, -2]], 5.1, lead=True),
    ]
    return plans.plan_of(items)


@pytest.fixture(scope="module", params=["wavy", "ring", "ladder", "tee"])
def plan(request, plans):
    return wavy_plan(plans) if request.param == "wavy" else getattr(plans, request.param)()


def read_back(data: bytes, tmp_path):
    """Every curve of the file as the kernel reads it: (name, kernel curve), and the kernel's reader."""
    from OCP.STEPControl import STEPControl_Reader
    from OCP.StepGeom import StepGeom_BSplineCurveWithKnots
    from OCP.StepToGeom import StepToGeom

    path = tmp_path / "centrelines.step"
    path.write_bytes(data)
    reader = STEPControl_Reader()
    assert "Done" in str(reader.ReadFile(str(path)))
    model = reader.StepModel()
    entities = [model.Value(i) for i in range(1, model.NbEntities() + 1)]
    curves = [e for e in entities if isinstance(e, StepGeom_BSplineCurveWithKnots)]
    from OCP.StepData import StepData_Factors

    return [(c.Name().ToCString(), StepToGeom.MakeBSplineCurve_s(c, StepData_Factors())) for c in curves], reader


def edges_of(reader):
    from OCP.TopAbs import TopAbs_EDGE
    from OCP.TopExp import TopExp_Explorer

    reader.TransferRoots()
    found, explorer = [], TopExp_Explorer(reader.OneShape(), TopAbs_EDGE)
    while explorer.More():
        found.append(explorer.Current())
        explorer.Next()
    return found


def test_header_names_the_schema_and_no_date(plan):
    text = step_bytes(plan, "lantern").decode("ascii")
    assert text.startswith("ISO-10303-21;\nHEADER;\n") and text.endswith("END-ISO-10303-21;\n")
    assert "FILE_SCHEMA(('AP242_MANAGED_MODEL_BASED_3D_ENGINEERING_MIM_LF { 1 0 10303 442 1 1 4 }'));" in text
    assert re.findall(r"\d{4}-\d\d-\d\dT", text) == ["1970-01-01T"]
    assert "SI_UNIT(.MILLI.,.METRE.)" in text
    assert text.count("GEOMETRIC_CURVE_SET(") == 1


def test_knots_and_multiplicities_fit_the_control_points(plan):
    # ISO 10303-42: sum of multiplicities = degree + number of control points + 1
    text = step_bytes(plan, "lantern").decode("ascii")
    rows = re.findall(r"B_SPLINE_CURVE_WITH_KNOTS\('.*',3,\(([#\d,]+)\),.*?,\(([\d,]+)\),\(([\dE.,+-]+)\)", text)
    assert len(rows) == len(plan.branches)
    for points, multiplicity, knots in rows:
        assert sum(map(int, multiplicity.split(","))) == 3 + len(points.split(",")) + 1
        values = [float(v) for v in knots.split(",")]
        assert values == sorted(set(values)) and len(values) == len(multiplicity.split(","))


def test_kernel_finds_one_curve_per_branch_within_a_thousandth(plan, tmp_path):
    from OCP.GeomAPI import GeomAPI_ProjectPointOnCurve
    from OCP.gp import gp_Pnt

    curves, reader = read_back(step_bytes(plan, "lantern"), tmp_path)
    assert [len(curves), len(edges_of(reader))] == [len(plan.branches)] * 2
    for branch, (_, curve) in zip(plan.branches, curves, strict=True):
        for end, at in ((branch.xyz_mm[0], curve.StartPoint()), (branch.xyz_mm[-1], curve.EndPoint())):
            assert np.abs(end - (at.X(), at.Y(), at.Z())).max() < 1e-9
        for point in branch.xyz_mm[1:-1:3]:
            foot = GeomAPI_ProjectPointOnCurve(gp_Pnt(*map(float, point)), curve)
            assert foot.LowerDistance() < MATCH_MM


def test_kernel_reads_lengths_in_millimetres(plans, tmp_path):
    from OCP.BRepGProp import BRepGProp
    from OCP.GProp import GProp_GProps

    plan = plans.ring(radius_mm=12.0)
    _, reader = read_back(step_bytes(plan, "ring"), tmp_path)
    lengths = []
    for edge in edges_of(reader):
        props = GProp_GProps()
        BRepGProp.LinearProperties_s(edge, props)
        lengths.append(props.Mass())
    # half a circle of radius 12 is pi 12 = 37.699 mm; leads run 18 mm to the faces of the 60 mm box
    assert lengths == pytest.approx([np.pi * 12.0, np.pi * 12.0, 18.0, 18.0], abs=2e-3)


def test_bore_is_readable_after_import(plans, tmp_path):
    from OCP.STEPCAFControl import STEPCAFControl_Reader
    from OCP.TCollection import TCollection_ExtendedString
    from OCP.TDataStd import TDataStd_NamedData
    from OCP.TDF import TDF_AttributeIterator, TDF_ChildIterator
    from OCP.TDocStd import TDocStd_Document

    data = step_bytes(wavy_plan(plans), "lantern")
    curves, _ = read_back(data, tmp_path)
    assert curves[0][0] == "B1 bore 4.20..5.10 mm"
    reader = STEPCAFControl_Reader()
    reader.SetMetaMode(True)
    reader.ReadFile(str(tmp_path / "centrelines.step"))
    document = TDocStd_Document(TCollection_ExtendedString("x"))
    reader.Transfer(document)
    found, children = {}, TDF_ChildIterator(document.Main(), True)
    while children.More():
        attributes = TDF_AttributeIterator(children.Value())
        while attributes.More():
            item = attributes.Value()
            if isinstance(item, TDataStd_NamedData):
                item.LoadDeferredData()
                key = TCollection_ExtendedString("B1")
                if item.HasString(key):
                    found["B1"] = str(item.GetString(key).ToExtString())
            attributes.Next()
        children.Next()
    assert found["B1"].startswith("bore 4.20..5.10 mm, mean 4.65 mm; at mm along: 0.0 4.200, ")


def test_few_knots_where_the_branch_is_smooth(plans):
    plan = wavy_plan(plans)
    text = step_bytes(plan, "x").decode("ascii")
    assert text.count("CARTESIAN_POINT") < 60  # 200 samples, mostly smooth
    assert step_fit_error_mm(plan) < MATCH_MM


def test_sharp_corner_of_a_lead_is_kept(plans, tmp_path):
    path = plans.sampled([(0, 0, 0), (10, 0, 0), (10, 8, 0)], 4.0)
    plan = plans.plan_of([plans.branch("L-a", "N1", "X1", path, 4.0, lead=True)])
    (_, curve), *rest = read_back(step_bytes(plan, "x"), tmp_path)[0]
    assert not rest
    where = np.linspace(curve.FirstParameter(), curve.LastParameter(), 1001)
    points = np.array([(p.X(), p.Y()) for p in (curve.Value(float(t)) for t in where)])
    # no ripple: every point lies on one of the two straight runs
    off = np.minimum(np.abs(points[:, 1]), np.abs(points[:, 0] - 10.0))
    assert off.max() < MATCH_MM


def test_two_and_three_samples_make_a_cubic(plans, tmp_path):
    plan = plans.plan_of(
        [
            plans.branch("B1", "N1", "N2", [(0, 0, 0), (0.5, 0.5, 0)], 4.0),
            plans.branch("B2", "N2", "N3", [(0.5, 0.5, 0), (1.0, 0.6, 0), (1.5, 0.5, 0)], 4.0),
        ]
    )
    curves, _ = read_back(step_bytes(plan, "x"), tmp_path)
    assert [c.Degree() for _, c in curves] == [3, 3]
    assert step_fit_error_mm(plan) < 1e-9


def test_same_bytes_again_and_text_stays_ascii(plans):
    plan = wavy_plan(plans)
    data = step_bytes(plan, "näme 'x' \\ ; #1=")
    assert data == step_bytes(wavy_plan(plans), "näme 'x' \\ ; #1=")
    assert rb"'n\X2\00E4\X0\me ''x'' \\ ; #1= channel centrelines'" in data
    assert rb"'L-\X2\00E9\X0\''n bore 5.10..5.10 mm'" in data


def test_name_holds_id_and_bore_range(plans):
    assert curve_name(wavy_plan(plans).branches[0]) == "B1 bore 4.20..5.10 mm"


def test_no_branch_is_refused(plans):
    with pytest.raises(ExportError) as caught:
        step_bytes(plans.plan_of([]), "x")
    assert caught.value.code == "curves-none"


def test_branch_without_length_is_refused(plans):
    point = [(1.0, 2.0, 3.0), (1.0, 2.0, 3.0)]
    with pytest.raises(ExportError) as caught:
        step_bytes(plans.plan_of([plans.branch("B1", "N1", "N1", point, 4.0)]), "x")
    assert caught.value.code == "curve-without-length" and "B1" in caught.value.where
