"""Whether speed costs mission quality: random faulty rehearsals under several assigners.

python3 tests/benchmarks/quality.py [--runs 30] [--seconds 180]

Prints a table in Markdown. The allocator with every integer program searched beside the
loop, so that what it finds comes a period late, stands against the same with every program
solved to the end in every period, and against two things one might do instead, both run
anew every period.
"""

from __future__ import annotations

import argparse
import math
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass, fields

import numpy as np
import paths  # noqa: F401
from cases import mission
from scipy.optimize import linear_sum_assignment

from allocator_node.program import Assigner, Assignment, Problem
from allocator_node.program.assignment import evaluate
from allocator_node.program.problem import LEVELS
from allocator_node.sim.record import Rehearsal
from allocator_node.sim.rehearsal import rehearse


class APeriodLate(Assigner):
    """Every search goes on beside the loop and is over by the next period."""

    def __init__(self) -> None:
        super().__init__(budget=-1.0)

    def assign(self, problem: Problem, prices: np.ndarray) -> Assignment:
        """Give this period's assignment."""
        found = super().assign(problem, prices)
        self.wait()
        return found


class NearestAble(Assigner):
    """Task by task in their order of priority, the nearest able robot that is still free."""

    def assign(self, problem: Problem, prices: np.ndarray) -> Assignment:
        """Give this period's assignment."""
        task = np.full(len(prices), -1)
        for level in LEVELS:
            for m in np.flatnonzero(problem.priority == level):
                able = np.flatnonzero(problem.eligible[:, m])
                for robot in able[np.argsort(problem.path[able, m])]:
                    group = np.flatnonzero(task == m)
                    missing = problem.needs[m] - problem.capability[group].sum(axis=0)
                    brings = ((missing > 1e-9) & (problem.capability[robot] > 0)).any()
                    wanted = brings or len(group) < problem.least[m]
                    if task[robot] < 0 and wanted and len(group) < problem.most[m]:
                        task[robot] = m
        return evaluate(problem, prices, task)


class OneToOne(Assigner):
    """One able robot for each task, so that the sum of their ways is least."""

    def assign(self, problem: Problem, prices: np.ndarray) -> Assignment:
        """Give this period's assignment."""
        active = np.flatnonzero((problem.least > 0) | (problem.needs > 0).any(axis=1))
        able = problem.eligible[:, active]
        far = 1e6
        way = np.where(able, np.minimum(problem.path[:, active], far / 1e3), far)
        robots, tasks = linear_sum_assignment(way)
        kept = able[robots, tasks]
        task = np.full(len(prices), -1)
        task[robots[kept]] = active[tasks[kept]]
        return evaluate(problem, prices, task)


ASSIGNERS: dict[str, Callable[[], Assigner]] = {
    "solved to the end in every period": Assigner,
    "searched beside the loop, a period late": APeriodLate,
    "nearest able robot, greedily": NearestAble,
    "one to one by distance": OneToOne,
}


@dataclass
class Score:
    """How missions went.

    Attributes:
        coverage: Share of the tasks' active time in which all their needs were met.
        energy: Energy used by all robots, Wh.
        reallocations: Changes of a task's group.
        finished: Tasks brought to their end.
        violations: Robot-steps with a robot's centre out of bounds.
        nearest: Smallest distance between two bodies, m.
    """

    coverage: float
    energy: float
    reallocations: float
    finished: float
    violations: float
    nearest: float

    @classmethod
    def of(cls, run: Rehearsal) -> Score:
        """Score one rehearsal."""
        active = sum(run.active_s.values())
        covered = sum(run.coverage[task] * run.active_s[task] for task in run.tasks)
        apart = run.min_separation_m
        return cls(
            covered / active if active else 1.0,
            sum(run.energy_wh.values()),
            len(run.events),
            len(run.finished),
            run.boundary_violations,
            math.inf if apart is None else apart,
        )

    @classmethod
    def mean(cls, scores: list[Score]) -> Score:
        """Give means over missions; of the nearest distance the least."""
        values = {
            part.name: float(np.mean([getattr(score, part.name) for score in scores]))
            for part in fields(cls)
        }
        return cls(**values | {"nearest": min(score.nearest for score in scores)})


def compare(
    runs: int, seconds: float, told: Callable[[str], None] = lambda line: None
) -> dict[str, list[Score]]:
    """Rehearse random missions under every assigner; give a score a mission."""
    scores: dict[str, list[Score]] = {name: [] for name in ASSIGNERS}
    for seed in range(runs):
        team, world = mission(seed, seconds)
        begun = time.perf_counter()
        for name, make in ASSIGNERS.items():
            assigner = make()
            run = rehearse(team, world, seconds, seed=seed, assigner=assigner)
            assigner.close()
            scores[name].append(Score.of(run))
        shares = ", ".join(f"{mine[-1].coverage:.3f}" for mine in scores.values())
        told(f"mission {seed}: coverage {shares} ({time.perf_counter() - begun:.0f} s)")
    return scores


def table(scores: dict[str, list[Score]], seconds: float) -> str:
    """Give the means as a table in Markdown."""
    count = len(next(iter(scores.values())))
    lines = [
        f"Means over {count} random missions of {seconds:.0f} s with faults.",
        "",
        "| assignment | coverage | energy, Wh | reallocations | finished tasks | nearest, m |",
        "|---|---:|---:|---:|---:|---:|",
    ]
    for name, mine in scores.items():
        mean = Score.mean(mine)
        lines.append(
            f"| {name} | {mean.coverage:.1%} | {mean.energy:.1f} | {mean.reallocations:.1f} "
            f"| {mean.finished:.1f} | {mean.nearest:.2f} |"
        )
    return "\n".join(lines)


def main() -> int:
    """Compare, print, and tell whether the fast loop is within one per cent."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--runs", type=int, default=30)
    parser.add_argument("--seconds", type=float, default=180.0)
    options = parser.parse_args()
    scores = compare(
        options.runs, options.seconds, lambda line: print(line, file=sys.stderr, flush=True)
    )
    print(table(scores, options.seconds))
    exact, fast = (Score.mean(mine) for mine in list(scores.values())[:2])
    apart = max(
        abs(fast.coverage - exact.coverage) / exact.coverage,
        abs(fast.energy - exact.energy) / exact.energy,
    )
    print(f"\nThe fast loop is within {apart:.2%} of the exact one in coverage and energy.")
    return int(apart > 0.01)


if __name__ == "__main__":
    sys.exit(main())
