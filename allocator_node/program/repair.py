"""A feasible assignment at once: the standing one, mended where it broke."""

from __future__ import annotations

import numpy as np

from .assignment import ratio
from .problem import LEVELS, Problem


def repair(problem: Problem, prices: np.ndarray, standing: np.ndarray) -> np.ndarray:
    """Mend an assignment for the present period.

    Robots that may not go on are taken off, pinned ones moved; then, class by
    class, each task that lacks something takes the robot that brings most for its
    price: an idle one, one that its own task can spare, or one of a lower class.
    Quick and feasible, not optimal; the proof follows.

    Args:
        problem: The period's program.
        prices: κ w_im + e_im, Wh, shape (N, M).
        standing: Task of each robot, −1: none, shape (N,).

    Returns:
        Task of each robot, −1: none, shape (N,).
    """
    task = standing.copy()
    busy = np.flatnonzero(task >= 0)
    task[busy[~problem.eligible[busy, task[busy]]]] = -1
    pinned = problem.pinned >= 0
    task[pinned] = problem.pinned[pinned]
    _thin_out(problem, prices, task)
    for level in LEVELS:
        for m in np.flatnonzero(problem.priority == level):
            _fill(problem, prices, task, int(m))
    return task


def _thin_out(problem: Problem, prices: np.ndarray, task: np.ndarray) -> None:
    """Take the dearest robots off tasks that have more than they may."""
    count = np.bincount(task[task >= 0], minlength=len(problem.most))
    for m in np.flatnonzero(count > problem.most):
        loose = np.flatnonzero((task == m) & (problem.pinned != m))
        dearest = loose[np.argsort(-prices[loose, m])]
        task[dearest[: count[m] - problem.most[m]]] = -1


def _lack(problem: Problem, robots: np.ndarray, m: int) -> float:
    """Give the relative shortfall of task m with a group of robots (n,)."""
    missing = np.maximum(problem.needs[m] - problem.capability[robots].sum(axis=0), 0)
    missing[missing < 1e-9 * problem.needs[m]] = 0
    heads = max(problem.least[m] - len(robots), 0)
    return float(ratio(missing, problem.needs[m]).sum() + (heads / max(problem.least[m], 1)))


def _fill(problem: Problem, prices: np.ndarray, task: np.ndarray, m: int) -> None:
    """Give task m robots until it lacks nothing, is full, or nobody helps."""
    group = np.flatnonzero(task == m)
    lack = _lack(problem, group, m)
    while lack > 0 and len(group) < problem.most[m]:
        able = np.flatnonzero(
            problem.eligible[:, m] & (task != m) & (problem.pinned < 0)
        )
        missing = np.maximum(problem.needs[m] - problem.capability[group].sum(axis=0), 0)
        brings = ratio(
            np.minimum(problem.capability[able], missing), problem.needs[m]
        ).sum(axis=1) + (len(group) < problem.least[m]) / max(problem.least[m], 1)
        useful = brings > 1e-9
        able, brings = able[useful], brings[useful]
        for robot in able[np.argsort(prices[able, m] / brings)]:
            if _spare(problem, task, int(robot), m):
                task[robot] = m
                break
        else:
            return
        group = np.flatnonzero(task == m)
        lack = _lack(problem, group, m)


def _spare(problem: Problem, task: np.ndarray, robot: int, m: int) -> bool:
    """Tell whether a robot can be had for task m: idle, of a lower class, or spare where it is."""
    own = task[robot]
    if own < 0 or problem.priority[own] < problem.priority[m]:
        return True
    if problem.priority[own] > problem.priority[m]:
        group = np.flatnonzero(task == own)
        return _lack(problem, group[group != robot], own) <= _lack(problem, group, own)
    group = np.flatnonzero(task == own)
    return _lack(problem, group[group != robot], own) == 0
