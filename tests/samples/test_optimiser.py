"""The samples' optimiser: gradients against finite differences, closed forms, and a descent that descends."""

from dataclasses import replace

import numpy as np
import pytest

pytestmark = pytest.mark.quick

from optimiser.descent import STAGES, descend  # noqa: E402
from optimiser.flow import StokesFlow, measure_drag  # noqa: E402
from optimiser.grid import Grid, Opening  # noqa: E402
from optimiser.heat import HeatTransport  # noqa: E402
from optimiser.length_scale import make_filter, measure_local_share, project  # noqa: E402
from optimiser.moving_asymptotes import MovingAsymptotes  # noqa: E402
from optimiser.problem import DesignProblem  # noqa: E402
from scenarios import SCENARIOS  # noqa: E402

# Central differences with this step leave about 1e-6 of truncation on these functions.
STEP = 1e-5
GRADIENT_TOLERANCE = 1e-4
GRADIENT_SEEDS = (3, 17, 92)


def coarse(steps: int = 12, *, joined: bool = False):
    """The small sample's problem on a third of its cells; joined: as if its left and right edge were one line."""
    if joined:
        return replace(coarse(steps), grid=Grid(20, 30, joined=True))
    return replace(SCENARIOS["tealight-cup"], grid=Grid(20, 30), rim=2, filter_radius=2.0, disc_radius=5.0, steps=steps)


def central_difference(function, at, direction):
    return (function(at + STEP * direction) - function(at - STEP * direction)) / (2.0 * STEP)


@pytest.mark.parametrize("seed", GRADIENT_SEEDS)
@pytest.mark.parametrize("sharpness", [0.0, 4.0])
@pytest.mark.parametrize("joined", [False, True])
def test_adjoint_gradients_agree_with_central_differences(seed, sharpness, joined):
    """Whole chain, design to objective and limits, along single cells and along a random direction."""
    problem = DesignProblem(coarse(joined=joined))
    random = np.random.default_rng(seed)
    design = random.uniform(0.2, 0.8, problem.scenario.grid.n_cells)
    density, slope = problem.density(design, sharpness)
    found = problem.evaluate(density, convexity=0.1)
    gradients = [problem.by_design(row, slope) for row in (found.slope, *found.limit_slopes)]

    def values(at):
        result = problem.evaluate(problem.density(at, sharpness)[0], convexity=0.1)
        return np.array([result.objective, *result.limits])

    steepest = np.argsort(-np.abs(gradients[0]))[:3]
    directions = [np.eye(len(design))[cell] for cell in steepest] + [random.choice([-1.0, 1.0], len(design))]
    for direction in directions:
        wanted = central_difference(values, design, direction)
        exact = np.array([gradient @ direction for gradient in gradients])
        scale = np.maximum(np.abs(wanted), 1e-3 * np.array([np.abs(g).sum() for g in gradients]))
        assert (np.abs(exact - wanted) / scale).max() <= GRADIENT_TOLERANCE


def test_fixed_cells_have_no_gradient_and_keep_their_value():
    problem = DesignProblem(coarse())
    design = problem.first_design()
    density, slope = problem.density(design, 4.0)
    gradient = problem.by_design(np.ones(len(design)), slope)
    assert not gradient[problem.metal].any()
    assert not gradient[problem.coolant].any()
    design[problem.metal] = 1.0
    assert np.array_equal(problem.density(design, 4.0)[0], density)


def test_plane_channel_flow_is_the_parabola():
    """Plane Poiseuille: mean velocity = gap^2 / 12 x pressure gradient (exact; any fluids text), viscosity 1."""
    rows, columns = 24, 96
    grid = Grid(rows, columns)
    flow = StokesFlow(grid, (Opening("left", 0.0, 1.0, 1.0), Opening("right", 0.0, 1.0, 0.0)))
    velocity = flow.solve(np.zeros(grid.n_cells)).velocity
    through = velocity[grid.across].mean(axis=0)
    length = columns / rows
    # Walls half a cell off the last velocity lift the discrete parabola by step^2 / 8 of the pressure gradient.
    assert through == pytest.approx(np.full(columns + 1, 1.0 / (12.0 * length)), rel=0.01)
    middle = velocity[grid.across][:, columns // 2]
    y = (np.arange(rows) + 0.5) / rows
    assert middle == pytest.approx(y * (1.0 - y) / (2.0 * length), abs=1.01 * grid.step**2 / (8.0 * length))


def test_flow_through_resisting_metal_follows_darcy():
    """Darcy: velocity = pressure gradient / drag where the drag outweighs the walls (exact; walls take 2 / sqrt(drag))."""
    grid = Grid(20, 40)
    drag = 1e6
    flow = StokesFlow(grid, (Opening("left", 0.0, 1.0, 1.0), Opening("right", 0.0, 1.0, 0.0)))
    velocity = flow.solve(np.full(grid.n_cells, drag)).velocity
    assert velocity[grid.across].mean(axis=0) == pytest.approx(np.full(41, 1.0 / (2.0 * drag)), rel=1e-2)


@pytest.mark.parametrize("joined", [False, True])
def test_flow_keeps_the_coolant_it_takes_in(joined):
    scenario = coarse(joined=joined)
    grid = scenario.grid
    flow = StokesFlow(grid, scenario.openings)
    random = np.random.default_rng(5)
    drag = measure_drag(random.uniform(0.0, 1.0, grid.n_cells), 1e6, 0.1)[0]
    velocity = flow.solve(drag).velocity
    entering = velocity[scenario.openings[0].faces(grid)].sum()
    leaving = -velocity[scenario.openings[1].faces(grid)].sum()
    assert entering > 0.0
    assert leaving == pytest.approx(entering, rel=1e-6)
    assert np.abs(grid.outflow @ velocity).max() <= 1e-6 * entering


@pytest.mark.parametrize("joined", [False, True])
def test_heat_carried_out_equals_heat_put_in(joined):
    """Energy balance of a steady state: the stream takes out the whole load (first law)."""
    scenario = coarse(joined=joined)
    problem = DesignProblem(scenario)
    grid = scenario.grid
    found = problem.evaluate(problem.density(problem.first_design(), 4.0)[0], 0.1)
    return_faces = scenario.openings[1].faces(grid)
    cells = scenario.openings[1].cells(grid, 1)
    carried = -(found.velocity[return_faces] * found.temperature[cells]).sum() * scenario.capacity * grid.step
    assert carried == pytest.approx(problem.heat.load.sum(), rel=1e-3)


def test_heat_rises_linearly_along_an_evenly_loaded_stream():
    """Plug flow, no conduction: temperature after i cells = i x load / (capacity x velocity x step)."""
    grid = Grid(4, 30)
    velocity = np.zeros(grid.n_faces)
    velocity[grid.across] = 2.0
    heat = HeatTransport(grid, np.full(grid.n_cells, 0.7), capacity=5.0)
    temperature = heat.solve(np.zeros(grid.n_cells), velocity).temperature.reshape(4, 30)
    wanted = np.arange(1, 31) * 0.7 / (5.0 * 0.25 * 2.0)
    assert temperature == pytest.approx(np.tile(wanted, (4, 1)), rel=1e-9)


def test_filter_keeps_a_constant_and_reaches_no_further_than_its_radius():
    grid = Grid(9, 11)
    cone = make_filter(grid, 2.5)
    assert cone @ np.full(99, 0.3) == pytest.approx(np.full(99, 0.3), rel=1e-12)
    spot = np.zeros(99)
    spot[grid.cell[4, 5]] = 1.0
    spread = (cone @ spot).reshape(9, 11)
    down, right = np.indices((9, 11))
    distance = np.hypot(down - 4, right - 5)
    assert (spread[distance >= 2.5] == 0.0).all()
    # Inside, a cone: (2.5 - distance) / (sum over the disc), away from the edge.
    inner = distance < 2.5
    assert spread[inner] == pytest.approx((2.5 - distance[inner]) / (2.5 - distance[inner]).sum(), rel=1e-12)


def test_flow_round_a_joined_sheet_has_no_side_walls():
    """Darcy, without the layers that side walls make: velocity = pressure gradient / drag in every column (exact)."""
    grid, drag = Grid(20, 30, joined=True), 1e3
    flow = StokesFlow(grid, (Opening("bottom", 0.0, 1.0, 1.0), Opening("top", 0.0, 1.0, 0.0)))
    velocity = flow.solve(np.full(grid.n_cells, drag)).velocity
    assert velocity[grid.upward] == pytest.approx(np.full((21, 30), 1.0 / drag), rel=1e-9)
    assert np.abs(velocity[grid.across]).max() <= 1e-12


def turned_fields(columns):
    """Objective, limits, and fields turned back, of one random joined problem turned by whole columns."""
    random = np.random.default_rng(8)
    density, load = random.uniform(0.0, 1.0, (20, 30)), random.uniform(0.5, 1.5, (20, 30))
    span = (columns / 30, (columns + 3) / 30)
    scenario = replace(
        coarse(joined=True),
        openings=(Opening("bottom", *span, 1.0), Opening("top", *span, 0.0)),
        heat=lambda _x, _y: np.roll(load, columns, axis=1),
    )
    found = DesignProblem(scenario).evaluate(np.roll(density, columns, axis=1).ravel(), 0.1)
    fields = [found.temperature, found.slope, *found.limit_slopes]
    return found.objective, found.limits, [np.roll(field.reshape(20, 30), -columns, axis=1) for field in fields]


@pytest.mark.parametrize("columns", [1, 11, 27])
def test_a_joined_sheet_has_no_first_column(columns):
    """Turned by whole columns, load, density and ports give the turned temperature and gradients."""
    plain, turned = turned_fields(0), turned_fields(columns)
    assert turned[0] == pytest.approx(plain[0], rel=1e-9)
    assert turned[1] == pytest.approx(plain[1], rel=1e-12)
    for one, two in zip(plain[2], turned[2], strict=True):
        assert two == pytest.approx(one, rel=1e-6, abs=1e-9 * np.abs(one).max())


def test_a_joined_sheet_has_no_left_edge():
    grid = Grid(20, 30, joined=True)
    with pytest.raises(ValueError, match="side: expected one of bottom, top, found left"):
        StokesFlow(grid, (Opening("left", 0.0, 1.0, 1.0),))
    with pytest.raises(ValueError, match="half a turn of 30 cells"):
        make_filter(grid, 15.0)


def test_projection_sharpens_towards_a_step():
    grey = np.array([0.0, 0.3, 0.5, 0.7, 1.0])
    soft, hard = project(grey, 1.0)[0], project(grey, 40.0)[0]
    assert soft[[0, 2, 4]] == pytest.approx([0.0, 0.5, 1.0], abs=1e-12)
    assert hard == pytest.approx([0.0, 0.0, 0.5, 1.0, 1.0], abs=1e-6)


def test_local_share_of_an_even_grey_is_the_grey():
    grid = Grid(8, 8)
    disc = make_filter(grid, 2.0, flat=True)
    mean, gradient = measure_local_share(np.full(64, 0.4), disc, 16.0)
    assert mean == pytest.approx(0.4, rel=1e-12)
    # A rise of all cells together raises the mean by as much.
    assert gradient.sum() == pytest.approx(1.0, rel=1e-12)


def test_moving_asymptotes_find_a_known_optimum():
    """min sum (x - c)^2 with mean(x) <= 0.4: x = c - shift, clipped to 0..1 (optimality conditions, by hand)."""
    wanted = np.array([0.1, 0.5, 0.6, 0.8])
    # Without limits the mean is 0.5; a common shift of 0.1 brings it to 0.4 and keeps all within 0..1.
    best = wanted - 0.1
    steps = MovingAsymptotes(move_limit=0.2)
    x = np.full(4, 0.3)
    for _ in range(60):
        x = steps.step(x, 2.0 * (x - wanted), np.array([x.mean() - 0.4]), np.full((1, 4), 0.25))
    assert x == pytest.approx(best, abs=2e-3)


def test_descent_lowers_the_objective_by_a_fifth_within_its_limits():
    """Measured under the final laws at both ends, so that the stages cannot fake it; and against an even grey."""
    problem = DesignProblem(coarse(steps=40))
    descent = descend(problem)
    assert descent.last <= 0.8 * descent.first
    assert max(descent.limits) <= 0.01
    # The last stage alone obeys one set of laws: it, too, never ends above where it began.
    last_stage = descent.course[int(STAGES[-2][0] * 40) + 1 :]
    assert last_stage[-1] <= last_stage[0]
    assert descent.density.shape == (20, 30)
    assert 0.0 <= descent.density.min() <= descent.density.max() <= 1.0


def test_descent_is_the_same_twice():
    problem = coarse(steps=5)
    first, second = (descend(DesignProblem(problem)).density for _ in range(2))
    assert np.array_equal(first, second)
