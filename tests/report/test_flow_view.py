"""The flow in the report: velocity is flow over area, arrows follow the flow, figures carry their units."""

import re
from pathlib import Path

import numpy as np
import pytest

from morph.check.flow import check_flow
from morph.flow.gauge import measure_gauge
from morph.flow.measure import measure_flow
from morph.report.flow_view import PRESSURE, REYNOLDS, VELOCITY, along_branch, flow_numbers, flow_scene
from morph.report.gauge_view import draw_gauge
from morph.report.page import make_report
from morph.report.sheet_view import draw_sheet
from morph.report.summary import make_summary
from morph.settings.job import CoolantSettings
from morph.settings.profile import read_profile

pytestmark = pytest.mark.quick


@pytest.fixture(scope="module")
def flow(records):
    return measure_flow(records.plan, CoolantSettings(flow_l_min=2.0), read_profile("steel-40um", Path()))


def test_velocity_along_a_branch_is_flow_over_the_area_of_its_circle(records, flow):
    # continuity: 2 L/min through a round bore d is 2/60000 / (pi d^2 / 4) m/s (the hand-made plan is round)
    for index, branch in enumerate(records.plan.branches):
        row = flow.branches[index]
        if branch.id.startswith("L-") or row.flow_l_min == 0.0:
            continue
        exact = abs(row.flow_l_min) / 60_000.0 / (0.25 * np.pi * (1e-3 * branch.bore_mm) ** 2)
        assert along_branch(flow, index)[VELOCITY][1:-1] == pytest.approx(exact[1:-1], rel=2e-3)


def test_pressure_runs_from_node_to_node_and_falls_with_the_flow(records, flow):
    node = dict(flow.node_bar)
    for index, branch in enumerate(records.plan.branches):
        shown, row = along_branch(flow, index), flow.branches[index]
        if row.flow_l_min == 0.0:
            assert not shown[VELOCITY].any() and not shown[REYNOLDS].any()
            continue
        assert shown[PRESSURE][[0, -1]] == pytest.approx([node[branch.start], node[branch.end]], abs=1e-12)


def test_arrows_follow_the_flow_and_stand_still_without_it(records, flow):
    scene = flow_scene(records, flow)
    with_flow = draw_sheet(scene)
    still = [row.id for row in flow.branches if row.is_channel and row.flow_l_min == 0.0]
    assert still and all(scene.flow[name] == 0.0 for name in still)
    assert with_flow.count('stroke-linecap="round"') > 0
    assert "velocity, m/s" in with_flow and "slowest channel" in with_flow


def test_page_and_summary_hold_every_branch(records, make_records, flow):
    full = make_records(flow=flow, verdicts=records.verdicts + check_flow(flow))
    summary = make_summary(full)
    page = make_report(full, summary)
    block = summary["flow"]
    assert [row["id"] for row in block["branches"]] == [branch.id for branch in full.plan.branches]
    assert block["flow_l_min"] == pytest.approx(2.0, rel=1e-9)
    assert block["drop_bar"] == pytest.approx(flow.supplies[0].drop_bar)
    assert '<section id="flow">' in page and "Flow in all" in page
    for _, figure in flow_numbers(flow):
        assert figure in page
    assert '"name": "velocity"' in page  # the 3D picture can show it


def test_bench_test_stands_in_the_page_with_its_curve(records, make_records, flow):
    coolant, profile = CoolantSettings(flow_l_min=2.0), read_profile("steel-40um", Path())
    gauge = measure_gauge(records.plan, coolant, profile, flow)
    full = make_records(flow=flow, gauge=gauge, verdicts=records.verdicts + check_flow(flow, gauge))
    summary = make_summary(full)
    page = make_report(full, summary)
    point = gauge.curves[0][3]
    assert f"{point.drop_bar:.3f} bar" in page and f"{point.flow_l_min[1]:.2f} L/min" in page
    assert point.flow_l_min[1] == pytest.approx(2.0, rel=1e-6)  # the step at the working drop
    hidden = [row for row in gauge.blocked if not row.detectable]
    verdict = next(v for v in full.verdicts if v.code == "flow-blocked-hidden")
    assert verdict.value == len(hidden) and verdict.branch_ids == tuple(row.id for row in hidden)
    assert len(summary["flow"]["gauge"]["blocked"]) == sum(row.through for row in flow.branches)


def test_curve_ends_where_its_axes_say(records, flow):
    gauge = measure_gauge(records.plan, CoolantSettings(flow_l_min=2.0), read_profile("steel-40um", Path()), flow)
    svg = draw_gauge(gauge.curves[0], "gauge-1")
    assert svg.count("<circle") == len(gauge.curves[0])
    assert "pressure between the ports, bar" in svg and "flow, L/min" in svg
    heights = [float(y) for y in re.findall(r'<circle cx="[^"]+" cy="([^"]+)"', svg)]
    assert heights == sorted(heights, reverse=True)  # more pressure, more flow


def test_a_job_without_coolant_has_no_flow_section(page, summary):
    assert summary["flow"] is None and '<section id="flow">' not in page
