"""The fast way to the assignment problem's optimum: by slots, else by integers."""

from __future__ import annotations

import numpy as np

from .assignment import Assignment, evaluate, reduced_costs
from .highs import Limit
from .integers import Integers
from .problem import Problem
from .slots import Slots


def assign(problem: Problem, prices: np.ndarray, time_limit: float = np.inf) -> Assignment:
    """Solve the assignment problem of the given prices.

    Args:
        problem: The period's program.
        prices: κ w_im + e_im, Wh, shape (N, M).
        time_limit: Time after which the best assignment found is taken, s.

    Returns:
        The optimum; ``proven`` tells whether the time sufficed to prove it.
    """
    costs = reduced_costs(problem, prices)
    slots = Slots.of(problem)
    task = None if slots is None else slots.solve(costs)
    if task is not None:
        return evaluate(problem, prices, task, proven=True)
    return evaluate(problem, prices, *Integers(problem).solve(costs, limit=Limit(time_limit)))
