"""Mesh files that are right come out exactly, whoever wrote them; volumes and areas are those of the box by hand."""

import numpy as np
import pytest
import trimesh

from morph.geometry.mesh import measure_condition, mesh_area_mm2, mesh_volume_mm3
from morph.read.mesh_file import LengthUnit, read_mesh
from tests.read import bodies

pytestmark = pytest.mark.quick

VOLUME_MM3, AREA_MM2 = 20.0 * 30.0 * 40.0, 2.0 * (20.0 * 30.0 + 20.0 * 40.0 + 30.0 * 40.0)
FILES = {
    "a.stl": bodies.stl_bytes(),
    "solid.STL": bodies.stl_bytes(head=b"solid of another writer"),
    "ascii.stl": bodies.ascii_stl(),
    "upper.stl": bodies.ascii_stl().upper(),
    "a.obj": bodies.obj_text(),
    "triangles.obj": bodies.obj_text(bodies.BOX_TRIANGLES),
    "a.ply": bodies.ply_bytes("<"),
    "big.ply": bodies.ply_bytes(">"),
    "triangles.ply": bodies.ply_bytes("<", bodies.BOX_TRIANGLES.tolist()),
    "a.3mf": bodies.package(),
    "elsewhere.3mf": bodies.package(part="Models/body.model"),
}


def read(tmp_path, name, content, unit=None):
    (tmp_path / name).write_bytes(content)
    return read_mesh(tmp_path / name, unit)


@pytest.mark.parametrize("name", FILES)
def test_every_format_gives_the_box(tmp_path, name):
    found = read(tmp_path, name, FILES[name])
    assert len(found.mesh.vertices_mm) == 8 and len(found.mesh.triangles) == 12 and found.dropped == 0
    assert measure_condition(found.mesh).closed
    assert mesh_volume_mm3(found.mesh) == pytest.approx(VOLUME_MM3, rel=1e-12)
    assert mesh_area_mm2(found.mesh) == pytest.approx(AREA_MM2, rel=1e-12)
    assert found.source == name and len(found.content) == 16 and found.unit is LengthUnit.MM
    assert found.unit_from == ("file" if name.endswith("3mf") else "size")


@pytest.mark.parametrize("name", ["t.stl", "t.obj", "t.ply", "t.3mf", "ascii.stl", "ascii.ply"])
def test_files_of_an_outside_writer(tmp_path, name):
    body = trimesh.creation.torus(30.0, 8.0, major_sections=64, minor_sections=24)
    kinds = {"ascii.stl": {"file_type": "stl_ascii"}, "ascii.ply": {"encoding": "ascii"}}
    body.export(tmp_path / name, **kinds.get(name, {}))
    found = read_mesh(tmp_path / name).mesh
    condition = measure_condition(found)
    assert condition.closed and condition.genus == 1 and len(found.triangles) == len(body.faces)
    assert mesh_volume_mm3(found) == pytest.approx(body.volume, rel=1e-6)


@pytest.mark.parametrize(
    ("word", "factor"),
    [("micron", 1e-3), ("millimeter", 1.0), ("centimeter", 10.0), ("inch", 25.4), ("foot", 304.8), ("meter", 1000.0)],
)
def test_the_unit_of_a_3mf_is_honoured(tmp_path, word, factor):
    # 3MF Core Specification 1.3, section 3.2: the six words of ST_Unit; inch and foot by definition
    points = bodies.BOX_POINTS / factor
    model = bodies.model_xml(f'<object id="1">{bodies.mesh_xml(points)}</object>', unit=word)
    found = read(tmp_path, "a.3mf", bodies.package(model))
    assert mesh_volume_mm3(found.mesh) == pytest.approx(VOLUME_MM3, rel=1e-9) and found.unit_from == "file"


def test_the_unit_of_the_job_is_honoured(tmp_path):
    found = read(tmp_path, "a.stl", bodies.stl_bytes(bodies.BOX_POINTS / 25.4), LengthUnit.INCH)
    assert mesh_volume_mm3(found.mesh) == pytest.approx(VOLUME_MM3, rel=1e-6)
    assert (found.unit, found.unit_from) == (LengthUnit.INCH, "job")


def test_items_and_components_are_placed(tmp_path):
    # a component turned by 90 degrees about z and moved, in an item moved and mirrored: rows x, y, z, shift
    model = bodies.model_xml(
        f'<object id="1">{bodies.mesh_xml()}</object><object id="2"><components>'
        '<component objectid="1" transform="0 1 0 -1 0 0 0 0 1 100 0 0"/></components></object>'
        f'<object id="3" type="support">{bodies.mesh_xml()}</object>',
        '<item objectid="2" transform="1 0 0 0 1 0 0 0 -1 0 7 5"/><item objectid="3"/>',
    )
    found = read(tmp_path, "a.3mf", bodies.package(model)).mesh
    # x' = -y + 100, y' = x + 7, z' = -z + 5, worked by hand
    np.testing.assert_allclose(found.vertices_mm.min(axis=0), [70.0, 7.0, -35.0])
    np.testing.assert_allclose(found.vertices_mm.max(axis=0), [100.0, 27.0, 5.0])
    assert mesh_volume_mm3(found) == pytest.approx(VOLUME_MM3)  # a mirror turns the triangles too


def test_corners_rounded_twice_are_welded(tmp_path):
    rng = np.random.default_rng(5)
    corners = bodies.BOX_POINTS[bodies.BOX_TRIANGLES].reshape(-1, 3)
    rounded = corners + rng.uniform(-2e-6, 2e-6, corners.shape)
    rows = np.arange(len(corners)).reshape(-1, 3).tolist()
    found = read(tmp_path, "a.obj", bodies.obj_text(rows, rounded).replace(b".9g", b""))
    assert len(found.mesh.vertices_mm) == 8 and measure_condition(found.mesh).closed


def test_triangles_without_area_are_counted_and_left_out(tmp_path):
    rows = [*bodies.BOX_TRIANGLES.tolist(), [0, 0, 1]]
    found = read(tmp_path, "a.stl", bodies.stl_bytes(triangles=rows))
    assert found.dropped == 1 and measure_condition(found.mesh).closed


def test_polygons_with_a_reflex_corner_are_fanned_from_it(tmp_path):
    # an arrow head of four corners, extruded by 10 mm; area by the shoelace formula 400 mm2
    outline = np.array([[0.0, 0.0], [40.0, 20.0], [0.0, 40.0], [20.0, 20.0]])
    points = np.array([[x, y, z] for z in (0.0, 10.0) for x, y in outline])
    sides = [[k, (k + 1) % 4, 4 + (k + 1) % 4, 4 + k] for k in range(4)]
    found = read(tmp_path, "a.obj", bodies.obj_text([[3, 2, 1, 0], [4, 5, 6, 7], *sides], points)).mesh
    assert measure_condition(found).closed and mesh_volume_mm3(found) == pytest.approx(4000.0)
