"""The program as it is written down, undivided: what everything fast is held against.

Not used by the running node. Solved with a general mixed-integer solver (SCIP),
then once more with the assignment fixed and an interior-point solver (Clarabel),
which gives the optimum to full accuracy.
"""

from __future__ import annotations

from dataclasses import dataclass

import cvxpy as cp
import numpy as np

from .problem import Problem

HELD = 1e-7
"""How far a level may give way while the next is optimized; far below one shortfall."""


@dataclass(frozen=True)
class Optimum:
    """Optimum of the undivided program.

    Attributes:
        shortfall: Optimum of each priority level q = 4, 3, 2, 1, 0; shape (5,).
        cost: Optimum of the cost, Wh.
        assignment: Task of each robot, −1: none; shape (N,).
        commands: v_i, shape (N, 4).
        given_up: δ_i, m/s, shape (N,).
    """

    shortfall: np.ndarray
    cost: float
    assignment: np.ndarray
    commands: np.ndarray
    given_up: np.ndarray


class Statement:
    """Variables, constraints and objectives of the program, line by line."""

    def __init__(self, problem: Problem, alpha: np.ndarray | None = None) -> None:
        """State the program; with ``alpha`` (N, M) given, only the rest is unknown."""
        robots, tasks = problem.eligible.shape
        self.problem = problem
        unknown = alpha is None
        self.alpha = α = (
            cp.Variable((robots, tasks), boolean=True) if unknown else cp.Constant(alpha)
        )
        self.v = v = cp.Variable((robots, 4))
        self.delta = δ = cp.Variable(robots, nonneg=True)
        self.missing_robots = σ_m = cp.Variable(tasks, nonneg=True)
        self.missing_needs = σ_mk = cp.Variable(problem.needs.shape, nonneg=True)

        least, most, T, c = problem.least, problem.most, problem.needs, problem.capability
        limits, gear = problem.limits, problem.gear
        R = np.divide(1.0, limits**2, out=np.zeros_like(limits), where=limits > 0)
        κ, ℓ = problem.kappa, problem.slack_weight  # noqa: E741
        e, ρ = problem.energy, problem.swap_cost
        keeps = problem.keeps_on

        self.constraints = [
            *(
                n @ (G @ v[i]) - n_dp <= -closing + δ[i] + big * (1 - α[i, m])
                for i, m, n, G, n_dp, closing, big in self._task_rows()
            ),
            cp.abs(v) <= limits,
            *(
                limits[i, 0] * cp.abs(v[i, 3]) <= gear[i] * limits[i, 3] * v[i, 0]
                for i in np.flatnonzero(gear)
            ),
            cp.sum(α, axis=1) <= 1,
            least - σ_m <= cp.sum(α, axis=0),
            cp.sum(α, axis=0) <= most,
            cp.multiply(α, ~problem.eligible) == 0,
            *(α[i, m] == 1 for i, m in enumerate(problem.pinned) if m >= 0),
        ]
        if T.size:
            self.constraints.append(α.T @ c + σ_mk >= T)

        # cvxpy takes no empty sums, hence the leading zeros.
        self.levels = [
            0
            + sum(σ_m[m] / least[m] for m in np.flatnonzero((problem.priority == q) & (least > 0)))
            + sum(
                σ_mk[m, k] / T[m, k]
                for m, k in np.argwhere(T > 0)
                if problem.priority[m] == q
            )
            for q in (4, 3, 2, 1, 0)
        ]
        self.cost = (
            κ * (cp.sum(cp.multiply(R, v**2)) + cp.sum(cp.multiply(ℓ, δ**2)))
            + cp.sum(cp.multiply(α, e))
            + cp.sum(cp.multiply(ρ, keeps.any(axis=1) - cp.sum(cp.multiply(α, keeps), axis=1)))
        )

    def _task_rows(self):
        """Give i, m, n, G, n·ṗ*, min(γd, c) and the size that switches the row off."""
        p = self.problem
        for i, m in np.argwhere(p.eligible & (p.demand > 0)):
            n, G = p.away[i, m], p.jacobians[i]
            big = p.demand[i, m] + np.abs(n @ G) @ p.limits[i]
            yield i, m, n, G, p.goal_speed[i, m], p.closing[i, m], big


def solve_statement(problem: Problem) -> Optimum:
    """Solve the undivided program, level by level, to proven optimality.

    Raises:
        RuntimeError: The solver did not prove an optimum.
    """
    statement = Statement(problem)
    held = list(statement.constraints)
    shortfall = np.zeros(5)
    for index, level in enumerate(statement.levels):
        if isinstance(level, cp.Expression):
            shortfall[index] = max(_solve(cp.Problem(cp.Minimize(level), held)), 0.0)
            held.append(level <= shortfall[index] + HELD)
    scale = 1.0 / max(problem.kappa, 1e-3)
    _solve(cp.Problem(cp.Minimize(scale * statement.cost), held))
    alpha = np.round(statement.alpha.value)

    polished = Statement(problem, alpha)
    cost = cp.Problem(cp.Minimize(scale * polished.cost), polished.constraints).solve(
        solver=cp.CLARABEL, tol_gap_abs=1e-10, tol_gap_rel=1e-10, tol_feas=1e-10
    )
    return Optimum(
        shortfall=shortfall,
        cost=cost / scale,
        assignment=np.where(alpha.any(axis=1), alpha.argmax(axis=1), -1),
        commands=polished.v.value,
        given_up=polished.delta.value,
    )


def _solve(program: cp.Problem) -> float:
    value = program.solve(
        solver=cp.SCIP,
        scip_params={"limits/gap": 0.0, "limits/absgap": 0.0, "numerics/feastol": 1e-7},
    )
    if program.status != cp.OPTIMAL:
        raise RuntimeError(f"the undivided program was not solved: {program.status}")
    return float(value)
