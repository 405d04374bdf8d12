"""The assignment problem as one would hand it to a general solver: scipy.optimize.milp, cold."""

from __future__ import annotations

import numpy as np
from scipy import sparse
from scipy.optimize import Bounds, LinearConstraint, milp

from allocator_node.program import Problem
from allocator_node.program.assignment import Assignment, evaluate, reduced_costs
from allocator_node.program.problem import LEVELS

HELD = 1e-7
"""How far a level may give way while the next is optimized."""

LONGEST = 20.0
"""Time limit of one solve, s."""


def assign_with_milp(problem: Problem, prices: np.ndarray) -> Assignment:
    """Solve level by level, then for the least cost, as the formula reads.

    The unknowns are α, flat, then σ_m and σ_mk. Levels without a shortfall are skipped
    when one solve with every σ = 0 shows that all can be covered.
    """
    robots, tasks = prices.shape
    pairs, kinds = prices.size, problem.needs.shape[1]
    size = pairs + tasks + tasks * kinds
    on_robot = sparse.kron(sparse.eye_array(robots), np.ones((1, tasks)))
    on_task = sparse.kron(np.ones((1, robots)), sparse.eye_array(tasks))
    brought = sparse.kron(problem.capability.T, sparse.eye_array(tasks))
    missing = sparse.eye_array(tasks * kinds)
    needs = problem.needs.T.ravel()
    matrix = sparse.block_array(
        [
            [on_robot, None, None],
            [on_task, None, None],
            [on_task, sparse.eye_array(tasks), None],
            [brought, None, missing],
        ],
        format="csr",
    )
    low = np.concatenate([np.full(robots + tasks, -np.inf), problem.least, needs])
    high = np.concatenate([np.ones(robots), problem.most, np.full(tasks * (1 + kinds), np.inf)])
    rows = [LinearConstraint(matrix, low, high)]

    least = np.zeros(size)
    pinned = np.flatnonzero(problem.pinned >= 0)
    least[pinned * tasks + problem.pinned[pinned]] = 1.0
    most = np.concatenate([problem.eligible.ravel().astype(float), np.full(size - pairs, np.inf)])
    whole = np.concatenate([np.ones(pairs), np.zeros(size - pairs)])
    share = np.concatenate([_inverse(problem.least), _inverse(needs)])
    level = np.concatenate([problem.priority, np.tile(problem.priority, kinds)])
    cost = np.concatenate([reduced_costs(problem, prices).ravel(), np.zeros(size - pairs)])

    def solve(objective: np.ndarray, top: np.ndarray) -> np.ndarray | None:
        answer = milp(
            objective, constraints=rows, bounds=Bounds(least, top), integrality=whole,
            options={"mip_rel_gap": 0.0, "time_limit": LONGEST},
        )  # fmt: skip
        return answer.x

    covered = most.copy()
    covered[pairs:] = 0.0
    answer = solve(cost, covered)
    if answer is None:
        for q in LEVELS:
            objective = np.concatenate([np.zeros(pairs), np.where(level == q, share, 0.0)])
            if objective.any():
                answer = solve(objective, most)
                rows.append(LinearConstraint(objective[None], ub=objective @ answer + HELD))
        answer = solve(cost, most)
    alpha = answer[:pairs].reshape(robots, tasks)
    return evaluate(problem, prices, np.where(alpha.max(1) > 0.5, alpha.argmax(1), -1))


def _inverse(amounts: np.ndarray) -> np.ndarray:
    return np.divide(1.0, amounts, out=np.zeros(len(amounts)), where=amounts > 0)
