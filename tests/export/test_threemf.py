"""3MF against the rules of the core specification (3MF Core Specification 3.4) and an independent reader."""

import io
import zipfile

import numpy as np
import pytest
import trimesh
from lxml import etree

from morph.core.errors import ExportError
from morph.export.threemf import build_rotation, threemf_bytes
from morph.geometry.mesh import Mesh

pytestmark = pytest.mark.quick

NS = {"m": "http://schemas.microsoft.com/3dmanufacturing/core/2015/02"}


def model_of(data: bytes):
    return etree.fromstring(zipfile.ZipFile(io.BytesIO(data)).read("3D/3dmodel.model"))


@pytest.fixture
def two(box_of):
    return (("insert as printed", box_of((-2, -3, 5), (2, 3, 15))), ("channels", box_of((-1, -1, 7), (1, 1, 9))))


def test_reads_back_with_names_unit_and_closed(two):
    scene = trimesh.load(io.BytesIO(threemf_bytes(two, (0, 0, 1))), file_type="3mf")
    assert sorted(scene.geometry) == ["channels", "insert as printed"]
    assert scene.units == "millimeter"
    for name, volume in (("insert as printed", 240.0), ("channels", 8.0)):
        mesh = scene.geometry[name]
        assert mesh.is_watertight and mesh.is_winding_consistent
        assert mesh.volume == pytest.approx(volume)


def test_unit_cube_reads_back_with_volume_one(box):
    # the minimal file of the specification's example, by an independent reader
    scene = trimesh.load(io.BytesIO(threemf_bytes((("cube", box),), (0, 0, 1))), file_type="3mf")
    assert scene.geometry["cube"].volume == pytest.approx(1.0)


@pytest.mark.parametrize("direction", [(0, 0, 1), (0, 0, -1), (1, 0, 0), (0, -2, 0), (1, 1, 1), (1e-9, 0, -1)])
def test_stands_on_the_plate_with_build_direction_up(two, direction):
    scene = trimesh.load(io.BytesIO(threemf_bytes(two, direction)), file_type="3mf")
    insert, channels = scene.geometry["insert as printed"], scene.geometry["channels"]
    assert insert.vertices[:, 2].min() == pytest.approx(0.0, abs=1e-9)
    unit = np.array(direction, float) / np.linalg.norm(direction)
    height = two[0][1].vertices_mm @ unit
    assert insert.vertices[:, 2].max() == pytest.approx(np.ptp(height), abs=1e-6)
    # both solids share the pose: the gap between their centres keeps its length and its height
    gap = two[0][1].vertices_mm.mean(0) - two[1][1].vertices_mm.mean(0)
    moved = insert.vertices.mean(0) - channels.vertices.mean(0)
    assert np.linalg.norm(moved) == pytest.approx(np.linalg.norm(gap), abs=1e-6)
    assert moved[2] == pytest.approx(gap @ unit, abs=1e-6)


def test_pose_keeps_the_hand(two):
    for direction in ((0, 0, -1), (1, 2, -3), (0.1, 0, -1)):
        rotation = build_rotation(direction)
        assert np.allclose(rotation @ rotation.T, np.eye(3), atol=1e-12)
        assert np.linalg.det(rotation) == pytest.approx(1.0)
        assert np.allclose(rotation @ np.array(direction) / np.linalg.norm(direction), [0, 0, 1], atol=1e-12)


def test_only_the_insert_is_made(two):
    model = model_of(threemf_bytes(two, (0, 0, 1)))
    kind = {o.get("name"): (o.get("id"), o.get("type")) for o in model.iterfind(".//m:object", NS)}
    assert [item.get("objectid") for item in model.iterfind("m:build/m:item", NS)] == [kind["insert as printed"][0]]
    assert kind["insert as printed"][1] == "model"
    assert kind["channels"][1] == "other"


def test_mesh_rules_of_the_core_specification(two):
    # section 4.1: every edge twice in opposite directions, distinct zero-based indices, at least 4 triangles
    model = model_of(threemf_bytes(two, (1, 1, 1)))
    assert model.get("unit") == "millimeter"
    for mesh in model.iterfind(".//m:mesh", NS):
        n = len(mesh.findall("m:vertices/m:vertex", NS))
        triangles = [[int(t.get(k)) for k in ("v1", "v2", "v3")] for t in mesh.iterfind("m:triangles/m:triangle", NS)]
        assert len(triangles) >= 4 and all(len(set(t)) == 3 and max(t) < n for t in triangles)
        edges = [(t[i], t[(i + 1) % 3]) for t in triangles for i in range(3)]
        assert len(set(edges)) == len(edges) and {e[::-1] for e in edges} == set(edges)


def test_package_parts_and_fixed_dates(two):
    data = threemf_bytes(two, (0, 0, 1))
    archive = zipfile.ZipFile(io.BytesIO(data))
    assert archive.namelist() == ["[Content_Types].xml", "_rels/.rels", "3D/3dmodel.model"]
    assert {info.date_time for info in archive.infolist()} == {(1980, 1, 1, 0, 0, 0)}
    relations = etree.fromstring(archive.read("_rels/.rels"))
    assert [r.get("Target") for r in relations] == ["/3D/3dmodel.model"]
    assert data == threemf_bytes(two, (0, 0, 1))


def test_description_takes_the_pose_back(two):
    data = threemf_bytes(two, (1, 2, 2))
    words = model_of(data).find("m:metadata", NS).text
    rows, shift = words.split("rows of R: ")[1].split("; t = ")
    rotation = np.array([[float(v) for v in row.split()] for row in rows.split(";")])
    offset = np.array([float(v) for v in shift.split()[:3]])
    posed = trimesh.load(io.BytesIO(data), file_type="3mf").geometry["channels"].vertices
    back = (posed - offset) @ rotation
    assert np.allclose(np.sort(back, 0), np.sort(two[1][1].vertices_mm, 0), atol=1e-6)


def test_names_are_escaped(box):
    name = "<script>\"&' nüt"
    scene = trimesh.load(io.BytesIO(threemf_bytes(((name, box),), (0, 0, 1))), file_type="3mf")
    assert list(scene.geometry) == [name]


@pytest.mark.parametrize("name", ["", "a\x00b", "tab\t", "\uffff"])
def test_unwritable_name_is_refused(box, name):
    with pytest.raises(ExportError) as caught:
        threemf_bytes(((name, box),), (0, 0, 1))
    assert caught.value.code == "object-name"


def test_zero_direction_is_refused(two):
    with pytest.raises(ExportError) as caught:
        threemf_bytes(two, (0, 0, 0))
    assert caught.value.code == "build-direction-zero"


def test_open_sheet_is_refused(box):
    with pytest.raises(ExportError) as caught:
        threemf_bytes((("sheet", Mesh(box.vertices_mm, box.triangles[:2])),), (0, 0, 1))
    assert caught.value.code == "mesh-too-few-triangles"
