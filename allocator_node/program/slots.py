"""Assignment where only head counts matter: a linear assignment of robots to slots."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import linear_sum_assignment

from .assignment import ratio
from .problem import LEVELS, Problem

PRECISION = 1e-15
"""Relative precision of double arithmetic, rounded up."""

FINEST = 5040
"""Largest common denominator of shortfalls for which levels are told apart by weight."""


@dataclass(frozen=True)
class Slots:
    """A linear assignment of robots to slots; F robots to be placed, S slots.

    Where all robots eligible for a task bring the same amounts, the shortfall of
    the task depends on their number only, and every robot more helps less than
    the one before. So the task is a row of slots, each with a reward for the
    shortfall it removes, and the whole is a linear assignment problem. Rewards of
    one level outweigh all below it. All this holds whatever the costs: it is found
    once for a discrete situation.

    Attributes:
        pinned: Task of each robot that is pinned, −1: none, shape (N,).
        free: Robots that are not pinned, shape (F,).
        task: Task of each slot, shape (S,).
        barred: Where a robot is not eligible for a slot's task, shape (S, F).
        gain: Relative shortfall that a slot removes, shape (S,).
        reward: What that is worth, as a multiple of all costs together, shape (S,).
        ordered: Whether the rewards put the levels in their order, too.
    """

    pinned: np.ndarray
    free: np.ndarray
    task: np.ndarray
    barred: np.ndarray
    gain: np.ndarray
    reward: np.ndarray
    ordered: bool

    @classmethod
    def of(cls, problem: Problem) -> Slots | None:
        """Give the slots of a problem; its prices and swap costs are not looked at.

        Returns:
            The slots; None where a task needs graded amounts, or where double
            precision cannot hold the rewards: then this is not the way.
        """
        amounts = _common_amounts(problem)
        if amounts is None:
            return None
        pinned = problem.pinned
        pins = np.bincount(pinned[pinned >= 0], minlength=len(problem.most))
        enough = np.ceil(ratio(problem.needs, amounts) - 1e-9).max(axis=1, initial=0)
        useful = np.maximum(problem.least, enough).astype(int)
        holding = problem.holding + pins
        most = np.minimum(np.maximum(problem.most, pins), problem.eligible.sum(axis=0))
        # Pinned robots take the first slots of their tasks; the others choose among the rest.
        slots = np.maximum(np.minimum(np.maximum(useful, holding), most) - pins, 0)
        task = np.repeat(np.arange(len(slots)), slots)
        number = np.arange(len(task)) - np.repeat(np.cumsum(slots) - slots - pins, slots)
        shortfall = _shortfall(problem, amounts, task, number[:, None] + [0, 1])
        gain = shortfall[:, 0] - shortfall[:, 1]
        reward, ordered = _rewards(problem, task, gain)
        if reward is None:
            return None
        free = np.flatnonzero(pinned < 0)
        barred = ~problem.eligible[free[None], task[:, None]]
        return cls(pinned, free, task, barred, gain, reward, ordered)

    def solve(self, costs: np.ndarray) -> np.ndarray | None:
        """Solve the assignment problem.

        Args:
            costs: Cost of each α_im = 1, Wh, shape (N, M).

        Returns:
            Task of each robot, −1: none, shape (N,); None where the levels may not
            have come in their order.
        """
        # Slots as rows: what is the same along a row costs the algorithm no search.
        table = costs[self.free[None], self.task[:, None]]
        table[self.barred] = 0.0
        dearest = np.abs(table).max(axis=0, initial=0.0)
        table -= ((1.0 + dearest.sum()) * self.reward)[:, None]
        # What costs is left undone: an entry 0 stands for idling. It takes a slot nobody
        # misses, since another robot could have it in exchange for a slot no better.
        np.minimum(table, 0.0, out=table)
        table[self.barred] = 0.0
        slot, robot = linear_sum_assignment(table)
        busy = table[slot, robot] < 0
        slot, robot = slot[busy], robot[busy]
        if not self.ordered and self.gain[slot].sum() < self.gain.sum() - 1e-9:
            return None
        found = self.pinned.copy()
        found[self.free[robot]] = self.task[slot]
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


def _rewards(
    problem: Problem, task: np.ndarray, gain: np.ndarray
) -> tuple[np.ndarray | None, bool]:
    """Give the reward of each slot's gain so that gains come before costs, (S,).

    Returns:
        The rewards as multiples of all costs together, None where there are none;
        whether levels come in their order too.
    """
    level = problem.priority[task]
    useful = gain > 1e-12
    denominator = int(np.lcm.reduce(np.maximum(problem.least, 1), initial=1))
    shares = gain[useful] * denominator
    if denominator > FINEST or np.abs(shares - np.round(shares)).max(initial=0) > 1e-9:
        return None, False
    # One step of a level outweighs all gains of the levels below it, and the costs.
    step = 2.0 * denominator
    gains = np.bincount(level[useful], gain[useful], minlength=len(LEVELS))
    below = np.cumprod(np.append(1.0, 1.0 + step * gains))
    worth = np.where(useful, step * below[level], 0.0)
    if below[-1] * PRECISION < 1e-7:
        return worth * gain, True
    worth[useful] = step
    return (worth * gain, False) if worth.sum() * PRECISION < 1e-7 else (None, False)
