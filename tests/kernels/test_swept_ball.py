"""Swept balls with roofs against slow numpy twins: the ball's own formula, sampled along the piece."""

import numpy as np
import pytest

from morph.body.section import SectionRule
from morph.kernels.distance_field import blocks_of_piece
from morph.kernels.swept_ball import piece_direction, piece_distance, piece_gradient
from morph.settings.job import SectionShape
from morph.solid.sweep import _pieces, _swept, _with_roof

CASES = [
    (SectionShape.ROOFED, 47.0, (0.0, 0.0, 1.0)),
    (SectionShape.ROOFED, 35.0, (0.3, -0.8, 0.4)),
    (SectionShape.ARCHED, 45.0, (0.0, 0.0, 1.0)),
    (SectionShape.ARCHED, 30.0, (-0.5, 0.2, 0.7)),
]


def ball(v, r, rule):
    """f of the head of the kernel's file, for offsets v (n, 3) and radii r (n,)."""
    z = v @ rule.up
    rho = np.sqrt(np.maximum((v * v).sum(1) - z * z, 0.0))
    size = np.linalg.norm(v, axis=1)
    if rule.shape is SectionShape.ARCHED:
        k = rule.arch_ratio
        return np.where(z <= 0.0, size - r, np.hypot(rho + (k - 1.0) * r, z) - k * r)
    c, s = rule.roof_cosine, np.sin(np.radians(rule.roof_angle_deg))
    return np.where(z <= size * c, size - r, s * rho + c * z - r)


def random_piece(rng, rule):
    a, b = rng.uniform(-4.0, 4.0, (2, 3))
    if rng.random() < 0.25:
        b = a + rule.up * rng.uniform(-5.0, 5.0)
    ra = rng.uniform(0.8, 2.5)
    rb = max(ra + rng.uniform(-0.5, 0.5) * np.linalg.norm(b - a), 0.4)
    return a, b, ra, rb, _pieces(np.array([a, b]), np.array([ra, rb]), np.ones(2), np.zeros(2), rule)


@pytest.mark.parametrize(("shape", "angle", "up"), CASES)
def test_distance_and_gradient_are_those_of_the_balls(shape, angle, up):
    rule = SectionRule(shape, angle, np.array(up))
    rng = np.random.default_rng(11)
    roofs = 0
    for _ in range(25):
        a, b, ra, rb, pieces = random_piece(rng, rule)
        if len(pieces) > 1:
            continue
        for point in rng.uniform(-8.0, 8.0, (12, 3)):
            low, high = 0.0, 1.0
            for _ in range(4):  # ever finer samples about the least value
                t = np.linspace(low, high, 2001)
                f = ball(point - (a + t[:, None] * (b - a)), ra + t * (rb - ra), rule)
                at = int(f.argmin())
                low, high = t[max(at - 2, 0)], t[min(at + 2, 2000)]
            assert piece_distance(*point, pieces, 0) == pytest.approx(float(f.min()), abs=1e-7)
            gradient = np.array(piece_gradient(*point, pieces, 0)[:3])
            steps = 1e-5 * np.eye(3)
            slope = [
                (piece_distance(*(point + s), pieces, 0) - piece_distance(*(point - s), pieces, 0)) / 2e-5
                for s in steps
            ]
            if abs(np.linalg.norm(slope) - 1.0) < 1e-6:
                assert gradient == pytest.approx(slope, abs=1e-4)
            centre = a + t[at] * (b - a)
            if ra + t[at] * (rb - ra) > 0.0:
                way = (point - centre) / np.linalg.norm(point - centre)
                assert way @ np.array(piece_direction(*point, pieces, 0)) > 1.0 - 1e-5
                roofs += way @ rule.up > rule.roof_cosine
    assert roofs > 20


def test_a_full_roof_is_the_hull_of_ball_and_apex():
    """Support of the ball in every direction: r, or the apex at r / cos b, whichever reaches further."""
    rule = SectionRule(SectionShape.ROOFED, 47.0)
    pieces = _pieces(np.zeros((1, 3)), np.array([2.0]), np.ones(1), np.zeros(1), rule)
    apex = 2.0 / rule.roof_cosine
    assert piece_distance(0.0, 0.0, apex, pieces, 0) == pytest.approx(0.0, abs=1e-12)
    assert piece_distance(0.0, 0.0, -2.0, pieces, 0) == pytest.approx(0.0, abs=1e-12)
    slope = np.radians(47.0)
    assert piece_distance(2.0 * np.sin(slope), 0.0, 2.0 * np.cos(slope), pieces, 0) == pytest.approx(0.0, abs=1e-12)
    middle = 0.5 * np.array([2.0 * np.sin(slope), 0.0, 2.0 * np.cos(slope) + apex])
    assert piece_distance(*middle, pieces, 0) == pytest.approx(0.0, abs=1e-12)


def test_no_roof_is_round_to_the_last_bit():
    a = np.array([[0.0, 0.0, 0.0], [3.0, 1.0, 2.0]])
    radius, none = np.array([1.0, 1.4]), np.zeros(2)
    bare = _pieces(a, radius, none, none, SectionRule())
    auto = _pieces(a, radius, none, none, SectionRule(SectionShape.AUTO, free_span_mm=6.0))
    assert (bare == auto).all() and (bare[:, 13] == 1.0).all()


def test_a_fading_roof_is_swept_twice():
    rule = SectionRule(SectionShape.AUTO, 45.0, free_span_mm=4.0)
    xyz = np.column_stack([np.linspace(0.0, 3.0, 4), np.zeros(4), np.zeros(4)])
    pieces = _pieces(xyz, np.full(4, 2.0), np.array([0.0, 0.0, 0.5, 1.0]), np.zeros(4), rule)
    assert (pieces[:, 13] == 1.0).sum() == 3 and (pieces[:, 13] < 1.0).sum() == 2
    roof = pieces[pieces[:, 13] < 1.0]
    c = rule.roof_cosine
    assert roof[:, 7] == pytest.approx([2.0 * c, 2.0 * (c + 0.5 * (1.0 - c))])
    assert roof[1, 7] + roof[1, 8] * roof[1, 6] == pytest.approx(2.0)


@pytest.mark.parametrize(("shape", "angle", "up"), CASES)
def test_blocks_of_a_roofed_piece_are_none_left_out(shape, angle, up):
    rule = SectionRule(shape, angle, np.array(up))
    rows = _swept(np.array([[0.3, 0.2, 0.1], [2.0, 1.0, 0.5]]), np.array([1.0, 1.3]), np.ones(2), np.zeros(2))
    arch = rule.arch_ratio if shape is SectionShape.ARCHED else 0.0
    pieces = _with_roof(rows, rule, rule.roof_cosine, arch)
    origin, block, grid = np.full(3, -6.0), 1.7, np.array([9, 9, 9])
    n = blocks_of_piece(0, pieces, origin, block, grid, 0.4, np.empty(0, np.int64), np.empty(0, np.int64), -1)
    keys, owner = np.empty(n, np.int64), np.empty(n, np.int64)
    blocks_of_piece(0, pieces, origin, block, grid, 0.4, keys, owner, 0)
    inner = np.array(list(np.ndindex(4, 4, 4))) / 3.0
    for key, cell in enumerate(np.ndindex(*grid)):
        points = origin + (np.array(cell) + inner) * block
        if min(piece_distance(*p, pieces, 0) for p in points) <= 0.4:
            assert key in keys
