"""Real optimiser output, five layouts: each builds on a cylinder, closed as written, with the right topology.

The outside routes are trimesh's and manifold3d's own reading of the STL bytes, Euler's formula on
trimesh's counts, and networkx's count of cycles in graph.json.
"""

import io
import json
from pathlib import Path

import manifold3d
import networkx as nx
import numpy as np
import pytest
import trimesh

import morph

JOBS = sorted((Path(__file__).parent / "data" / "layouts").glob("*.toml"))


@pytest.fixture(scope="module", params=JOBS, ids=lambda path: path.stem)
def built(request):
    return morph.build(request.param)


def _outside(content: bytes) -> tuple[trimesh.Trimesh, manifold3d.Manifold]:
    body = trimesh.load(io.BytesIO(content), file_type="stl")
    body.merge_vertices()
    solid = manifold3d.Manifold(
        manifold3d.Mesh(np.asarray(body.vertices, np.float32), np.asarray(body.faces, np.uint32))
    )
    return body, solid


def test_there_are_five():
    assert len(JOBS) == 5


def test_nothing_fails(built):
    assert built.headline.value != "fail", [v.text for v in built.verdicts if v.outcome.value == "fail"]


def test_closed_as_written(built):
    for name in ("insert.stl", "channels.stl"):
        body, solid = _outside(built.files[name])
        assert body.is_watertight and body.is_winding_consistent and body.volume > 0.0
        assert solid.status() == manifold3d.Error.NoError
        assert solid.volume() == pytest.approx(body.volume, rel=1e-5)


def test_topology_from_the_graph_file(built):
    graph = json.loads(built.files["graph.json"])
    net = nx.MultiGraph()
    net.add_nodes_from(node["id"] for node in graph["nodes"])
    net.add_edges_from((branch["from"], branch["to"]) for branch in graph["branches"])
    circuits = nx.number_connected_components(net)
    loops = net.number_of_edges() - net.number_of_nodes() + circuits
    exits = sum(node["kind"] == "exit" for node in graph["nodes"])
    channels, _ = _outside(built.files["channels.stl"])
    insert, _ = _outside(built.files["insert.stl"])
    assert channels.body_count == circuits
    if not built.records.plan.merges:
        assert circuits - channels.euler_number // 2 == loops
        assert 1 - insert.euler_number // 2 == loops + exits - circuits


def test_openings_are_the_declared_ones(built):
    openings, exits = built.records.insert.openings, built.records.plan.exits
    assert len(openings) == len(exits) == len(built.job.ports)
    for leave in exits:
        gap = min(np.linalg.norm(opening.centre_mm - leave.xyz_mm) for opening in openings)
        assert gap < 0.1
