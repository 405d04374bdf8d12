"""QP solvers behind one call: the next takes over where one fails."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import clarabel
import daqp
import numpy as np
import piqp
from scipy import sparse

TOLERANCE = 1e-8

GAP = 1e-12
"""Duality gap: small beside the price of violated rows, so that small commands come out right."""

SMALL = 80
"""Up to so many unknowns the active-set method is the quickest, by measure on crowded scenes."""


HOLDS = 1e-5
"""By how much an answer may miss a row or bound."""

LONGEST = 0.5
"""Time all solvers together may take, s: robots that hear nothing for longer stop by themselves."""


class SolverFailure(RuntimeError):
    """No solver gave an answer."""


@dataclass(frozen=True)
class QP:
    """min ½ xᵀ diag(quadratic) x + linearᵀ x s.t. A x ≤ bound, lowest ≤ x ≤ highest.

    Attributes:
        quadratic: Diagonal of the Hessian, positive, shape (n,).
        linear: Linear term, shape (n,).
        row, column, value: Entries of A, each place at most once, shape (e,).
        bound: Right-hand sides, shape (r,).
        lowest, highest: Bounds of x, shape (n,); infinite where there is none.
    """

    quadratic: np.ndarray
    linear: np.ndarray
    row: np.ndarray
    column: np.ndarray
    value: np.ndarray
    bound: np.ndarray
    lowest: np.ndarray
    highest: np.ndarray

    def holds(self, answer: np.ndarray) -> bool:
        """Tell whether an answer (n,) meets every row and bound, to :data:`HOLDS`."""
        reached = np.bincount(
            self.row, self.value * answer[self.column], minlength=len(self.bound)
        )
        return bool(
            (reached <= self.bound + HOLDS).all()
            and (answer >= self.lowest - HOLDS).all()
            and (answer <= self.highest + HOLDS).all()
        )

    @cached_property
    def hessian(self) -> sparse.csc_matrix:
        """The Hessian, shape (n, n)."""
        size = len(self.linear)
        start = np.arange(size + 1, dtype=np.int32)
        return sparse.csc_matrix((self.quadratic, start[:-1], start), shape=(size, size))

    @cached_property
    def matrix(self) -> sparse.csc_matrix:
        """A, shape (r, n)."""
        shape = len(self.bound), len(self.linear)
        order = np.argsort(self.column * shape[0] + self.row)
        start = np.zeros(shape[1] + 1, dtype=np.int32)
        np.cumsum(np.bincount(self.column, minlength=shape[1]), out=start[1:])
        index = self.row[order].astype(np.int32)
        return sparse.csc_matrix((self.value[order], index, start), shape=shape)


def solve_qp(qp: QP) -> np.ndarray:
    """Give the optimum of a QP, shape (n,).

    An answer that misses a row or a bound is none, whatever its solver says.

    Raises:
        SolverFailure: No solver solved it in time.
    """
    said, end = [], time.monotonic() + LONGEST
    for solver in SOLVERS:
        try:
            answer = solver(qp)
            if qp.holds(answer):
                return answer
            said.append(f"{solver.__name__}: not feasible")
        except Exception as failure:  # a library may fail in ways of its own
            said.append(str(failure))
        if time.monotonic() > end:
            said.append("no time left")
            break
    raise SolverFailure("; ".join(said))


def solve_with_daqp(qp: QP) -> np.ndarray:
    """Solve a small QP with DAQP, a dual active-set method for dense matrices."""
    if len(qp.linear) > SMALL:
        raise SolverFailure(f"DAQP: not for more than {SMALL} unknowns")
    matrix = np.zeros((len(qp.bound), len(qp.linear)))
    matrix[qp.row, qp.column] = qp.value
    above = np.concatenate([qp.highest, qp.bound])
    below = np.concatenate([qp.lowest, np.full(len(qp.bound), -np.inf)])
    sense = np.zeros(len(above), dtype=np.intc)
    answer, _, status, _ = daqp.solve(
        np.diag(qp.quadratic), qp.linear, matrix, above, below, sense
    )
    if status != 1:
        raise SolverFailure(f"DAQP: status {status}")
    return _checked("DAQP", np.array(answer))


def solve_with_piqp(qp: QP) -> np.ndarray:
    """Solve with PIQP, a proximal interior-point method."""
    solver = piqp.SparseSolver()
    solver.settings.eps_abs = TOLERANCE
    solver.settings.eps_rel = TOLERANCE
    solver.settings.eps_duality_gap_abs = GAP
    solver.settings.eps_duality_gap_rel = GAP
    solver.settings.compute_timings = False
    unbounded = np.full(len(qp.bound), -np.inf)
    solver.setup(
        qp.hessian, qp.linear, None, None, qp.matrix, unbounded, qp.bound, qp.lowest, qp.highest
    )
    status = solver.solve()
    if status != piqp.PIQP_SOLVED:
        raise SolverFailure(f"PIQP: {status}")
    return _checked("PIQP", np.array(solver.result.x))


def solve_with_clarabel(qp: QP) -> np.ndarray:
    """Solve with Clarabel, an interior-point method."""
    identity = sparse.eye_array(len(qp.linear), format="csr")
    above, below = np.isfinite(qp.highest), np.isfinite(qp.lowest)
    rows = sparse.vstack([qp.matrix, identity[above], -identity[below]], format="csc")
    right = np.concatenate([qp.bound, qp.highest[above], -qp.lowest[below]])
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.time_limit = LONGEST
    settings.tol_gap_abs = settings.tol_gap_rel = GAP
    settings.tol_feas = TOLERANCE
    solver = clarabel.DefaultSolver(
        qp.hessian,
        qp.linear,
        sparse.csc_matrix(rows),
        right,
        [clarabel.NonnegativeConeT(len(right))],
        settings,
    )
    solution = solver.solve()
    if solution.status != clarabel.SolverStatus.Solved:
        raise SolverFailure(f"Clarabel: {solution.status}")
    return _checked("Clarabel", np.array(solution.x))


def _checked(name: str, answer: np.ndarray) -> np.ndarray:
    if not np.isfinite(answer).all():
        raise SolverFailure(f"{name}: answer not finite")
    return answer


Solver = Callable[[QP], np.ndarray]

SOLVERS: tuple[Solver, ...] = (solve_with_daqp, solve_with_piqp, solve_with_clarabel)
"""In the order they are asked."""
