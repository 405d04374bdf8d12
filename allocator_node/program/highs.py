"""HiGHS for one assignment problem after another that differ in their costs only."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

import highspy
import numpy as np
from highspy.highs import HighsCallbackEvent
from scipy import sparse

INTEGRAL = 1e-6
"""Distance from 0 or 1 below which a relaxed α counts as integral."""

SURE = 1e-6
"""Margin, beside the size of the cost, with which columns are fixed by their reduced costs."""


class SearchFailed(RuntimeError):
    """No solution was found: the time ran out, or the solver failed."""


@dataclass(frozen=True)
class Found:
    """Attributes: column values, whether proven optimal, a lower bound on the objective."""

    values: np.ndarray
    proven: bool
    bound: float


class Limit:
    """When a search has to end."""

    def __init__(
        self, seconds: float = np.inf, stop: Callable[[], bool] = lambda: False
    ) -> None:
        """End it after a time, s, or when ``stop``, asked now and then, says so."""
        self.deadline = time.perf_counter() + seconds
        self._stop = stop

    def put_on(self, solver: highspy.Highs) -> None:
        """Make a solver obey."""
        solver.cbSimplexInterrupt += self._interrupt
        solver.cbMipInterrupt += self._interrupt
        if np.isfinite(self.deadline):
            # A solver counts the time of all its runs.
            left = max(self.deadline - time.perf_counter(), 0.0)
            solver.setOptionValue("time_limit", solver.getRunTime() + left)

    def take_off(self, solver: highspy.Highs) -> None:
        """Let a solver run on."""
        solver.cbSimplexInterrupt -= self._interrupt
        solver.cbMipInterrupt -= self._interrupt
        solver.setOptionValue("time_limit", np.inf)

    def _interrupt(self, event: HighsCallbackEvent) -> None:
        if self._stop():
            event.interrupt()


class Minimizer:
    """Finds min costᵀx s.t. row_low ≤ rows x ≤ row_high, low ≤ x ≤ high, leading x integral.

    The relaxation begins at its former optimum. Where it is fractional, the columns
    that cannot differ from it in any optimum are fixed before the integers are searched.
    """

    def __init__(
        self,
        rows: sparse.csr_array,
        row_low: np.ndarray,
        row_high: np.ndarray,
        low: np.ndarray,
        high: np.ndarray,
        whole: int,
    ) -> None:
        """Take the rows (r, n), the bounds, and how many leading x are integers."""
        self._rows, self._row_low, self._row_high = rows, row_low, row_high
        self._low, self._high, self._whole = low, high, whole
        self._model = model = highspy.HighsLp()
        model.num_row_, model.num_col_ = rows.shape
        model.col_cost_, model.col_lower_, model.col_upper_ = np.zeros(len(low)), low, high
        model.row_lower_, model.row_upper_ = row_low, row_high
        model.a_matrix_.format_ = highspy.MatrixFormat.kRowwise
        model.a_matrix_.start_ = rows.indptr
        model.a_matrix_.index_ = rows.indices
        model.a_matrix_.value_ = rows.data
        self._relaxed = _solver()
        self._relaxed.passModel(model)
        self._columns = np.arange(len(low), dtype=np.int32)

    def minimize(
        self, cost: np.ndarray, limit: Limit, hint: np.ndarray | None = None
    ) -> Found | None:
        """Minimize over the relaxation; over the integers only where it is fractional.

        Args:
            cost: Cost of each column, shape (n,).
            limit: When to end.
            hint: A solution that is known already, shape (n,).

        Returns:
            What was found; None where there is no solution.

        Raises:
            SearchFailed: The time ran out before any solution, or the solver failed.
        """
        relaxed = self._relaxed
        relaxed.changeColsCost(len(cost), self._columns, cost)
        status = _run(relaxed, limit)
        if status == highspy.HighsModelStatus.kInfeasible:
            return None
        if status != highspy.HighsModelStatus.kOptimal:
            raise SearchFailed
        solution = relaxed.getSolution()
        values = np.array(solution.col_value)
        alpha = values[: self._whole]
        if np.all(np.minimum(alpha, 1 - alpha) < INTEGRAL):
            return Found(values, True, float(cost @ values))
        return self._search(cost, values, np.array(solution.col_dual), limit, hint)

    def _search(
        self,
        cost: np.ndarray,
        relaxed: np.ndarray,
        reduced: np.ndarray,
        limit: Limit,
        hint: np.ndarray | None,
    ) -> Found | None:
        """Search the integers, from the optimum and the reduced costs of the relaxation."""
        model, count = self._model, len(cost)
        low, high = self._low.copy(), self._high.copy()
        if hint is not None and self._keeps(hint):
            # To move a column off its bound costs its reduced cost at least.
            room = float(cost @ (hint - relaxed)) + SURE * max(1.0, abs(float(cost @ hint)))
            alpha = np.arange(count) < self._whole
            high[alpha & (relaxed < 0.5) & (reduced > room)] = 0.0
            low[alpha & (relaxed > 0.5) & (reduced < -room)] = 1.0
        solver = _solver()
        model.col_cost_, model.col_lower_, model.col_upper_ = cost, low, high
        solver.passModel(model)
        kinds = np.full(self._whole, highspy.HighsVarType.kInteger)
        solver.changeColsIntegrality(self._whole, self._columns[: self._whole], kinds)
        # HiGHS 1.16 at times calls optimal what breaks rows when it is given a solution or a
        # basis to start from, and presolves; so it is given neither.
        status = _run(solver, limit)
        if status == highspy.HighsModelStatus.kInfeasible:
            return None
        info = solver.getInfo()
        if info.primal_solution_status != highspy.SolutionStatus.kSolutionStatusFeasible:
            raise SearchFailed
        values = np.array(solver.getSolution().col_value)
        if not self._keeps(values, 1e-5):
            raise SearchFailed
        proven = status == highspy.HighsModelStatus.kOptimal
        bound = float(cost @ values) if proven else info.mip_dual_bound
        return Found(values, proven, bound)

    def _keeps(self, values: np.ndarray, tolerance: float = 1e-9) -> bool:
        """Tell whether values keep all rows and bounds."""
        sums = self._rows @ values
        return bool(
            (sums >= self._row_low - tolerance).all()
            and (sums <= self._row_high + tolerance).all()
            and (values >= self._low - tolerance).all()
            and (values <= self._high + tolerance).all()
        )


def _solver() -> highspy.Highs:
    solver = Quiet()
    for option, value in (("threads", 1), ("mip_rel_gap", 0.0), ("mip_abs_gap", 1e-9)):
        solver.setOptionValue(option, value)
    return solver


def _run(solver: highspy.Highs, limit: Limit) -> highspy.HighsModelStatus:
    limit.put_on(solver)
    try:
        solver.run()
        return solver.getModelStatus()
    finally:
        limit.take_off(solver)


class Quiet(highspy.Highs):
    """HiGHS that prints nothing, not even the banner that comes with its callbacks."""

    def enableCallbacks(self) -> None:
        """Switch the output off first."""
        self.setOptionValue("output_flag", False)
        super().enableCallbacks()
