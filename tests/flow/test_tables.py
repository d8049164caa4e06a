"""The flow as plain data; graph.json alone lets EPANET find the same split."""

import json
import logging
import warnings
from pathlib import Path

import pytest

from morph.export.tables import graph_json
from morph.flow.measure import measure_flow
from morph.flow.tables import FLOW_COLUMNS, flow_rows, graph_flow
from morph.settings.profile import read_profile
from tests.flow.epanet import GRAVITY, VISCOSITY
from tests.flow.plans import coolant, ladder

pytestmark = pytest.mark.quick

PROFILE = read_profile("steel-40um", Path())
SPLIT = 0.02
"""Of the whole flow: EPANET takes Swamee and Jain's friction and a cubic between Re 2000 and 4000, morph Churchill's;
a rung that all but stands still is held by its junctions, which a coefficient on its own flow cannot follow."""


def epanet_split(graph, folder):
    """Flows in L/min by branch from the JSON alone: pipes between nodes, the given drop between in and out ports."""
    import wntr

    logging.getLogger("wntr").setLevel(logging.ERROR)
    flow = graph["flow"]
    density, viscosity = flow["coolant"]["density_kg_m3"], flow["coolant"]["viscosity_pa_s"]
    head = 1e5 * flow["coolant"]["supplies"][0]["drop_bar"] / (density * GRAVITY)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        model = wntr.network.WaterNetworkModel()
        model.options.hydraulic.headloss = "D-W"
        model.options.hydraulic.viscosity = viscosity / density / VISCOSITY
        model.options.hydraulic.accuracy = 1e-5
        model.options.hydraulic.trials = 200
        model.options.time.duration = 0
        ports = {port["node"]: port["role"] for port in flow["coolant"]["ports"]}
        for node in graph["nodes"]:
            if node["id"] in ports:
                model.add_reservoir(node["id"], base_head=head if ports[node["id"]] == "in" else 0.0)
            else:
                model.add_junction(node["id"], base_demand=0.0, elevation=0.0)
        for branch in graph["branches"]:
            pipe = flow["branches"][branch["id"]]["pipe"]
            if pipe is not None:
                model.add_pipe(
                    branch["id"],
                    branch["from"],
                    branch["to"],
                    length=1e-3 * pipe["length_mm"],
                    diameter=1e-3 * pipe["diameter_mm"],
                    roughness=1e-3 * pipe["roughness_mm"],
                    minor_loss=pipe["minor_k"],
                )
        result = wntr.sim.EpanetSimulator(model).run_sim(file_prefix=str(folder / "net"))
    return {name: 60_000.0 * float(value) for name, value in result.link["flowrate"].iloc[0].items()}


@pytest.mark.parametrize("flow", [2.0, 6.0])
def test_epanet_finds_the_split_from_the_json_alone(flow, tmp_path):
    plan = ladder(5)
    result = measure_flow(plan, coolant(flow_l_min=flow), PROFILE)
    graph = json.loads(graph_json(plan, result))
    split = epanet_split(graph, tmp_path)
    ours = {row.id: row.flow_l_min for row in result.branches}
    for name, value in split.items():
        assert value == pytest.approx(ours[name], abs=SPLIT * flow), name
    assert split["L-in"] == pytest.approx(-flow, rel=SPLIT)


def test_rows_fit_their_columns():
    result = measure_flow(ladder(3), coolant(), PROFILE)
    rows = flow_rows(result)
    assert [row[0] for row in rows] == [branch.id for branch in ladder(3).branches]
    assert all(len(row) == len(FLOW_COLUMNS) for row in rows)
    cells = dict(zip(FLOW_COLUMNS, rows[0], strict=True))
    parts = sum(cells[name] for name in ("friction_bar", "bends_bar", "ends_bar", "junctions_bar"))
    assert cells["drop_bar"] == pytest.approx(parts, abs=1e-12)
    assert json.loads(json.dumps(graph_flow(result), allow_nan=False))["nodes"]["X-out"]["total_bar"] == 0.0
