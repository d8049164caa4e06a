"""The files of one whole build, read by other libraries: STEP curves against STL walls, 3MF against STL and summary.

OCP reads the STEP file, trimesh the meshes; distances are trimesh's own nearest-point search.
"""

import io
import json
from pathlib import Path

import numpy as np
import pytest
import trimesh

import morph
from tests.export.test_step import read_back

JOB = Path(__file__).parent.parent / "samples" / "tealight-cup" / "job.toml"
AWAY_BORES = 1.5  # nearer to a branch end the junction's other channels and fillets are the wall
WALL_MM = 0.03  # promised: curve to written wall equals bore / 2
MATCH_MM = 1e-3  # promised: curve to graph.json


@pytest.fixture(scope="module")
def built():
    return morph.build(JOB)


@pytest.fixture(scope="module")
def curves(built, tmp_path_factory):
    found, _ = read_back(built.files["centrelines.step"], tmp_path_factory.mktemp("step"))
    sampled = {}
    for name, curve in found:
        parameter = np.linspace(curve.FirstParameter(), curve.LastParameter(), 400)
        points = (curve.Value(float(t)) for t in parameter)
        sampled[name.split()[0]] = np.array([[p.X(), p.Y(), p.Z()] for p in points])
    return sampled


def test_step_curves_are_the_branches_of_the_graph_file(built, curves):
    graph = json.loads(built.files["graph.json"])
    assert set(curves) == {branch["id"] for branch in graph["branches"]}
    for branch in graph["branches"]:
        samples = np.array(branch["xyz_mm"])
        line = curves[branch["id"]]
        ends = np.abs(line[[0, -1]] - samples[[0, -1]]).max()
        assert ends <= MATCH_MM


def test_the_written_wall_lies_half_a_bore_from_the_step_curves(built, curves):
    """Away from junctions and where the section is round, the nearest wall is half a bore away."""
    wall = trimesh.load(io.BytesIO(built.files["channels.stl"]), file_type="stl")
    wall.merge_vertices()
    graph = json.loads(built.files["graph.json"])
    checked = 0
    for branch in graph["branches"]:
        samples, bore = np.array(branch["xyz_mm"]), np.array(branch["bore_along_mm"])
        line = curves[branch["id"]]
        along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(samples, axis=0), axis=1))])
        way = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(line, axis=0), axis=1))])
        bore_on_line = np.interp(way * along[-1] / way[-1], along, bore)
        away = np.minimum(way, way[-1] - way) > AWAY_BORES * bore_on_line
        if not away.any():
            continue
        index = np.flatnonzero(away)[::4]
        _, distance, _ = trimesh.proximity.closest_point(wall, line[index])
        assert np.abs(distance - 0.5 * bore_on_line[index]).max() <= WALL_MM
        checked += len(index)
    assert checked > 200


def test_the_printed_file_is_the_stl_stood_up(built):
    scene = trimesh.load(io.BytesIO(built.files["insert.3mf"]), file_type="3mf")
    assert scene.units == "millimeter"
    posed = scene.geometry["insert as printed"]
    plain = trimesh.load(io.BytesIO(built.files["insert.stl"]), file_type="stl")
    plain.merge_vertices()
    assert posed.is_watertight and plain.is_watertight
    assert posed.bounds[0][2] == pytest.approx(0.0, abs=1e-6)
    assert posed.volume == pytest.approx(plain.volume, rel=1e-6)
    assert built.summary["insert"]["volume_mm3"] == pytest.approx(plain.volume, rel=1e-6)
    profile = built.job.printing.profile
    mass_g = plain.volume * 1e-3 * profile.density_kg_m3.value * 1e-3
    assert built.summary["insert"]["mass_g"] == pytest.approx(mass_g, rel=1e-6)


def test_every_declared_port_is_open_through_the_written_insert(built):
    """A ray along each lead from outside meets no metal before the channel's far end (ports.csv against the mesh)."""
    insert = trimesh.load(io.BytesIO(built.files["insert.stl"]), file_type="stl")
    insert.merge_vertices()
    for leave in built.records.plan.exits:
        origin = leave.xyz_mm + 20.0 * leave.leave
        hits, _, _ = insert.ray.intersects_location([origin], [-leave.leave])
        depth = np.sort((origin - hits) @ leave.leave)
        assert len(depth) == 0 or depth[0] > 20.0 + leave.bore_mm
