"""Assignment where only head counts matter: a linear assignment of robots to slots."""

from __future__ import annotations

import numpy as np
from scipy.optimize import linear_sum_assignment

from .assignment import ratio, reduced_costs
from .problem import LEVELS, Problem

PRECISION = 1e-15
"""Relative precision of double arithmetic, rounded up."""

FINEST = 5040
"""Largest common denominator of shortfalls for which levels are told apart by weight."""


def solve_slots(problem: Problem, prices: np.ndarray) -> np.ndarray | None:
    """Solve the assignment problem where robots eligible for a task are alike to it.

    Where all of them bring the same amounts, the shortfall of a task depends on
    their number only, and every robot more helps less than the one before. So
    the task is a row of slots, each with a reward for the shortfall it removes,
    and the whole is a linear assignment problem. Rewards of one level outweigh
    all below it; where double precision cannot hold such weights, or a task
    needs graded amounts, this is not the way.

    Args:
        problem: The period's program.
        prices: κ w_im + e_im, Wh, shape (N, M).

    Returns:
        Task of each robot, −1: none, shape (N,); None where this is not the way.
    """
    eligible = problem.eligible
    amounts = _common_amounts(problem)
    if amounts is None:
        return None
    pinned = problem.pinned
    pins = np.bincount(pinned[pinned >= 0], minlength=len(problem.most))
    useful = np.maximum(
        problem.least, np.ceil(ratio(problem.needs, amounts) - 1e-9).max(axis=1, initial=0)
    ).astype(int)
    holding = problem.keeps_on.sum(axis=0) + pins
    most = np.minimum(np.maximum(problem.most, pins), eligible.sum(axis=0))
    # Pinned robots take the first slots of their tasks; the others choose among the rest.
    slots = np.maximum(np.minimum(np.maximum(useful, holding), most) - pins, 0)
    found = pinned.copy()
    task = np.repeat(np.arange(len(slots)), slots)
    if not len(task):
        return found
    number = np.arange(len(task)) - np.repeat(np.cumsum(slots) - slots - pins, slots)
    shortfall = _shortfall(problem, amounts, task, number[:, None] + [0, 1])
    gain = shortfall[:, 0] - shortfall[:, 1]
    costs = reduced_costs(problem, prices)
    weight, ordered = _weights(problem, costs, task, gain)
    if weight is None:
        return None

    # What costs is left undone: an entry 0 stands for idling. It takes a slot nobody
    # misses, since another robot could have it in exchange for a slot no better.
    free = np.flatnonzero(pinned < 0)
    costs = np.where(eligible, costs, np.inf)[free]
    table = np.minimum(costs[:, task] - weight * gain, 0.0)
    # Slots as rows: what is the same along a row costs the algorithm no search.
    slot, robot = linear_sum_assignment(table.T)
    busy = table[robot, slot] < 0
    if not ordered and gain[slot[busy]].sum() < gain.sum() - 1e-9:
        return None
    found[free[robot[busy]]] = task[slot[busy]]
    return found


def _common_amounts(problem: Problem) -> np.ndarray | None:
    """Give what every robot eligible for a task brings to its needs, (M, K), if all bring alike."""
    wanted = problem.needs > 0
    if not wanted.any():
        return np.zeros(problem.needs.shape)
    amounts = np.zeros(problem.needs.shape)
    for m, k in np.argwhere(wanted):
        brought = problem.capability[problem.eligible[:, m], k]
        if len(brought):
            amounts[m, k] = brought[0]
            if np.ptp(brought) > 0:
                # Whoever brings enough alone brings no more than that.
                if brought.min() < problem.needs[m, k]:
                    return None
                amounts[m, k] = problem.needs[m, k]
    return amounts


def _shortfall(
    problem: Problem, amounts: np.ndarray, task: np.ndarray, robots: np.ndarray
) -> np.ndarray:
    """Give the relative shortfall of tasks (S,) with numbers of robots (S, n); shape (S, n)."""
    least, needs = problem.least[task][:, None], problem.needs[task][:, None]
    share = ratio(np.maximum(least - robots, 0), least)
    if not needs.any():
        return share
    missing = np.maximum(needs - robots[..., None] * amounts[task][:, None], 0)
    missing[missing < 1e-9 * needs] = 0
    return share + ratio(missing, needs).sum(axis=2)


def _weights(
    problem: Problem, costs: np.ndarray, task: np.ndarray, gain: np.ndarray
) -> tuple[np.ndarray | None, bool]:
    """Give the weight of each slot's gain so that gains come before costs, (S,).

    Returns:
        The weights, None where there are none; whether levels come in their order too.
    """
    level = problem.priority[task]
    useful = gain > 1e-12
    denominator = int(np.lcm.reduce(np.maximum(problem.least, 1), initial=1))
    shares = gain[useful] * denominator
    if denominator > FINEST or np.abs(shares - np.round(shares)).max(initial=0) > 1e-9:
        return None, False
    scale = 1.0 + float(
        np.abs(np.where(problem.eligible, costs, 0.0)).max(axis=1, initial=0.0).sum()
    )
    below = scale
    weight = np.zeros(len(task))
    for q in reversed(LEVELS):
        here = (level == q) & useful
        if here.any():
            weight[here] = 2.0 * denominator * below
            below += float(weight[here] @ gain[here])
    if below * PRECISION < 1e-7 * scale:
        return weight, True
    weight[useful] = 2.0 * denominator * scale
    return (weight, False) if weight.sum() * PRECISION < 1e-7 * scale else (None, False)
