"""Assignment with graded amounts: a true integer program, solved by HiGHS."""

from __future__ import annotations

from functools import cached_property

import numpy as np
from scipy import sparse

from .highs import Limit, Minimizer, SearchFailed
from .problem import LEVELS, Problem

HELD = 1e-7
"""How far a level may give way while the next is optimized; far below one shortfall."""

Held = list[tuple[np.ndarray, float]]

FREE = Limit()
"""No end is set."""


class Integers:
    """The integer program over the eligible pairs, for one discrete situation.

    Columns: one α for each eligible pair, one σ for each head count, one for
    each need. Rows: robots, head counts, needs, and rounding cuts on the needs.
    What each level must leave uncovered does not depend on the costs: it is found
    once, and then each solve is for the least cost alone.
    """

    def __init__(self, problem: Problem) -> None:
        """Build the rows; costs, former tasks and swap costs are not looked at."""
        self.problem = problem
        self._levelled: Minimizer | None = None
        self.robot, self.task = np.nonzero(problem.eligible)
        self.pairs = len(self.robot)
        self.counts = np.flatnonzero(problem.least > 0)
        self.need_task, self.need = np.nonzero(problem.needs > 0)
        self.columns = self.pairs + len(self.counts) + len(self.need_task)
        self.needs = slice(self.pairs + len(self.counts), None)
        self.level = np.concatenate(
            [
                np.full(self.pairs, -1),
                problem.priority[self.counts],
                problem.priority[self.need_task],
            ]
        )
        self.weight = np.concatenate(
            [
                np.zeros(self.pairs),
                1.0 / problem.least[self.counts],
                1.0 / problem.needs[self.need_task, self.need],
            ]
        )
        self.least_missing = np.concatenate([np.zeros(self.pairs), self._unavoidable()])
        self.low = self.least_missing.copy()
        self.low[: self.pairs] = problem.pinned[self.robot] == self.task
        self.high = np.ones(self.columns)
        self.high[self.pairs :] = np.inf
        self._build_rows()

    def _unavoidable(self) -> np.ndarray:
        """Give the σ that a task would have even if it could choose its robots first."""
        problem = self.problem
        robots = np.maximum(problem.least - problem.eligible.sum(axis=0), 0)[self.counts]
        missing = np.zeros(len(self.need))
        for row, (m, k) in enumerate(zip(self.need_task, self.need, strict=True)):
            brought = np.sort(problem.capability[problem.eligible[:, m], k])[::-1]
            best = brought[: self._most()[m]].sum()
            missing[row] = max(problem.needs[m, k] - best, 0.0)
            if missing[row] < 1e-9 * problem.needs[m, k]:
                missing[row] = 0.0
        return np.concatenate([robots, missing])

    def _most(self) -> np.ndarray:
        pinned = self.problem.pinned
        pins = np.bincount(pinned[pinned >= 0], minlength=len(self.problem.most))
        return np.maximum(self.problem.most, pins)

    def _build_rows(self) -> None:
        problem, pairs = self.problem, self.pairs
        robots, tasks = problem.eligible.shape
        pair = np.arange(pairs)
        ones = np.ones(pairs)
        using = sparse.csr_array((ones, (self.robot, pair)), shape=(robots, self.columns))
        counting = sparse.csr_array((ones, (self.task, pair)), shape=(tasks, self.columns))
        row = np.full(problem.needs.shape, -1)
        row[self.need_task, self.need] = np.arange(len(self.need))
        index, k = np.nonzero(
            (row[self.task] >= 0) & (problem.capability[self.robot] > 0)
        )
        self.entry = (row[self.task[index], k], index, problem.capability[self.robot[index], k])
        needing = sparse.csr_array(
            (self.entry[2], (self.entry[0], self.entry[1])), shape=(len(self.need), self.columns)
        )
        missing = sparse.eye_array(self.columns, format="csr")[pairs:]
        self.rows = sparse.vstack(
            [
                using,
                counting,
                counting[self.counts] + missing[: len(self.counts)],
                needing + missing[len(self.counts) :],
            ],
            format="csr",
        )
        self.row_low = np.concatenate(
            [
                np.full(robots + tasks, -np.inf),
                problem.least[self.counts],
                problem.needs[self.need_task, self.need],
            ]
        )
        self.row_high = np.concatenate(
            [np.ones(robots), self._most(), np.full(len(self.counts) + len(self.need), np.inf)]
        )

    @cached_property
    def _cuts(self) -> tuple[sparse.csr_array, np.ndarray, np.ndarray]:
        """Give rounding cuts on the needs: rows, right-hand sides, and whose σ must be fixed.

        With amounts c and what must be brought t, any u > 0 gives the valid
        inequality Σ ⌈u c_i⌉ α_i ≥ ⌈u t⌉ (Chvátal and Gomory); u = j/c for each
        distinct c makes those that bind. They hold where the σ of the need is fixed
        at ``least_missing``.
        """
        where, who, what, right, whose = [], [], [], [], []
        needs = self.needs
        due = self.row_low[len(self.row_low) - len(self.need) :] - self.least_missing[needs]
        for row in np.flatnonzero(due > 0):
            mine = self.entry[0] == row
            pairs, amounts = self.entry[1][mine], self.entry[2][mine]
            for u in np.unique(np.outer(1.0 / np.unique(amounts), np.arange(1, 4))):
                bound = np.ceil(u * due[row] - 1e-9)
                where.append(np.full(len(pairs), len(right)))
                who.append(pairs)
                what.append(np.minimum(np.ceil(u * amounts - 1e-9), bound))
                right.append(bound)
                whose.append(row)
        if not right:
            return sparse.csr_array((0, self.columns)), np.zeros(0), np.zeros(0, dtype=int)
        cuts = sparse.csr_array(
            (np.concatenate(what), (np.concatenate(where), np.concatenate(who))),
            shape=(len(right), self.columns),
        )
        return cuts, np.array(right), np.array(whose)

    def solve(
        self, costs: np.ndarray, start: np.ndarray | None = None, limit: Limit = FREE
    ) -> tuple[np.ndarray, bool, float]:
        """Solve level by level, then for the least cost.

        Args:
            costs: Cost of each α_im = 1, Wh, shape (N, M).
            start: An assignment to start from, shape (N,).
            limit: When to end with what there is.

        Returns:
            Task of each robot (N,), whether it is proven optimal, a bound on the
            distance of its cost from the optimum, Wh.

        Raises:
            SearchFailed: The time ran out before any solution, or the solver failed.
        """
        cost = np.zeros(self.columns)
        cost[: self.pairs] = costs[self.robot, self.task]
        hint = None if start is None else self._columns_of(start)
        if self._levelled is None:
            high = self.high.copy()
            high[self.pairs :] = self.least_missing[self.pairs :]
            program, proven = self._minimizer(high, []), True
            found = program.minimize(cost, limit, hint)
            if found is None:
                high, held, proven = self._levels(limit)
                program = self._minimizer(high, held)
                found = program.minimize(cost, limit, hint)
            if proven:
                self._levelled = program
        else:
            proven, found = True, self._levelled.minimize(cost, limit, hint)
        if found is None:
            raise SearchFailed
        gap = max(float(cost @ found.values) - found.bound, 0.0)
        return self._task_of(found.values), found.proven and proven, gap

    def _task_of(self, values: np.ndarray) -> np.ndarray:
        """Give the assignment in column values, shape (N,)."""
        task = np.full(len(self.problem.pinned), -1)
        on = values[: self.pairs] > 0.5
        task[self.robot[on]] = self.task[on]
        return task

    def _levels(self, limit: Limit) -> tuple[np.ndarray, Held, bool]:
        """Find what each level must leave uncovered: upper bounds of σ, held sums, proven."""
        high, held, proven = self.high.copy(), [], True
        nothing = np.zeros(self.columns)
        for q in LEVELS:
            here = self.level == q
            if not here.any():
                continue
            covered = np.where(here, self.least_missing, high)
            if self._minimizer(covered, held).minimize(nothing, limit) is not None:
                high = covered
                continue
            objective = np.where(here, self.weight, 0.0)
            found = self._minimizer(high, held).minimize(objective, limit)
            if found is None:
                raise SearchFailed
            # Rounded, so that the sum held is one that whole robots attain.
            rounded = self._columns_of(self._task_of(found.values))
            held.append((objective, float(objective @ rounded) + HELD))
            proven &= found.proven
        return high, held, proven

    def _columns_of(self, start: np.ndarray) -> np.ndarray:
        """Give the columns of an assignment, shape (columns,)."""
        problem, values = self.problem, np.zeros(self.columns)
        on = start[self.robot] == self.task
        values[: self.pairs] = on
        count = np.bincount(self.task[on], minlength=len(problem.least))
        brought = self.rows[len(self.row_low) - len(self.need) :][:, : self.pairs] @ on
        values[self.pairs :] = np.maximum(
            np.concatenate(
                [
                    (problem.least - count)[self.counts],
                    problem.needs[self.need_task, self.need] - brought,
                ]
            ),
            0.0,
        )
        return values

    def _minimizer(self, high: np.ndarray, held: Held) -> Minimizer:
        """Give what minimizes with σ up to ``high`` (columns,) and some sums held."""
        cuts, due, whose = self._cuts
        fixed = np.flatnonzero((high <= self.least_missing)[self.needs][whose])
        cuts, due = cuts[fixed], due[fixed]
        sums = [sparse.csr_array(row[None]) for row, _ in held]
        return Minimizer(
            rows=sparse.vstack([self.rows, cuts, *sums], format="csr"),
            row_low=np.concatenate([self.row_low, due, np.full(len(held), -np.inf)]),
            row_high=np.concatenate(
                [self.row_high, np.full(len(due), np.inf), [value for _, value in held]]
            ),
            low=self.low,
            high=high,
            whole=self.pairs,
        )
