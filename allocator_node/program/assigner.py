"""Assignment from period to period: in the loop while that is quick, else beside it."""

from __future__ import annotations

import threading
import time
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, replace

import numpy as np

from .assignment import Assignment, evaluate, reduced_costs
from .highs import Limit, SearchFailed
from .integers import Integers
from .problem import Problem
from .repair import repair
from .slots import Slots

WORTH_PROVING = 0.25
"""Share of a mean swap cost from which a possible gain is worth another search."""

PAIR_TAKES = 5e-5
"""Time a search takes for each eligible pair, s: a guess while there is no experience."""

FADES = 0.98
"""Share left of the time the last search took, period by period: the next may be quicker."""

LONGEST_SEARCH = 20.0
"""Time after which a search beside the loop ends with the best it has, s."""


@dataclass(frozen=True)
class Proof:
    """A finished search.

    Attributes:
        key: The discrete data it holds for.
        costs: Cost of each α_im = 1 it was made with, Wh, shape (N, M).
        constant: Swap costs that were added to all of them, Wh.
        found: The assignment.
    """

    key: bytes
    costs: np.ndarray
    constant: float
    found: Assignment

    def bound(self, costs: np.ndarray, constant: float) -> float:
        """Give a lower bound on the optimum under other costs, Wh.

        A robot does at most one task, so the optimum cannot have fallen by more
        than each robot's greatest fall in cost.
        """
        fall = np.minimum((costs - self.costs).min(axis=1), 0.0).sum()
        return self.found.cost - self.found.gap - self.constant + constant + float(fall)


class Assigner:
    """Decides the assignment of each period and bounds how far it is from the optimum.

    Where only head counts matter, the optimum is found at once. Graded amounts
    make a true integer program: it is solved in the loop while such searches take
    less than ``budget`` seconds; otherwise in a thread beside the loop (the
    solver does not hold the interpreter), and meanwhile the standing assignment
    stands, re-priced and mended.
    """

    def __init__(self, budget: float = np.inf) -> None:
        """Begin without any proof.

        Args:
            budget: Time a search may take in the loop, s; inf: always in the loop.
        """
        self.budget = budget
        self._lasted: float | None = None
        self._proof: Proof | None = None
        self._program: Integers | None = None
        self._program_key = b""
        self._slots: Slots | None = None
        self._slots_key = b""
        self._search: Future[tuple[Proof | None, float]] | None = None
        self._thread: ThreadPoolExecutor | None = None
        self._closing = threading.Event()

    @property
    def searching(self) -> bool:
        """Whether a search is under way that may still change the assignment."""
        return self._search is not None

    def close(self) -> None:
        """End the thread, if there is one, and the search under way in it."""
        if self._thread is not None:
            self._closing.set()
            self._thread.shutdown(wait=True, cancel_futures=True)
            self._closing.clear()
            self._thread = self._search = None

    def forget(self) -> None:
        """Drop what is known of other tasks: the next ones have other names or another order."""
        self.close()
        self._proof = None

    def wait(self) -> None:
        """Wait until the search beside the loop, if there is one, has ended."""
        if self._search is not None:
            self._search.exception()

    def assign(self, problem: Problem, prices: np.ndarray) -> Assignment:
        """Give this period's assignment."""
        if self._search is not None and self._search.done():
            search, self._search = self._search, None
            proof, self._lasted = search.result()
            self._proof = proof or self._proof
        if (task := self._by_slots(problem, prices)) is not None:
            return evaluate(problem, prices, task, proven=True)
        lasts = self._lasted
        if lasts is None:
            lasts = PAIR_TAKES * np.count_nonzero(problem.eligible)
        if lasts <= self.budget and self._search is None:
            proof, self._lasted = self._prove(problem, prices, problem.previous, self.budget)
            if proof is not None and proof.found.proven:
                self._proof = proof
                return proof.found
            self._lasted = np.inf
        elif self._lasted is not None:
            self._lasted *= FADES
        return self._beside(problem, prices)

    def _by_slots(self, problem: Problem, prices: np.ndarray) -> np.ndarray | None:
        """Give the optimal task of each robot, (N,); None where slots are not the way."""
        key = problem.situation + problem.holding.tobytes()
        if self._slots_key != key:
            self._slots, self._slots_key = Slots.of(problem), key
        costs = reduced_costs(problem, prices)
        return None if self._slots is None else self._slots.solve(costs)

    def _beside(self, problem: Problem, prices: np.ndarray) -> Assignment:
        """Stand by the standing assignment until a better one is proven."""
        candidates = [evaluate(problem, prices, repair(problem, prices, problem.previous))]
        key = problem.situation
        if self._proof is not None:
            proposed = repair(problem, prices, self._proof.found.task)
            candidates.append(evaluate(problem, prices, proposed))
        best = candidates[0]
        for other in candidates[1:]:
            best = other if other.better_than(best) else best

        gap = np.inf
        if self._proof is not None and self._proof.key == key:
            costs, constant = _costs(problem, prices)
            same = np.allclose(best.shortfall, self._proof.found.shortfall, atol=1e-6)
            if same:
                gap = max(best.cost - self._proof.bound(costs, constant), 0.0)
        if self._search is None and gap > WORTH_PROVING * problem.swap_cost.mean():
            if self._thread is None:
                self._thread = ThreadPoolExecutor(1, thread_name_prefix="assignment")
            self._search = self._thread.submit(
                self._prove, problem, prices, best.task, LONGEST_SEARCH
            )
        return replace(best, proven=gap == 0.0, gap=gap)

    def _prove(
        self, problem: Problem, prices: np.ndarray, start: np.ndarray, time_limit: float
    ) -> tuple[Proof | None, float]:
        """Search for the optimum; give it, if there was time, and how long that took, s."""
        begun = time.perf_counter()
        hint = repair(problem, prices, start)
        costs, constant = _costs(problem, prices)
        key = problem.situation
        if self._program is None or self._program_key != key:
            self._program, self._program_key = Integers(problem), key
        try:
            answer = self._program.solve(costs, hint, Limit(time_limit, self._closing.is_set))
        except SearchFailed:
            return None, time.perf_counter() - begun
        proof = Proof(key, costs, constant, evaluate(problem, prices, *answer))
        return proof, time.perf_counter() - begun


def _costs(problem: Problem, prices: np.ndarray) -> tuple[np.ndarray, float]:
    """Give the cost of each eligible α_im = 1, and the swap costs they are counted from."""
    costs = np.where(problem.eligible, reduced_costs(problem, prices), 0.0)
    return costs, float(problem.swap_cost[problem.settled].sum())
