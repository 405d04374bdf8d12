"""The fast path against the undivided statement and against general solvers.

The whole campaign: python3 -m pytest tests/test_exact.py --whole
"""

import itertools
from dataclasses import replace

import numpy as np
import pytest
import quadprog
from builders import random_problem, with_cars
from scipy.optimize import linear_sum_assignment

from allocator_node.program import assign, least_effort, price
from allocator_node.program.statement import solve_statement


def least_by_quadprog(reach, demand, slack_weight, lowest, highest):
    """Solve min uᵀu + ℓ δ² s.t. reachᵀ u + δ ≥ demand, lowest ≤ u ≤ highest, δ ≥ 0."""
    axes = len(reach)
    unit = np.eye(axes + 1)
    rows = np.vstack([[*reach, 1.0], unit[:axes], -unit[:axes], unit[axes]])
    bounds = np.concatenate([[demand], lowest, -highest, [0.0]])
    weights = np.diag([2.0] * axes + [2.0 * slack_weight])
    answer, value, *_ = quadprog.solve_qp(weights, np.zeros(axes + 1), rows.T, bounds)
    return value, answer[:axes], answer[axes]


def one_to_one(random, robots, tasks):
    """Give a program in which every task takes exactly one robot, at a price of its own."""
    problem = random_problem(random, robots, tasks)
    return replace(
        problem,
        needs=np.zeros_like(problem.needs),
        least=np.ones(tasks, int),
        most=np.ones(tasks, int),
        eligible=np.ones((robots, tasks), bool),
        pinned=np.full(robots, -1),
        swap_cost=np.zeros(robots),
    )


@pytest.mark.campaign(slice=40, whole=200)
def test_fast_path_and_undivided_statement_agree(seed):
    random = np.random.default_rng(seed)
    problem = random_problem(random, robots=random.integers(2, 9), tasks=random.integers(1, 5))
    fast = assign(problem, price(problem))
    stated = solve_statement(problem)
    np.testing.assert_allclose(fast.shortfall, stated.shortfall, rtol=1e-6, atol=1e-6)
    assert fast.cost == pytest.approx(stated.cost, rel=1e-6, abs=1e-9)
    assert fast.proven


@pytest.mark.campaign(slice=20, whole=300)
def test_they_agree_with_robots_that_steer(seed):
    """Their commands lie in a cone, |ω| / limit ≤ gear · vx / limit, not in a box."""
    random = np.random.default_rng(7000 + seed)
    problem = random_problem(random, robots=random.integers(2, 9), tasks=random.integers(1, 5))
    problem = with_cars(problem, random)
    fast = assign(problem, price(problem))
    stated = solve_statement(problem)
    np.testing.assert_allclose(fast.shortfall, stated.shortfall, rtol=1e-6, atol=1e-6)
    assert fast.cost == pytest.approx(stated.cost, rel=1e-6, abs=1e-9)
    assert fast.proven


@pytest.mark.parametrize("seed", [2583, 2586, 2660, 2966, 3432, 3437, 4457])
def test_programs_that_once_went_wrong(seed):
    """Seven of 3000, which HiGHS mistook when it went on from the relaxation's basis."""
    random = np.random.default_rng(seed)
    problem = random_problem(random, robots=random.integers(4, 13), tasks=random.integers(2, 6))
    fast = assign(problem, price(problem))
    stated = solve_statement(problem)
    np.testing.assert_allclose(fast.shortfall, stated.shortfall, rtol=1e-6, atol=1e-6)
    assert fast.cost == pytest.approx(stated.cost, rel=1e-6, abs=1e-9)


@pytest.mark.campaign(slice=20, whole=200)
def test_they_agree_where_only_heads_are_counted(seed):
    random = np.random.default_rng(1000 + seed)
    problem = random_problem(random, robots=random.integers(2, 9), tasks=random.integers(1, 5))
    problem = replace(problem, needs=np.zeros_like(problem.needs))
    fast = assign(problem, price(problem))
    stated = solve_statement(problem)
    np.testing.assert_allclose(fast.shortfall, stated.shortfall, rtol=1e-6, atol=1e-6)
    assert fast.cost == pytest.approx(stated.cost, rel=1e-6, abs=1e-9)
    assert fast.proven


@pytest.mark.parametrize("seed", range(5))
def test_minimum_effort_form_is_recovered(seed):
    """κ = 1, e = ρ = 0: min Σ (vᵀRv + ℓδ²) over every assignment that serves the tasks.

    The constraint-driven minimum-effort form: Notomista and Egerstedt, "Constraint-driven
    coordinated control of multi-robot systems", American Control Conference 2019 (from
    memory). Enumerated here, with a general QP solver for each robot.
    """
    random = np.random.default_rng(seed)
    robots, tasks = 5, 3
    problem = replace(
        one_to_one(random, robots, tasks), kappa=1.0, energy=np.zeros((robots, tasks))
    )
    effort = np.zeros((robots, tasks))
    for i, m in np.ndindex(robots, tasks):
        full = np.where(problem.limits[i] > 0, 1.0, 0.0)
        effort[i, m], *_ = least_by_quadprog(
            -problem.away[i, m] @ problem.jacobians[i] * problem.limits[i],
            problem.demand[i, m], problem.slack_weight[i], -full, full,
        )  # fmt: skip
    least = min(
        sum(effort[i, m] for m, i in enumerate(chosen))
        for chosen in itertools.permutations(range(robots), tasks)
    )
    assert assign(problem, price(problem)).cost == pytest.approx(least, rel=1e-9)


@pytest.mark.parametrize(
    ("robots", "tasks"), [(1, 1), (2, 2), (5, 5), (9, 4), (20, 20), (40, 25), (60, 60)]
)
@pytest.mark.parametrize("seed", range(3))
def test_one_to_one_is_the_linear_sum_assignment(robots, tasks, seed):
    random = np.random.default_rng(seed)
    problem = one_to_one(random, robots, tasks)
    prices = random.uniform(0, 10, (robots, tasks))
    rows, columns = linear_sum_assignment(prices)
    found = assign(problem, prices)
    assert found.cost == pytest.approx(prices[rows, columns].sum(), rel=1e-9)
    expected = np.full(robots, -1)
    expected[rows] = columns
    np.testing.assert_array_equal(found.task, expected)


def test_pricing_is_each_robots_own_qp():
    """w_im in closed form, against quadprog in the commands' own units (m/s, rad/s)."""
    random = np.random.default_rng(1)
    problem = random_problem(random, 12, 6)
    problem = replace(problem, kappa=1.0, eligible=np.ones_like(problem.eligible))
    prices = price(problem) - problem.energy
    for i, m in np.ndindex(12, 6):
        has = problem.limits[i] > 0
        weights = np.diag([*2 / problem.limits[i, has] ** 2, 2 * problem.slack_weight[i]])
        reach = -problem.away[i, m] @ problem.jacobians[i][:, has]
        unit = np.eye(has.sum() + 1)
        rows = np.vstack([[*reach, 1.0], unit[:-1], -unit[:-1], unit[-1]])
        limits = problem.limits[i, has]
        bounds = np.concatenate([[problem.demand[i, m]], -limits, -limits, [0.0]])
        _, value, *_ = quadprog.solve_qp(weights, np.zeros(has.sum() + 1), rows.T, bounds)
        assert prices[i, m] == pytest.approx(value, rel=1e-8, abs=1e-10)


@pytest.mark.campaign(slice=10, whole=100)
def test_steered_pricing_is_each_robots_own_qp(seed):
    """The cone's closed form against quadprog, in m/s and rad/s: inside, edge, behind, clipped."""
    random = np.random.default_rng(seed)
    problem = random_problem(random, 12, 6)
    problem = with_cars(problem, random)
    problem = replace(
        problem,
        kappa=1.0,
        closing=problem.closing * 3,
        eligible=np.ones_like(problem.eligible),
        slack_weight=random.choice([0.1, 1.0, 100.0], 12),
    )
    prices = price(problem) - problem.energy
    for i, m in itertools.product(np.flatnonzero(problem.gear), range(6)):
        top, turn = problem.limits[i, [0, 3]]
        gear = problem.gear[i]
        reach = -problem.away[i, m] @ problem.jacobians[i][:, [0, 3]]
        rows = np.array([
            [*reach, 1.0], [-gear, 0, 0], [gear * turn / top, 1, 0], [gear * turn / top, -1, 0],
            [0, 0, 1],
        ])  # fmt: skip
        bounds = np.array([problem.demand[i, m], -top, 0, 0, 0])
        weights = np.diag([2 / top**2, 2 / turn**2, 2 * problem.slack_weight[i]])
        _, value, *_ = quadprog.solve_qp(weights, np.zeros(3), rows.T, bounds)
        assert prices[i, m] == pytest.approx(value, rel=1e-8, abs=1e-10)


def test_one_unclipped_barrier_row_has_the_textbook_answer():
    """min ‖v‖² s.t. aᵀv ≥ b, b > 0, has v = a b / aᵀa.

    The min-norm controller of one control barrier function: Ames, Coogan, Egerstedt,
    Notomista, Sreenath and Tabuada, "Control barrier functions: theory and applications",
    European Control Conference 2019 (from memory). With a slack of weight ℓ that becomes
    v = a b / (aᵀa + 1/ℓ).
    """
    random = np.random.default_rng(2)
    reach = random.normal(size=(50, 4))
    demand = random.uniform(0.01, 0.3, 50) * np.linalg.norm(reach, axis=1)
    square = (reach**2).sum(axis=1)
    hard = least_effort(reach, demand, slack_weight=1e12)
    np.testing.assert_allclose(hard.command, reach * (demand / square)[:, None], rtol=1e-9)
    np.testing.assert_allclose(hard.value, demand**2 / square, rtol=1e-9)
    soft = least_effort(reach, demand, slack_weight=7.0)
    np.testing.assert_allclose(
        soft.command, reach * (demand / (square + 1 / 7.0))[:, None], rtol=1e-12
    )


def test_nothing_is_done_where_nothing_is_demanded():
    effort = least_effort(np.ones((2, 4)), np.array([0.0, -0.5]), slack_weight=100.0)
    assert not effort.command.any() and not effort.value.any() and not effort.given_up.any()


def test_least_effort_in_a_narrowed_box():
    """Boxes as acceleration limits leave them: asymmetric, on some axes nothing at all."""
    random = np.random.default_rng(3)
    shape, weight = (300, 4), 30.0
    reach = random.normal(size=shape) * random.choice([0, 1, 1], shape)
    lowest = -random.uniform(0, 1, shape) * random.choice([0, 1, 1], shape)
    highest = random.uniform(0, 1, shape) * random.choice([0, 1, 1], shape)
    demand = random.uniform(-0.2, 3, len(reach))
    found = least_effort(reach, demand, weight, room=np.where(reach >= 0, highest, -lowest))
    for case in range(len(reach)):
        value, command, given_up = least_by_quadprog(
            reach[case], demand[case], weight, lowest[case], highest[case]
        )
        assert found.value[case] == pytest.approx(value, rel=1e-8, abs=1e-10)
        np.testing.assert_allclose(found.command[case], command, atol=1e-7)
        assert found.given_up[case] == pytest.approx(given_up, abs=1e-7)


def test_one_robot_alone_may_be_asked_about():
    alone = least_effort(np.array([1.0, 0, 0, 2.0]), np.array(0.5), slack_weight=100.0)
    assert alone.command.shape == (4,)
    assert alone.value == pytest.approx(0.25 / (5 + 1 / 100))
