"""Junction coefficients against published measurements and handbook examples."""

import numpy as np
import pytest

from morph.flow.junction import JunctionLaw, Junctions, leg_pressure

pytestmark = pytest.mark.quick

SHARES = (0.2, 0.4, 0.6, 0.8)


def junction(directions, areas=None):
    directions = np.array(directions, dtype=float)
    k = len(directions)
    return Junctions([0], [np.arange(k)], [[1.0] * k], [directions], [areas or [1.0] * k], [np.arange(k)], [[True] * k])


def coefficients(directions, inflow, areas=None):
    """Total pressure of each leg above the first one's, in velocity heads of the first."""
    legs = junction(directions, areas)
    inflow = np.array([inflow], dtype=float)
    got = leg_pressure(legs, inflow, legs.area_m2, 2.0)[0]
    head = (inflow[0, 0] / legs.area_m2[0, 0]) ** 2
    return (got - got[0]) / head


def parting(q, angle_deg=90.0, area=1.0):
    """Loss from the common leg to branch and run."""
    t = np.radians(angle_deg)
    got = coefficients([[-1, 0, 0], [1, 0, 0], [np.cos(t), np.sin(t), 0]], [1.0, q - 1.0, -q], [1.0, 1.0, area])
    return -got[2], -got[1]


def joining(q, angle_deg=90.0, area=1.0):
    """Loss from branch and run to the common leg."""
    t = np.radians(angle_deg)
    got = coefficients([[1, 0, 0], [-1, 0, 0], [-np.cos(t), np.sin(t), 0]], [-1.0, 1.0 - q, q], [1.0, 1.0, area])
    return got[2], got[1]


@pytest.mark.parametrize(
    ("q", "branch", "run"),
    [(0.2, 0.88, -0.08), (0.4, 0.89, -0.05), (0.6, 0.95, 0.07), (0.8, 1.10, 0.21)],
)
def test_parting_square_tee_is_vogels(q, branch, run):
    """Vogel 1926/28 (from memory): branch to 10 %, run to 0.1."""
    got = parting(q)
    assert got[0] == pytest.approx(branch, rel=0.1)
    assert got[1] == pytest.approx(run, abs=0.1)


@pytest.mark.parametrize(
    ("q", "branch", "run"),
    [(0.4, 0.08, 0.30), (0.6, 0.47, 0.41), (0.8, 0.72, 0.51)],
)
def test_joining_square_tee_is_near_vogels(q, branch, run):
    """Vogel 1926/28 (from memory); the handbooks' formulas, which this follows, lie up to 0.2 above."""
    got = joining(q)
    assert got[0] == pytest.approx(branch, abs=0.2)
    assert got[1] == pytest.approx(run, abs=0.2)


def test_joining_tee_of_crane_example_7_35():
    """Crane TP-410: run 1135 and branch 380 L/min; branch -0.0403, run 1.55 q - q^2 = 0.3258."""
    q = 380.0 / (380.0 + 1135.0)
    branch, run = joining(q)
    assert branch == pytest.approx(-0.0403, abs=2e-3)
    assert run == pytest.approx(1.55 * q - q * q, abs=2e-3)


@pytest.mark.parametrize("q", SHARES)
@pytest.mark.parametrize("angle", [30.0, 45.0, 60.0])
def test_joining_at_an_angle_is_cranes_formula(q, angle):
    """K = C [1 + (q r)^2 - 2 (1 - q)^2 - F q^2 r], F = 1.74, 1.41, 1.00; run 1 - (1 - q)^2 - F q^2 r; C = 1 small legs."""
    factor = {30.0: 1.74, 45.0: 1.41, 60.0: 1.0}[angle]
    area = 0.25
    r = 1.0 / area
    branch, run = joining(q, angle, area)
    assert branch == pytest.approx(
        1.0 + (q * r) ** 2 - 2.0 * (1.0 - q) ** 2 - factor * q * q * r, abs=0.02 * (q * r) ** 2 + 0.02
    )
    assert run == pytest.approx(1.0 - (1.0 - q) ** 2 - factor * q * q * r, abs=0.02 * q * q * r + 0.02)


@pytest.mark.parametrize("q", SHARES)
@pytest.mark.parametrize("angle", [45.0, 90.0, 120.0])
def test_parting_branch_is_hagers(q, angle):
    """Hager 1984: 1 + (q r)^2 - 2 q r cos(3 t / 4)."""
    for area in (1.0, 0.5):
        got = parting(q, angle, area)[0]
        r = 1.0 / area
        hager = 1.0 + (q * r) ** 2 - 2.0 * q * r * np.cos(0.75 * np.radians(angle))
        assert got == pytest.approx(hager, abs=0.02 * max(1.0, (q * r) ** 2))


@pytest.mark.parametrize("q", SHARES)
def test_parting_run_is_bassetts(q):
    """Bassett et al. 2001: s^2 - 3/2 s + 1/2 with the run's share s."""
    s = 1.0 - q
    assert parting(q)[1] == pytest.approx(s * s - 1.5 * s + 0.5, abs=0.01)


def test_straight_through_costs_nothing_and_a_sudden_enlargement_borda_carnot():
    assert coefficients([[-1, 0, 0], [1, 0, 0]], [1.0, -1.0])[1] == pytest.approx(0.0, abs=1e-3)
    wide = coefficients([[-1, 0, 0], [1, 0, 0]], [1.0, -1.0], [1.0, 4.0])
    assert -wide[1] == pytest.approx(0.5625, abs=0.02)  # (1 - (d/D)^2)^2 at d/D = 0.5


def test_a_square_corner_costs_a_mitre_bend():
    """1.1 to 1.3 velocity heads (handbooks, from memory)."""
    got = coefficients([[-1, 0, 0], [0, 1, 0]], [1.0, -1.0])
    assert 1.0 < -got[1] < 1.35


@pytest.mark.parametrize("angle", [20.0, 60.0, 90.0, 130.0])
@pytest.mark.parametrize("area", [0.3, 1.0, 2.0])
def test_nothing_jumps_when_a_leg_turns_its_flow_round(angle, area):
    t = np.radians(angle)
    legs = [[-1, 0, 0], [1, 0, 0], [np.cos(t), np.sin(t), 0]]
    q = np.linspace(-0.2, 0.2, 4001)
    got = np.array([coefficients(legs, [1.0, x - 1.0, -x], [1.0, 1.0, area]) for x in q])
    assert np.abs(np.diff(got, axis=0)).max() < 0.02


def test_turned_in_space_the_coefficients_stay():
    random = np.random.default_rng(5)
    basis = np.linalg.qr(random.normal(size=(3, 3)))[0]
    legs = np.array([[-1.0, 0, 0], [0.6, 0.8, 0], [0, 0, 1.0]])
    flow = [1.0, -0.7, -0.3]
    assert coefficients(legs @ basis, flow) == pytest.approx(coefficients(legs, flow), abs=1e-12)


def test_junctions_waste_power_never_make_it():
    """Sum over legs of flow times total pressure above the node's outlets is what is lost: never below zero."""
    random = np.random.default_rng(6)
    for _ in range(2000):
        k = int(random.integers(3, 5))
        legs = random.normal(size=(k, 3))
        legs /= np.linalg.norm(legs, axis=1)[:, None]
        flow = random.normal(size=k)
        flow[0] -= flow.sum()
        record = junction(legs, list(random.uniform(0.5, 1.5, k)))
        got = leg_pressure(record, flow[None, :], record.area_m2, 2.0)[0]
        heads = (np.abs(flow) ** 3 / record.area_m2[0] ** 2).sum()
        assert float(got @ flow) > -0.15 * heads


def test_slopes_are_differences():
    random = np.random.default_rng(3)
    n, k = 40, 4
    direction = random.normal(size=(n, k, 3))
    direction /= np.linalg.norm(direction, axis=2)[:, :, None]
    pipe = np.arange(n * k).reshape(n, k)
    used = np.ones((n, k), dtype=bool)
    used[::3, 3] = False
    sign = random.choice([-1.0, 1.0], (n, k))
    area = random.uniform(0.5, 2.0, (n, k))
    inflow = random.normal(size=(n, k)) * used
    inflow[:, 0] -= inflow.sum(axis=1)
    flow = np.zeros(n * k)
    flow[pipe] = inflow * sign
    law = JunctionLaw(Junctions(np.arange(n), pipe, sign, direction, area, pipe, used), 2.0, n * k)
    row, column = law.pattern()
    dense = np.zeros((n * k, n * k))
    np.add.at(dense, (row, column), law.slopes(flow))
    by_row, by_segment, by_area = law.by_log_area(flow)
    areas = np.zeros((n * k, n * k))
    np.add.at(areas, (by_row, by_segment), by_area)
    step = 1e-6
    for e in range(0, n * k, 7):
        moved = [flow.copy(), flow.copy()]
        moved[0][e] += step
        moved[1][e] -= step
        difference = (law.drop(moved[0]) - law.drop(moved[1])) / (2.0 * step)
        assert np.abs(difference - dense[:, e]).max() < 1e-6 * np.abs(dense).max()
        sides = []
        for way in (1.0, -1.0):
            other = area.copy()
            other.ravel()[e] *= 1.0 + way * step
            legs = Junctions(np.arange(n), pipe, sign, direction, other, pipe, used)
            sides.append(JunctionLaw(legs, 2.0, n * k).drop(flow))
        assert np.abs((sides[0] - sides[1]) / (2.0 * step) - areas[:, e]).max() < 1e-6 * np.abs(areas).max()
