"""The compiled field against a slow numpy twin: balls sampled along the centreline, blends by the formula."""

import numpy as np
import pytest

from morph.kernels.distance_field import (
    blocks_of_piece,
    code_cells,
    field_at,
    keep_near,
)
from morph.kernels.swept_ball import piece_direction, piece_distance
from morph.solid.sweep import STEEPEST_TAPER, blend_width_mm, make_sweep
from tests.solid import plans

NO_GRADIENT = np.empty(0)


def tapered(a, b, ra, rb):
    items = [plans.branch("B1", "N1", "N2", [a, b], [2 * ra, 2 * rb])]
    return make_sweep(plans.plan_of(items)).pieces


def by_balls(point, a, b, ra, rb, n=20001):
    """Least distance to balls along the piece."""
    t = np.linspace(0.0, 1.0, n)[:, None]
    return float((np.linalg.norm(point - (a + t * (b - a)), axis=1) - (ra + t[:, 0] * (rb - ra))).min())


@pytest.mark.parametrize("seed", range(6))
def test_distance_is_that_of_the_balls(seed):
    rng = np.random.default_rng(seed)
    a, b = rng.uniform(-5, 5, (2, 3))
    ra = rng.uniform(0.5, 3.0)
    rb = ra + rng.uniform(-0.4, 0.4) * np.linalg.norm(b - a) * (ra > 1.0)
    rb = max(rb, 0.3)
    pieces = tapered(a, b, ra, rb)
    for point in rng.uniform(-9, 9, (8, 3)):
        found = min(piece_distance(*point, pieces, i) for i in range(len(pieces)))
        assert found == pytest.approx(by_balls(point, a, b, ra, rb), abs=1e-6)


def test_a_taper_steeper_than_its_length_is_two_balls():
    pieces = tapered(np.zeros(3), np.array([1.0, 0, 0]), 1.0, 4.0)
    assert (pieces[:, 6] == 0.0).all() and STEEPEST_TAPER < 1.0
    assert min(piece_distance(9.0, 0.0, 0.0, pieces, i) for i in range(len(pieces))) == pytest.approx(9.0 - 1.0 - 4.0)


def whole_field(sweep, point, gradient=NO_GRADIENT):
    n = len(sweep.pieces)
    work, number = np.empty(n), np.empty(n, np.int64)
    near = np.arange(n)
    return field_at(*point, sweep.pieces, sweep.owner, sweep.nodes, sweep.blend_mm, near, n, work, number, gradient)


def blended_twin(sweep, point):
    """Pairs of runs on one node by the formula, written with plain loops over runs."""
    runs = {}
    for i, (run, node) in enumerate(sweep.owner.tolist()):
        d = piece_distance(*point, sweep.pieces, i)
        if run not in runs or d < runs[run][0]:
            runs[run] = (d, i, node)
    least, k, most = min(d for d, _, _ in runs.values()), sweep.blend_mm, 0.0
    for one, (d1, i1, n1) in runs.items():
        for two, (d2, i2, n2) in runs.items():
            if one >= two or n1 != n2:
                continue
            q1, q2 = max(0.0, 1 - (d1 - least) / k), max(0.0, 1 - (d2 - least) / k)
            cosine = np.dot(piece_direction(*point, sweep.pieces, i1), piece_direction(*point, sweep.pieces, i2))
            away = np.linalg.norm(point - sweep.nodes[n1, :3]) / sweep.nodes[n1, 3]
            fade = np.clip(2.0 * (1.0 - away), 0.0, 1.0)
            weight = np.clip(1 - cosine, 0.0, 1.0) ** 2 * fade**2 * (3 - 2 * fade)
            most = max(most, k / 4 * weight * (q1 * q2) ** 2)
    return least - most


@pytest.fixture(scope="module")
def crotch():
    items = [
        plans.branch("B1", "N1", "N2", plans.sampled([(0, 0, 0), (9, 1, 0)], 3.0), 3.0),
        plans.branch("B2", "N1", "N3", plans.sampled([(0, 0, 0), (-2, 8, 1)], 3.0), 3.6),
        plans.branch("B3", "N1", "N4", plans.sampled([(0, 0, 0), (3, -4, 7)], 3.0), 2.6),
    ]
    return make_sweep(plans.plan_of(items, blend_mm=0.7))


def test_blended_field_is_the_formula(crotch):
    rng = np.random.default_rng(5)
    blended = 0
    for point in rng.uniform(-4, 4, (60, 3)):
        value, amount = whole_field(crotch, point)
        assert value == pytest.approx(blended_twin(crotch, point), abs=1e-12)
        blended += amount > 0.0
    assert blended > 10


def test_gradient_is_that_of_differences_where_nothing_blends(crotch):
    rng = np.random.default_rng(6)
    checked = 0
    for point in rng.uniform(-6, 6, (40, 3)):
        gradient = np.zeros(3)
        _, amount = whole_field(crotch, point, gradient)
        steps = 1e-5 * np.eye(3)
        slope = [(whole_field(crotch, point + s)[0] - whole_field(crotch, point - s)[0]) / 2e-5 for s in steps]
        if amount == 0.0 and abs(np.linalg.norm(slope) - 1.0) < 1e-4:
            assert gradient == pytest.approx(slope, abs=1e-3)
            checked += 1
    assert checked > 15


def test_shortened_lists_change_nothing(crotch):
    """Any list that keep_near returns gives the same bits at every point within reach."""
    rng = np.random.default_rng(7)
    n = len(crotch.pieces)
    near, kept, work, number = np.arange(n), np.empty(n, np.int64), np.empty(n), np.empty(n, np.int64)
    shorter = 0
    for centre in rng.uniform(-3, 5, (25, 3)):
        reach = 1.2
        m = keep_near(*centre, reach, crotch.pieces, crotch.owner, crotch.blend_mm, near, n, kept, work)
        offsets = rng.normal(size=(6, 3))
        for offset in offsets / np.linalg.norm(offsets, axis=1)[:, None] * reach * rng.uniform(0, 1, (6, 1)):
            full = whole_field(crotch, centre + offset)[0]
            if m == 0:
                assert full != 0.0
                sign = np.sign(whole_field(crotch, centre)[0])
                assert np.sign(full) == sign
            else:
                rows = (crotch.pieces, crotch.owner, crotch.nodes, crotch.blend_mm)
                assert field_at(*(centre + offset), *rows, kept, m, work, number, NO_GRADIENT)[0] == full
        shorter += 0 < m < n
    assert shorter > 3


def test_blocks_of_a_piece_are_none_left_out():
    pieces = tapered(np.array([0.3, 0.2, 0.1]), np.array([5.0, 3.0, 2.0]), 1.0, 1.5)
    origin, block, shape = np.full(3, -6.0), 1.7, np.array([9, 9, 9])
    for i in range(len(pieces)):
        n = blocks_of_piece(i, pieces, origin, block, shape, 0.4, np.empty(0, np.int64), np.empty(0, np.int64), -1)
        keys, owner = np.empty(n, np.int64), np.empty(n, np.int64)
        assert blocks_of_piece(i, pieces, origin, block, shape, 0.4, keys, owner, 0) == n
        inner = np.array(list(np.ndindex(4, 4, 4))) / 3.0
        for key, cell in enumerate(np.ndindex(*shape)):
            points = origin + (np.array(cell) + inner) * block
            if min(piece_distance(*p, pieces, i) for p in points) <= 0.4:
                assert key in keys
        assert (owner == i).all()


def test_cell_codes_by_hand():
    value = np.ones((9, 9, 9), np.float32)
    value[3, 4, 5] = -1.0
    code = np.zeros((8, 8, 8), np.uint8)
    code_cells(value, code)
    assert code[3, 4, 5] == 1 and code[2, 4, 5] == 2 and code[3, 3, 5] == 4 and code[2, 3, 4] == 128
    assert np.count_nonzero(code) == 8
    value[0, 0, 0] = 1e9
    code_cells(value, code)
    assert code[0, 0, 0] == 0


def test_fillet_radius_of_two_walls_at_a_right_angle():
    """On the zero of the smooth minimum of two planes the smallest radius of curvature is the asked fillet radius."""
    fillet = 0.6
    k = blend_width_mm(fillet, 50.0)
    t = np.linspace(-k, k, 20001)  # a - b
    s = 0.5 * (np.abs(t) + k / 2 * (1 - np.abs(t) / k) ** 2)  # (a + b) / 2 on min - k/4 (1 - |t|/k)^2 = 0
    x, y = t / np.sqrt(2), s * np.sqrt(2)
    slope = np.gradient(y, x)
    curvature = np.gradient(slope, x) / (1 + slope**2) ** 1.5
    assert 1.0 / curvature[100:-100].max() == pytest.approx(fillet, rel=2e-3)
    assert blend_width_mm(5.0, 3.0) == 1.5
