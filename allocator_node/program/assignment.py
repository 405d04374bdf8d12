"""Who does what: the assignment problem that pricing leaves, solved by HiGHS."""

from __future__ import annotations

from dataclasses import dataclass

import highspy
import numpy as np
from scipy import sparse

from .problem import Problem

INTEGRAL = 1e-6
"""Distance from 0 or 1 below which a relaxed α counts as integral."""

HELD = 1e-7
"""How far a level may give way while the next is optimized; far below one shortfall."""


@dataclass(frozen=True)
class Assignment:
    """An assignment and what it leaves open.

    Attributes:
        task: Task of each robot, −1: none; shape (N,).
        missing_robots: σ_m, shape (M,).
        missing_needs: σ_mk, shape (M, K).
        shortfall: Shortfall at each priority level q = 4, 3, 2, 1, 0; shape (5,).
        cost: Cost of the assignment with its swap terms, Wh.
        proven: Whether the solver proved it optimal.
    """

    task: np.ndarray
    missing_robots: np.ndarray
    missing_needs: np.ndarray
    shortfall: np.ndarray
    cost: float
    proven: bool


def evaluate(problem: Problem, prices: np.ndarray, task: np.ndarray, proven: bool) -> Assignment:
    """Give the shortfalls and the cost of an assignment; task (N,), prices (N, M)."""
    robots, tasks = prices.shape
    busy = np.flatnonzero(task >= 0)
    alpha = np.zeros((robots, tasks))
    alpha[busy, task[busy]] = 1.0
    missing_robots = np.maximum(problem.least - alpha.sum(axis=0), 0)
    missing_needs = np.maximum(problem.needs - alpha.T @ problem.capability, 0)
    missing_needs[missing_needs < 1e-9 * np.maximum(problem.needs, 1)] = 0
    share = _ratio(missing_robots, problem.least) + _ratio(missing_needs, problem.needs).sum(axis=1)
    levels = np.array([share[problem.priority == q].sum() for q in (4, 3, 2, 1, 0)])
    keeps = problem.keeps_on
    taken_off = keeps.any(axis=1) & ~(keeps & (alpha > 0)).any(axis=1)
    cost = prices[busy, task[busy]].sum() + problem.swap_cost[taken_off].sum()
    return Assignment(task, missing_robots, missing_needs, levels, float(cost), proven)


def _ratio(part: np.ndarray, whole: np.ndarray) -> np.ndarray:
    return np.divide(part, whole, out=np.zeros_like(part, dtype=float), where=whole > 0)


def assign(problem: Problem, prices: np.ndarray, time_limit: float = np.inf) -> Assignment:
    """Solve the assignment problem of the given prices, level by level.

    Args:
        problem: The period's program.
        prices: κ w_im + e_im, Wh, shape (N, M).
        time_limit: Time after which the best assignment found is taken, s.

    Returns:
        The optimum; ``proven`` tells whether the time sufficed to prove it.
    """
    if not problem.eligible.any():
        return evaluate(problem, prices, np.full(len(prices), -1), proven=True)
    return evaluate(problem, prices, *_Integers(problem, prices, time_limit).solve())


class _Integers:
    """The integer program over the eligible pairs, as HiGHS takes it.

    Columns: one α for each eligible pair, one σ for each head count, one for
    each need. Rows: robots, head counts, needs.
    """

    def __init__(self, problem: Problem, prices: np.ndarray, time_limit: float) -> None:
        self.problem, self.time_limit = problem, time_limit
        robots, tasks = prices.shape
        self.robot, self.task = np.nonzero(problem.eligible)
        self.pairs = pairs = len(self.robot)
        self.counts = np.flatnonzero(problem.least > 0)
        self.need_task, self.need = np.nonzero(problem.needs > 0)
        self.columns = pairs + len(self.counts) + len(self.need_task)

        reward = problem.swap_cost[self.robot] * problem.keeps_on[self.robot, self.task]
        self.cost = np.zeros(self.columns)
        self.cost[:pairs] = prices[self.robot, self.task] - reward
        self.level = np.concatenate(
            [
                np.full(pairs, -1),
                problem.priority[self.counts],
                problem.priority[self.need_task],
            ]
        )
        self.weight = np.concatenate(
            [
                np.zeros(pairs),
                1.0 / problem.least[self.counts],
                1.0 / problem.needs[self.need_task, self.need],
            ]
        )
        pair = np.arange(pairs)
        counting = sparse.csr_array(
            (np.ones(pairs), (self.task, pair)), shape=(tasks, self.columns)
        )
        needing = sparse.csr_array(

                problem.capability[self.robot].T[self.need] * (self.task == self.need_task[:, None])
                if len(self.need)
                else np.zeros((0, pairs))

        )
        needing.resize((len(self.need), self.columns))
        missing = sparse.eye_array(self.columns, format="csr")[pairs:]
        least = counting[self.counts] + missing[: len(self.counts)]
        self.rows = sparse.vstack(
            [
                sparse.csr_array(
                    (np.ones(pairs), (self.robot, pair)), shape=(robots, self.columns)
                ),
                counting,
                least,
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
        pins = np.bincount(problem.pinned[problem.pinned >= 0], minlength=tasks)
        self.row_high = np.concatenate(
            [
                np.ones(robots),
                np.maximum(problem.most, pins),
                np.full(len(self.counts) + len(self.need), np.inf),
            ]
        )
        self.low = np.zeros(self.columns)
        self.low[:pairs] = problem.pinned[self.robot] == self.task
        self.high = np.ones(self.columns)
        self.high[pairs:] = np.inf

    def solve(self) -> tuple[np.ndarray, bool]:
        """Give the task of each robot and whether it is proven optimal."""
        covered = self.high.copy()
        covered[self.pairs :] = 0
        found = self._minimize(self.cost, covered)
        if found is None:
            found = self._by_levels()
        chosen, proven = found
        task = np.full(len(self.problem.pinned), -1)
        on = chosen[: self.pairs] > 0.5
        task[self.robot[on]] = self.task[on]
        return task, proven

    def _by_levels(self) -> tuple[np.ndarray, bool]:
        """Minimize the shortfall of each level, hold it, then the cost."""
        held: list[tuple[np.ndarray, float]] = []
        all_proven = True
        for q in sorted(set(self.level[self.pairs :]), reverse=True):
            objective = np.where(self.level == q, self.weight, 0.0)
            chosen, proven = self._must(self._minimize(objective, self.high, held))
            held.append((objective, max(float(objective @ chosen), 0.0) + HELD))
            all_proven &= proven
        chosen, proven = self._must(self._minimize(self.cost, self.high, held))
        return chosen, proven and all_proven

    @staticmethod
    def _must(found: tuple[np.ndarray, bool] | None) -> tuple[np.ndarray, bool]:
        if found is None:
            raise RuntimeError("the assignment problem has no solution, which cannot be")
        return found

    def _minimize(
        self,
        objective: np.ndarray,
        high: np.ndarray,
        held: list[tuple[np.ndarray, float]] | None = None,
    ) -> tuple[np.ndarray, bool] | None:
        """Minimize over the relaxation; over the integers only where it is fractional."""
        solver = highspy.Highs()
        solver.setOptionValue("output_flag", False)
        solver.setOptionValue("threads", 1)
        solver.setOptionValue("mip_rel_gap", 0.0)
        solver.setOptionValue("mip_abs_gap", 1e-9)
        if np.isfinite(self.time_limit):
            solver.setOptionValue("time_limit", self.time_limit)
        solver.passModel(self._model(objective, high, held or []))
        solver.run()
        status = solver.getModelStatus()
        if status == highspy.HighsModelStatus.kInfeasible:
            return None
        chosen = np.array(solver.getSolution().col_value)
        alpha = chosen[: self.pairs]
        if status == highspy.HighsModelStatus.kOptimal and np.all(
            np.minimum(alpha, 1 - alpha) < INTEGRAL
        ):
            return chosen, True
        pairs = np.arange(self.pairs, dtype=np.int32)
        kinds = np.full(self.pairs, highspy.HighsVarType.kInteger)
        solver.changeColsIntegrality(self.pairs, pairs, kinds)
        solver.run()
        status = solver.getModelStatus()
        if status == highspy.HighsModelStatus.kInfeasible:
            return None
        return np.array(solver.getSolution().col_value), (
            status == highspy.HighsModelStatus.kOptimal
        )

    def _model(
        self, objective: np.ndarray, high: np.ndarray, held: list[tuple[np.ndarray, float]]
    ) -> highspy.HighsLp:
        rows, row_low, row_high = self.rows, self.row_low, self.row_high
        if held:
            rows = sparse.vstack([rows, *(sparse.csr_array(row[None]) for row, _ in held)], "csr")
            row_low = np.concatenate([row_low, np.full(len(held), -np.inf)])
            row_high = np.concatenate([row_high, [value for _, value in held]])
        model = highspy.HighsLp()
        model.num_col_, model.num_row_ = self.columns, rows.shape[0]
        model.col_cost_, model.col_lower_, model.col_upper_ = objective, self.low, high
        model.row_lower_, model.row_upper_ = row_low, row_high
        model.a_matrix_.format_ = highspy.MatrixFormat.kRowwise
        model.a_matrix_.start_ = rows.indptr
        model.a_matrix_.index_ = rows.indices
        model.a_matrix_.value_ = rows.data
        return model
