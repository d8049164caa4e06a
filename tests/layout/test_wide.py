"""Regions wider than any legal bore: found, outlined, and capped, split or refused as the job says."""

import numpy as np
import pytest

from morph.core.errors import GeometryError
from morph.layout.extract import make_graph
from morph.layout.graph import count_loops
from morph.layout.wide import find_stretches, legal_bore_mm, settled, treat_wide
from morph.settings.job import ServiceSettings, WideRule
from tests.layout.drawing import drawn, ports, settings

pytestmark = pytest.mark.quick

SIZE_MM = (120.0, 60.0)
BOTH = ports(("a", "in", 0, 30), ("b", "out", 120, 30))
HEADER = [([(-9, 30), (20, 30)], 5.0), ([(20, 30), (100, 30)], 9.0), ([(100, 30), (130, 30)], 5.0)]
"""A channel of 5 mm with a header of 9 mm from x = 20 to 100."""
LEGAL_MM, WALL_MM = 6.0, 2.0


def graph_of(lines, declared=BOTH):
    density = drawn(lines, SIZE_MM, 0.5)
    return make_graph(density, settings(density), declared)


def test_nothing_wide_nothing_done():
    graph = graph_of([*HEADER[:1], ([(20, 30), (130, 30)], 5.0)])
    for rule in WideRule:
        assert treat_wide(graph, rule, LEGAL_MM, WALL_MM) == (graph, ())


def test_a_header_is_found_and_outlined():
    graph = graph_of(HEADER)
    same, (region,) = treat_wide(graph, WideRule.CAP, LEGAL_MM, WALL_MM)
    assert same is graph
    assert region.id == "W1" and region.branches == ("B1",)
    assert region.widest_mm == pytest.approx(9.0, abs=0.15)
    low, high = region.outline_mm.min(axis=0), region.outline_mm.max(axis=0)
    assert low[1] == pytest.approx(25.5, abs=0.3) and high[1] == pytest.approx(34.5, abs=0.3)
    assert 9.0 < low[0] < 16.0 and 104.0 < high[0] < 111.0, "the step in width is read as a taper of a bore or two"
    assert region.area_mm2 == pytest.approx(80 * 9 + np.pi * 4.5**2, rel=0.08)
    assert region.lost_mm2 == pytest.approx(80 * 3 + np.pi * (4.5**2 - 3**2), rel=0.15)
    assert region.ways == 1 and region.bore_mm == LEGAL_MM
    assert 1.0 < region.conductance_ratio / (6 / 9) ** (19 / 7) < 1.3, (
        "a little more than by the full width: the tapers"
    )
    assert 1.0 < region.laminar_ratio / (6 / 9) ** 4 < 1.4
    assert "lost" in region.said and "Blasius" in region.said


def test_a_split_carries_what_was_drawn():
    graph = graph_of(HEADER)
    split, (region,) = treat_wide(graph, WideRule.SPLIT, LEGAL_MM, WALL_MM)
    assert region.ways == 3  # (9 / 6)^(19/7) = 3.006, a little less for the tapers
    assert region.bore_mm <= LEGAL_MM and region.lost_mm2 == 0.0
    assert region.conductance_ratio == pytest.approx(1.0, abs=1e-9)
    ends = [(branch.start, branch.end) for branch in split.branches]
    number = {node.id: k for k, node in enumerate(split.nodes)}
    assert count_loops(len(split.nodes), [(number[a], number[b]) for a, b in ends]) == (1, 2)
    ways = [
        branch for branch in split.branches if float(branch.bore_mm.max()) == pytest.approx(region.bore_mm, rel=0.02)
    ]
    assert len(ways) == 3 and len({frozenset((b.start, b.end)) for b in ways}) == 1


def test_the_ways_of_a_split_carry_it_by_their_own_bores_and_lengths():
    """Independent of the code: loss of a way L Q^(7/4) d^(-19/4) (Blasius), summed over the record's branches."""
    graph = graph_of(HEADER)
    split, (region,) = treat_wide(graph, WideRule.SPLIT, LEGAL_MM, WALL_MM)
    (stretch,) = find_stretches(graph, LEGAL_MM)
    drawn_arc = np.concatenate([[0], np.cumsum(np.hypot(*np.diff(stretch.place_mm, axis=0).T))])
    drawn_flow = np.trapezoid(stretch.bore_mm**-4.75, drawn_arc) ** (-4 / 7)
    ways = [b for b in split.branches if float(b.bore_mm.max()) == pytest.approx(region.bore_mm, rel=0.02)]
    flow = sum((b.length_mm * float(b.bore_mm.mean()) ** -4.75) ** (-4 / 7) for b in ways)
    assert flow / drawn_flow == pytest.approx(1.0, abs=0.02)


def test_ways_keep_the_wall_between_them():
    split, _ = treat_wide(graph_of(HEADER), WideRule.SPLIT, LEGAL_MM, WALL_MM)
    ways = [b for b in split.branches if float(np.ptp(b.sheet_mm[:, 1])) > 1.0 or b.length_mm > 60]
    at_60 = sorted(float(np.interp(60, b.sheet_mm[:, 0], b.sheet_mm[:, 1])) for b in ways)
    bore = [float(np.interp(60, b.sheet_mm[:, 0], b.bore_mm)) for b in ways]
    assert np.diff(at_60).min() >= max(bore) + WALL_MM - 0.05


def test_a_split_that_does_not_fit_is_narrower_or_capped_and_says_why():
    low = graph_of([([(x, 6 if y == 30 else y) for x, y in points], w) for points, w in HEADER], ports(("a", "in", 0, 6), ("b", "out", 120, 6)))  # fmt: skip
    graph, (region,) = treat_wide(low, WideRule.SPLIT, LEGAL_MM, WALL_MM)
    assert region.ways == 1 and "leave the sheet" in region.said and len(graph.branches) == len(low.branches)
    near = graph_of(
        [*HEADER, ([(-9, 48), (130, 48)], 4.0)],
        BOTH + ports(("c", "in", 0, 48), ("d", "out", 120, 48)),
    )
    _, (region,) = treat_wide(near, WideRule.SPLIT, LEGAL_MM, 5.0)
    assert region.ways == 2 and region.bore_mm == LEGAL_MM, "three, 11 mm apart, would touch the other channel"
    assert 0.6 < region.conductance_ratio < 0.9 and f"{100 * region.conductance_ratio:.0f} %" in region.said


def test_a_lake_too_short_to_split_is_capped():
    lake = graph_of([([(-9, 30), (130, 30)], 4.0), ([(59, 30), (61, 30)], 14.0)])
    _, (region,) = treat_wide(lake, WideRule.SPLIT, LEGAL_MM, WALL_MM)
    assert region.ways == 1 and "too short" in region.said and region.lost_mm2 > 0


def test_what_was_split_is_a_notice():
    graph = graph_of(HEADER)
    assert settled(graph, WideRule.CAP, LEGAL_MM, WALL_MM) is graph
    split = settled(graph, WideRule.SPLIT, LEGAL_MM, WALL_MM)
    (notice,) = [item for item in split.notices if item.code == "wide-treated"]
    assert "W1" in notice.text and "3 ways" in notice.text
    with pytest.raises(GeometryError):
        settled(graph, WideRule.ERROR, LEGAL_MM, WALL_MM)


def test_an_error_names_the_worst_place():
    with pytest.raises(GeometryError) as caught:
        treat_wide(graph_of(HEADER), WideRule.ERROR, LEGAL_MM, WALL_MM)
    assert caught.value.code == "wide-region-refused" and "B1" in caught.value.found


def test_the_legal_bore_by_range_and_by_depth():
    """At depth 8 with 3 mm and one bore of wall: 2 (8 - 3) = 10, and 8 / 1.5 = 5.33."""
    service = ServiceSettings(wall_face_mm=3.0, wall_face_bores=1.0)
    assert legal_bore_mm((3.0, 12.0), 8.0, service) == pytest.approx(8 / 1.5)
    assert legal_bore_mm((3.0, 5.0), 8.0, service) == 5.0
    assert legal_bore_mm((3.0, 12.0), None, service) == 12.0
    assert legal_bore_mm((3.0, 12.0), 3.5, service) == 3.0
