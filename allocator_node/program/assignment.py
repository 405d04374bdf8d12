"""Who does what: the assignment problem that pricing leaves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .problem import LEVELS, Problem


@dataclass(frozen=True)
class Assignment:
    """An assignment and what it leaves open.

    Attributes:
        task: Task of each robot, −1: none; shape (N,).
        missing_robots: σ_m, shape (M,).
        missing_needs: σ_mk, shape (M, K).
        shortfall: Shortfall at each priority level q = 4, 3, 2, 1, 0; shape (5,).
        cost: Cost of the assignment with its swap terms, Wh.
        proven: Whether it is proven optimal.
        gap: Bound on how far its cost is above the optimum's, Wh; 0 when proven.
    """

    task: np.ndarray
    missing_robots: np.ndarray
    missing_needs: np.ndarray
    shortfall: np.ndarray
    cost: float
    proven: bool
    gap: float = 0.0

    def better_than(self, other: Assignment) -> bool:
        """Tell whether this one comes first: by shortfall level by level, then by cost."""
        apart = self.shortfall - other.shortfall
        decisive = np.flatnonzero(np.abs(apart) > 1e-9)
        return bool(apart[decisive[0]] < 0 if len(decisive) else self.cost < other.cost)


def evaluate(
    problem: Problem,
    prices: np.ndarray,
    task: np.ndarray,
    proven: bool = False,
    gap: float = np.inf,
) -> Assignment:
    """Give the shortfalls and the cost of an assignment.

    Args:
        problem: The period's program.
        prices: κ w_im + e_im, Wh, shape (N, M).
        task: Task of each robot, −1: none, shape (N,).
        proven: Whether a solver proved it optimal.
        gap: Bound on its distance from the optimum, where it is not.
    """
    busy = np.flatnonzero(task >= 0)
    on = task[busy]
    missing_robots = np.maximum(problem.least - np.bincount(on, minlength=len(problem.least)), 0)
    share = ratio(missing_robots, problem.least)
    missing_needs = np.zeros(problem.needs.shape)
    if problem.needs.any():
        brought = missing_needs.copy()
        np.add.at(brought, on, problem.capability[busy])
        missing_needs = np.maximum(problem.needs - brought, 0)
        missing_needs[missing_needs < 1e-9 * np.maximum(problem.needs, 1)] = 0
        share += ratio(missing_needs, problem.needs).sum(axis=1)
    levels = np.bincount(problem.priority, share, minlength=len(LEVELS))[list(LEVELS)]
    settled = problem.settled
    taken_off = settled[task[settled] != problem.previous[settled]]
    cost = prices[busy, on].sum() + problem.swap_cost[taken_off].sum()
    return Assignment(
        task, missing_robots, missing_needs, levels, float(cost), proven, 0.0 if proven else gap
    )


def ratio(part: np.ndarray, whole: np.ndarray) -> np.ndarray:
    """Give part / whole, 0 where the whole is 0."""
    return np.divide(part, whole, out=np.zeros(np.shape(part)), where=whole > 0)


def reduced_costs(problem: Problem, prices: np.ndarray) -> np.ndarray:
    """Give the cost of each α_im = 1, Wh, (N, M): its price less the swap it avoids."""
    costs, settled = prices.copy(), problem.settled
    costs[settled, problem.previous[settled]] -= problem.swap_cost[settled]
    return costs
