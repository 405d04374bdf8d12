"""QP solvers behind one call: the second takes over where the first fails."""

from __future__ import annotations

from collections.abc import Callable

import clarabel
import numpy as np
import piqp
from scipy import sparse

TOLERANCE = 1e-8

GAP = 1e-12
"""Duality gap: small beside the price of violated rows, so that small commands come out right."""


class SolverFailure(RuntimeError):
    """No solver gave an answer."""


def solve_qp(
    quadratic: np.ndarray,
    linear: np.ndarray,
    matrix: sparse.csc_array,
    bound: np.ndarray,
    lowest: np.ndarray,
    highest: np.ndarray,
) -> np.ndarray:
    """Solve min ½ xᵀ diag(quadratic) x + linearᵀ x s.t. matrix x ≤ bound, lowest ≤ x ≤ highest.

    Args:
        quadratic: Diagonal of the Hessian, positive, shape (n,).
        linear: Linear term, shape (n,).
        matrix: Rows, shape (r, n).
        bound: Right-hand sides, shape (r,).
        lowest, highest: Bounds of x, shape (n,); infinite where there is none.

    Returns:
        The optimum, shape (n,).

    Raises:
        SolverFailure: Neither solver solved it.
    """
    said = []
    for solver in SOLVERS:
        try:
            return solver(quadratic, linear, matrix, bound, lowest, highest)
        except SolverFailure as failure:
            said.append(str(failure))
    raise SolverFailure("; ".join(said))


def solve_with_piqp(
    quadratic: np.ndarray,
    linear: np.ndarray,
    matrix: sparse.csc_array,
    bound: np.ndarray,
    lowest: np.ndarray,
    highest: np.ndarray,
) -> np.ndarray:
    """Solve with PIQP, a proximal interior-point method; arguments as :func:`solve_qp`."""
    solver = piqp.SparseSolver()
    solver.settings.eps_abs = TOLERANCE
    solver.settings.eps_rel = TOLERANCE
    solver.settings.eps_duality_gap_abs = GAP
    solver.settings.eps_duality_gap_rel = GAP
    solver.settings.compute_timings = False
    unbounded = np.full(len(bound), -np.inf)
    hessian = sparse.csc_matrix(sparse.diags_array(quadratic))
    solver.setup(
        hessian, linear, None, None, sparse.csc_matrix(matrix), unbounded, bound, lowest, highest
    )
    status = solver.solve()
    if status != piqp.PIQP_SOLVED:
        raise SolverFailure(f"PIQP: {status}")
    return _checked("PIQP", np.array(solver.result.x))


def solve_with_clarabel(
    quadratic: np.ndarray,
    linear: np.ndarray,
    matrix: sparse.csc_array,
    bound: np.ndarray,
    lowest: np.ndarray,
    highest: np.ndarray,
) -> np.ndarray:
    """Solve with Clarabel, an interior-point method; arguments as :func:`solve_qp`."""
    identity = sparse.eye_array(len(linear), format="csr")
    above, below = np.isfinite(highest), np.isfinite(lowest)
    rows = sparse.vstack([matrix, identity[above], -identity[below]], format="csc")
    right = np.concatenate([bound, highest[above], -lowest[below]])
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = GAP
    settings.tol_feas = TOLERANCE
    solver = clarabel.DefaultSolver(
        sparse.csc_matrix(sparse.diags_array(quadratic)),
        linear,
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


Solver = Callable[..., np.ndarray]

SOLVERS: tuple[Solver, ...] = (solve_with_piqp, solve_with_clarabel)
"""In the order they are asked."""
