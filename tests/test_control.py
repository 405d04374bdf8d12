"""Safe control: optimal, as another solver finds it; safe when a solver fails.

The whole campaign: python3 -m pytest tests/test_control.py --whole
"""

from dataclasses import replace

import numpy as np
import pytest
import quadprog
from builders import team_of
from scipy.optimize import nnls

from allocator_node.drives import Aerial, Carlike, Differential, Holonomic
from allocator_node.model import Model
from allocator_node.program import ControlProblem, Safety, SafetyRows, solve_control, solvers
from allocator_node.program import control as control_module
from allocator_node.program.control import CORNERS, OFF_SITE, TOO_NEAR
from allocator_node.settings import Settings
from allocator_node.team import KeepOut, Robot

SIDE = 9.0
"""Side of the crowded square, m."""

COUNT = 8
"""Robots in it."""

GRADIENT = 1e-6
"""How well the optimality conditions are met, beside the size of the objective's gradient."""


def crowd(random: np.random.Generator) -> tuple[Model, Safety]:
    """Give robots of all drives and a fenced square with a shed in it."""
    drives = [
        Differential(max_speed=random.uniform(0.5, 1.5), lookahead=0.25),
        Holonomic(max_speed=random.uniform(0.5, 1.5)),
        Aerial(max_speed=2.0, height=(3.0, 5.0)),
        Carlike(max_speed=random.uniform(0.5, 1.5), min_turn_radius=random.uniform(0.5, 2)),
    ]
    robots = [
        Robot(f"robot_{i}", drives[random.choice(4, p=[0.3, 0.35, 0.1, 0.25])], radius=0.35)
        for i in range(COUNT)
    ]
    shed = KeepOut("shed", ((4.0, 4.0), (5.5, 4.0), (5.5, 5.0), (4.0, 5.0)))
    team = team_of(
        robots, [], keep_out=(shed,), boundary=((0, 0), (SIDE, 0), (SIDE, SIDE), (0, SIDE))
    )
    model = Model(team)
    return model, Safety(team, model, Settings())


def thrown(random: np.random.Generator, model: Model) -> np.ndarray:
    """Give poses anywhere in the square."""
    return np.column_stack(
        [
            random.uniform(0.3, SIDE - 0.3, (COUNT, 2)),
            np.where(model.fleet.flies, 4.0, 0.0),
            random.uniform(-3, 3, COUNT),
        ]
    )


def scene(seed: int) -> ControlProblem:
    """Give a crowded scene's QP: pairs, walls, a silent robot, ramps, turns.

    In scenes of odd seeds robots may have been carried too near to each other or to
    a wall; in those of even seeds every distance is kept.
    """
    random = np.random.default_rng(seed)
    model, safety = crowd(random)
    fleet = model.fleet
    heard = np.arange(COUNT) != (0 if seed % 3 == 0 else -1)
    growth = np.where(heard, 0.0, 0.4)
    for _ in range(10_000):
        poses = thrown(random, model)
        points = fleet.control_points(poses)
        rows = safety.rows(points, np.ones(COUNT, bool), heard, growth)
        if seed % 2 or not rows.violated.any():
            break
    lowest, highest = -fleet.limits, fleet.limits.copy()
    ramp = random.random(COUNT) < 0.3
    lowest[ramp, :2] *= 0.5
    highest[ramp, :2] *= 0.7
    gear = fleet.steered * np.where(random.random(COUNT) < 0.3, -1, 1)
    lowest[gear > 0, 0] = highest[gear < 0, 0] = 0.0
    lowest[~heard] = highest[~heard] = 0.0
    away = random.normal(size=(COUNT, 3)) * [1, 1, 0]
    demand = np.where(random.random(COUNT) < 0.8, random.uniform(0.1, 1, COUNT) * fleet.cruise, 0)
    turning = ((demand == 0) | (fleet.ahead == 0)) & ~fleet.steered
    preferred = np.zeros((COUNT, 4))
    preferred[:, 3] = np.where(turning & heard, random.uniform(-0.5, 0.5, COUNT), 0.0)
    return ControlProblem(
        jacobians=fleet.jacobians(poses),
        limits=fleet.limits,
        lowest=lowest,
        highest=highest,
        gear=gear,
        round_limit=fleet.round_limit,
        away=away / np.linalg.norm(away, axis=1, keepdims=True),
        demand=np.where(heard, demand, 0.0),
        preferred=preferred,
        rows=rows,
        slack_weight=random.choice([100.0, 300.0], COUNT),
    )


def dense(
    problem: ControlProblem, solved: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Write the QP as its formula reads, over x = (v of every robot, δ, slacks).

    min Σ vᵀRv − 2 preferredᵀRv + ℓ δ² + Σ (s² + price · s), R = diag(1/limit²), a slack for
    each row that is violated already; axes a robot has not got are bound to zero. Round
    speed limits are octagons for robots that a solver dealt with.

    Returns:
        P, q, A, b of min ½ xᵀPx + qᵀx s.t. A x ≥ b.
    """
    p, rows = problem, problem.rows
    count, size = len(p.limits), p.limits.size
    has = p.limits > 0
    R = np.where(has, 1.0 / np.where(has, p.limits, 1.0) ** 2, 1.0)
    eased = np.flatnonzero(rows.violated)
    P = np.diag(
        np.concatenate(
            [2 * R.ravel(), 2 * p.slack_weight, np.full(len(eased), 2.0)]
        )
    )
    prices = np.where(rows.obstacle[eased] < 0, OFF_SITE, TOO_NEAR)
    prices = prices * max(1.0, np.sqrt(p.slack_weight.max()) / 10)
    q = np.concatenate([(-2 * R * p.preferred).ravel(), np.zeros(count), prices])
    unit = np.eye(len(q))
    A, b = [], []

    def demand(row: np.ndarray, bound: float) -> None:
        A.append(row)
        b.append(bound)

    def moves(i: int, along: np.ndarray) -> np.ndarray:
        """The row of along · G_i v_i."""
        row = np.zeros(len(q))
        row[4 * i : 4 * i + 4] = along @ p.jacobians[i][: len(along)]
        return row

    for i in range(count):
        demand(unit[size + i], 0.0)
        if p.demand[i] > 0:
            demand(-moves(i, p.away[i]) + unit[size + i], p.demand[i])
        for axis in range(4):
            # Where the cone below says so already, once more would be degenerate.
            if axis > 0 or p.gear[i] < 1:
                demand(unit[4 * i + axis], p.lowest[i, axis])
            if axis > 0 or p.gear[i] > -1:
                demand(-unit[4 * i + axis], -p.highest[i, axis])
        if p.gear[i]:
            cone = p.gear[i] * p.limits[i, 3] / p.limits[i, 0] * unit[4 * i]
            demand(cone + unit[4 * i + 3], 0.0)
            demand(cone - unit[4 * i + 3], 0.0)
        if p.round_limit[i] and solved[i]:
            # The octagon in the disc |(vx, vy)| ≤ limit that has a corner straight ahead.
            ahead = -p.away[i] @ p.jacobians[i]
            sides = np.arctan2(ahead[1], ahead[0]) + np.concatenate([CORNERS, CORNERS + np.pi])
            for angle in sides:
                row = np.cos(angle) * unit[4 * i] + np.sin(angle) * unit[4 * i + 1]
                demand(-row, -p.limits[i, 0] * np.cos(np.pi / 8))
    for r in range(len(rows)):
        row = moves(rows.first[r], rows.normal[r])
        if rows.second[r] >= 0:
            row = row - moves(rows.second[r], rows.normal[r])
        demand(row + unit[size + count :][eased == r].sum(axis=0), rows.bound[r])
    for slack in unit[size + count :]:
        demand(slack, 0.0)
    return P, q, np.array(A), np.array(b)


def completed(problem: ControlProblem, commands: np.ndarray) -> np.ndarray:
    """Give x of the dense form: the commands with the least δ and slacks they need."""
    velocity = np.einsum("nij,nj->ni", problem.jacobians, commands)
    given_up = np.maximum(problem.demand + (problem.away * velocity).sum(axis=1), 0.0)
    given_up[problem.demand <= 0] = 0.0
    rows = problem.rows
    slack = np.maximum(-rows.slackness(velocity)[rows.violated], 0.0)
    return np.concatenate([commands.ravel(), given_up, slack])


@pytest.mark.campaign(slice=60, whole=600)
def test_commands_are_those_another_solver_finds(seed):
    """Against quadprog (Goldfarb and Idnani's dual active-set method)."""
    problem = scene(seed)
    control = solve_control(problem)
    P, q, A, b = dense(problem, control.solved)
    # Axes that are bound to zero are left out: quadprog stumbles over such pairs of rows.
    free = np.ones(len(q), dtype=bool)
    free[: problem.lowest.size] = (problem.lowest < problem.highest).ravel()
    some = A[:, free].any(axis=1)
    answer = np.zeros(len(q))
    answer[free], value, *_ = quadprog.solve_qp(
        P[np.ix_(free, free)], -q[free], A[np.ix_(some, free)].T, b[some]
    )
    assert not control.stopped.any()
    found = completed(problem, control.commands)
    assert 0.5 * found @ P @ found + q @ found == pytest.approx(value, rel=1e-6, abs=1e-9)
    expected = answer[: control.commands.size].reshape(-1, 4)
    np.testing.assert_allclose(control.commands, expected, atol=5e-5)


@pytest.mark.campaign(slice=60, whole=600)
def test_commands_meet_the_optimality_conditions(seed):
    """Karush, Kuhn and Tucker: multipliers y ≥ 0 of the active rows with P x + q = Aᵀ y."""
    problem = scene(seed)
    control = solve_control(problem)
    P, q, A, b = dense(problem, control.solved)
    x = completed(problem, control.commands)
    slackness = A @ x - b
    assert slackness.min() > -1e-6
    gradient = P @ x + q
    _, residual = nnls(A[slackness < 1e-5].T, gradient)
    assert residual < GRADIENT * max(1.0, np.linalg.norm(gradient))


def test_scenes_have_what_they_are_meant_to_test():
    problems = [scene(seed) for seed in range(40)]
    rows = [problem.rows for problem in problems]
    assert sum((r.second >= 0).sum() for r in rows) > 100
    assert sum((r.obstacle < 0).sum() for r in rows) > 100
    assert sum(r.violated.sum() for r in rows) > 40
    controls = [solve_control(problem) for problem in problems]
    assert sum(c.solved.sum() for c in controls) > 100
    assert sum((~c.solved).sum() for c in controls) > 10


@pytest.mark.parametrize("seed", range(50))
def test_standing_still_keeps_every_row_while_the_distance_is_kept(seed):
    rows = scene(seed).rows
    kept = rows.slackness(np.zeros((COUNT, 3)))[rows.room >= 0]
    assert len(kept) and kept.min() >= 0
    assert not rows.violated[rows.room >= 0].any()


def test_steered_robots_turn_no_more_than_they_drive():
    turning = 0
    for seed in range(60):
        problem = scene(seed)
        commands, limits = solve_control(problem).commands, problem.limits
        cars = problem.gear != 0
        vx, turn = (commands[cars][:, [0, 3]] / limits[cars][:, [0, 3]]).T
        assert (problem.gear[cars] * vx >= 0).all()
        assert (np.abs(turn) <= np.abs(vx) * (1 + 1e-12)).all()
        turning += (turn != 0).sum()
    assert turning > 20


def test_no_row_is_traded_for_progress():
    """Rows that were kept are kept, whatever the violated ones ask for."""
    for seed in range(40):
        problem = scene(seed)
        rows = problem.rows
        velocity = np.einsum(
            "nij,nj->ni", problem.jacobians, solve_control(problem).commands
        )
        assert rows.slackness(velocity)[~rows.violated].min(initial=0.0) > -1e-6


def test_robots_that_are_too_near_come_apart():
    problem = face_to_face(apart=0.7)
    velocity = np.einsum("nij,nj->ni", problem.jacobians, solve_control(problem).commands)
    assert velocity[0, 0] < 0 < velocity[1, 0]


def face_to_face(apart: float) -> ControlProblem:
    """Give two omnidirectional robots that want to pass through each other along x."""
    robots = [Robot(f"robot_{i}", Holonomic(max_speed=1.0), radius=0.35) for i in range(2)]
    team = team_of(robots, [])
    model = Model(team)
    poses = np.array([[0, 0, 0, 0], [apart, 0, 0, 0]])
    both = np.ones(2, bool)
    rows = Safety(team, model, Settings()).rows(poses[:, :3], both, both, np.zeros(2))
    return ControlProblem(
        jacobians=model.fleet.jacobians(poses),
        limits=model.fleet.limits,
        lowest=-model.fleet.limits,
        highest=model.fleet.limits,
        gear=np.zeros(2, dtype=int),
        round_limit=model.fleet.round_limit,
        away=np.array([[-1.0, 0, 0], [1, 0, 0]]),
        demand=np.ones(2),
        preferred=np.zeros((2, 4)),
        rows=rows,
        slack_weight=np.full(2, 100.0),
    )


def test_two_that_meet_share_the_room_left():
    """By hand: h = 1.3² − 1², ḣ = −2 · 1.3 · 2u ≥ −1.5 h, so u = 1.5 · 0.69 / 5.2 each."""
    control = solve_control(face_to_face(apart=1.3))
    expected = 1.5 * (1.3**2 - 1.0**2) / (4 * 1.3)
    np.testing.assert_allclose(control.commands[:, 0], [expected, -expected], atol=1e-6)
    assert control.solved.all()
    np.testing.assert_allclose(control.free[:, 0], [1, -1], atol=0.01)


def test_far_apart_nobody_is_held_back():
    control = solve_control(face_to_face(apart=20.0))
    assert not control.solved.any()
    np.testing.assert_array_equal(control.commands, control.free)


def broken(*_):
    raise solvers.SolverFailure("broken on purpose")


@pytest.mark.parametrize("next_one", [solvers.solve_with_piqp, solvers.solve_with_clarabel])
@pytest.mark.parametrize("seed", range(10))
def test_the_next_solver_takes_over(seed, next_one, monkeypatch):
    problem = scene(seed)
    first = solve_control(problem)
    monkeypatch.setattr(solvers, "SOLVERS", (broken, next_one))
    second = solve_control(problem)
    np.testing.assert_allclose(second.commands, first.commands, atol=5e-5)
    assert not second.stopped.any()


def test_an_answer_that_is_no_number_is_not_taken(monkeypatch):
    """PIQP's numbers are spoilt; Clarabel's answer comes out."""
    problem = face_to_face(apart=1.3)
    expected = solve_control(problem).commands

    class Spoilt:
        def __init__(self):
            self._solver = real()
            self.settings = self._solver.settings
            self.setup, self.solve = self._solver.setup, self._solver.solve

        @property
        def result(self):
            return type("Result", (), {"x": np.full_like(self._solver.result.x, np.nan)})

    monkeypatch.setattr(solvers, "SOLVERS", (solvers.solve_with_piqp, solvers.solve_with_clarabel))
    real = solvers.piqp.SparseSolver
    monkeypatch.setattr(solvers.piqp, "SparseSolver", Spoilt)
    np.testing.assert_allclose(solve_control(problem).commands, expected, atol=2e-6)


def test_where_every_solver_fails_those_concerned_stand_and_are_named(monkeypatch):
    """Two robots in each other's way; a third one, far off, goes on."""
    near = face_to_face(apart=1.3)
    three = {
        name: np.concatenate([getattr(near, name), getattr(near, name)[:1]])
        for name in ("jacobians", "limits", "lowest", "highest", "gear", "round_limit", "away",
                     "demand", "preferred", "slack_weight")
    }  # fmt: skip
    monkeypatch.setattr(solvers, "SOLVERS", (broken, broken))
    control = solve_control(replace(near, **three))
    np.testing.assert_array_equal(control.stopped, [True, True, False])
    np.testing.assert_array_equal(control.commands[:2], np.zeros((2, 4)))
    assert control.commands[2, 0] == pytest.approx(1.0, abs=0.01)


def test_a_false_answer_moves_nobody(monkeypatch):
    """A solver that says it solved the QP but did not: full speed at each other."""
    problem = face_to_face(apart=1.3)

    def lying(qp):
        answer = np.zeros(len(qp.linear))
        answer[[0, 3]] = 1.0, -1.0
        return answer

    monkeypatch.setattr(solvers, "SOLVERS", (lying,))
    control = solve_control(problem)
    assert control.stopped.all()
    assert not control.commands.any()


def test_without_rows_there_is_nothing_to_solve():
    control = solve_control(replace(face_to_face(apart=1.3), rows=SafetyRows.none()))
    np.testing.assert_array_equal(control.commands, control.free)


def nonsense(kind: str):
    """Give a solver of bad manners."""
    random = np.random.default_rng(0)

    def solve(qp):
        match kind:
            case "no number":
                return np.full(len(qp.linear), np.nan)
            case "huge":
                return np.full(len(qp.linear), 1e12)
            case "random":
                return random.normal(size=len(qp.linear))
            case "too short":
                return np.zeros(1)
            case "raises":
                raise ZeroDivisionError("a bug in a library")

    return solve


@pytest.mark.parametrize("kind", ["no number", "huge", "random", "too short", "raises"])
@pytest.mark.parametrize("seed", range(4))
def test_a_solver_of_bad_manners_costs_nothing_but_its_time(seed, kind, monkeypatch):
    """The next one is asked; where there is none, those concerned stand."""
    problem = scene(seed)
    expected = solve_control(problem)
    bad = nonsense(kind)
    monkeypatch.setattr(solvers, "SOLVERS", (bad, solvers.solve_with_clarabel))
    np.testing.assert_allclose(solve_control(problem).commands, expected.commands, atol=5e-5)
    monkeypatch.setattr(solvers, "SOLVERS", (bad,))
    control = solve_control(problem)
    np.testing.assert_array_equal(control.stopped, expected.solved)
    assert not control.commands[control.stopped].any()


def test_a_solver_that_exceeds_its_time_is_the_last_one_asked(monkeypatch):
    asked = []

    def slow(qp):
        asked.append(qp)
        clock[0] += 1.0
        raise solvers.SolverFailure("still thinking")

    clock = [0.0]
    monkeypatch.setattr(solvers.time, "monotonic", lambda: clock[0])
    monkeypatch.setattr(solvers, "SOLVERS", (slow, slow, slow))
    control = solve_control(face_to_face(apart=1.3))
    assert len(asked) == 1
    assert control.stopped.all() and not control.commands.any()


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf, 1.01, -5.0])
def test_a_command_out_of_limits_is_replaced_by_standing(value, monkeypatch):
    """Whatever found it, here the closed form; the other robot goes on."""
    problem = face_to_face(apart=20.0)
    spoilt = control_module._free(problem)
    spoilt[0, 1] = value
    monkeypatch.setattr(control_module, "_free", lambda problem: spoilt.copy())
    control = solve_control(problem)
    np.testing.assert_array_equal(control.stopped, [True, False])
    np.testing.assert_array_equal(control.commands[0], np.zeros(4))
    assert control.commands[1, 0] < -0.9
