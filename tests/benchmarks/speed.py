"""How fast the allocator is, beside the solvers it is made of, in one run of a few minutes.

python3 tests/benchmarks/speed.py [--json FILE]
"""

from __future__ import annotations

import argparse
import json
import os
import re
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import cvxpy as cp
import numpy as np
import paths  # noqa: F401
from builders import random_problem
from cases import at_work, crowd, farm
from milp import assign_with_milp
from rich.console import Console
from rich.table import Table
from scipy.optimize import linear_sum_assignment

from allocator_node.allocator import Allocator
from allocator_node.program import Assigner, Assignment, Problem, assign, price, solve_control
from allocator_node.program.control import joint
from allocator_node.program.solvers import (
    SMALL,
    solve_with_clarabel,
    solve_with_daqp,
    solve_with_piqp,
)
from allocator_node.program.statement import solve_statement

BUDGET = 0.01
"""What the node gives the search for an assignment within a period of 0.1 s, s."""

SIZES = ((5, 3, 150), (20, 8, 150), (100, 40, 120), (500, 100, 60))
"""Robots, tasks, and periods that are timed."""

STEPS = "(b) a step at work, proof beside"

PARTS = ("belief", "pricing", "assignment", "control")

Rows = list[dict[str, Any]]


def timed(call: Callable[[], Any], seconds: float = 0.15, least: int = 3) -> float:
    """Give the median time of a call, ms, repeated for about so many seconds."""
    times, end = [], time.perf_counter() + seconds
    while len(times) < least or time.perf_counter() < end:
        begun = time.perf_counter()
        call()
        times.append(time.perf_counter() - begun)
    return 1e3 * float(np.median(times))


def against_the_statement() -> Rows:
    """(a) A decision against the undivided statement: cvxpy and a branch-and-bound solver."""
    rows = []
    for robots, tasks in ((3, 2), (5, 3), (8, 4), (12, 5)):
        fast, stated, solver, apart = [], [], [], []
        for seed in range(3):
            problem = random_problem(np.random.default_rng(seed), robots, tasks)
            with solver_time() as spent:
                begun = time.perf_counter()
                optimum = solve_statement(problem)
                stated.append(1e3 * (time.perf_counter() - begun))
            solver.append(1e3 * sum(spent))
            fast.append(timed(lambda: _decided(replace(problem))))  # noqa: B023
            cost = _decided(problem).cost
            apart.append(abs(cost - optimum.cost) / max(abs(optimum.cost), 1e-9))
        rows.append(
            {
                "robots × tasks": f"{robots} × {tasks}",
                "fast ms": np.median(fast),
                "undivided ms": np.median(stated),
                "its solvers alone ms": np.median(solver),
                "times faster": np.median(np.divide(stated, fast)),
                "than its solvers": np.median(np.divide(solver, fast)),
                "apart (relative)": max(apart),
            }
        )
    return rows


def _decided(problem: Problem) -> Assignment:
    return assign(problem, price(problem))


class solver_time:
    """Collects the time that solvers called by cvxpy say they took, s."""

    def __enter__(self) -> list[float]:
        spent: list[float] = []
        self._solve = solve = cp.Problem.solve

        def counting(program: cp.Problem, *args: Any, **options: Any) -> Any:
            value = solve(program, *args, **options)
            spent.append(program.solver_stats.solve_time or 0.0)
            return value

        cp.Problem.solve = counting
        return spent

    def __exit__(self, *_: Any) -> None:
        cp.Problem.solve = self._solve


def whole_step() -> Rows:
    """(b) Parts of a step and the whole of it, at work, with the proof beside the loop."""
    rows = []
    for robots, tasks, steps in SIZES:
        for kind in ("heads", "graded"):
            allocator = Allocator(farm(robots, tasks, kind), budget=BUDGET)
            parts, whole, proven = [], [], []
            begun = time.perf_counter()
            for decision, seconds in at_work(allocator, steps):
                whole.append(seconds)
                parts.append([decision.seconds[part] for part in PARTS])
                proven.append(decision.gap == 0.0)
                if time.perf_counter() - begun > 25:
                    break
            allocator.close()
            middle = 1e3 * np.median(parts[1:], axis=0)
            step = 1e3 * np.array(whole)
            rows.append(
                {
                    "robots × tasks": f"{robots} × {tasks}",
                    "needs": kind,
                    **{f"{part} ms": value for part, value in zip(PARTS, middle, strict=True)},
                    "step p50 ms": np.median(step[1:]),
                    "step p99 ms": np.percentile(step[1:], 99),
                    "first ms": step[0],
                    "proven at once": f"{np.mean(proven):.0%}",
                }
            )
    return rows


def control_and_solvers() -> Rows:
    """(c) Safe control against the solvers alone, on the same matrices.

    ``its QP``: the groups that need a solver, with the solver that gets them; ``whole``:
    the QP of all robots and all rows, as one would hand it over without looking.
    """
    rows = []
    for name, room in (("crowd", 6.0), ("busy", 16.0), ("open", 60.0)):
        for robots in (5, 20, 100, 500):
            table, solver = [], "none"
            for seed in range(4 if robots < 500 else 2):
                problem = crowd(robots, room, seed)
                control = solve_control(problem)
                whole = _ready(joint(problem, np.arange(robots)).qp)
                own = 0.0
                if control.solved.any():
                    qp = _ready(joint(problem, np.flatnonzero(control.solved)).qp)
                    small = len(qp.linear) <= SMALL
                    first = solve_with_daqp if small else solve_with_piqp
                    own, solver = timed(lambda: first(qp)), "DAQP" if small else "PIQP"  # noqa: B023
                reference = joint(problem, np.arange(robots)).commands(solve_with_clarabel(whole))
                table.append(
                    (
                        control.solved.mean(),
                        timed(lambda: solve_control(replace(problem))),  # noqa: B023
                        own,
                        timed(lambda: solve_with_piqp(whole)),  # noqa: B023
                        timed(lambda: solve_with_clarabel(whole)),  # noqa: B023
                        np.abs(_octagon_free(problem, control, reference)).max(),
                    )
                )
            solved, ours, own, piqp, clarabel, apart = np.mean(table, axis=0)
            rows.append(
                {
                    "scene": name,
                    "robots": robots,
                    "in the QP": f"{solved:.0%}",
                    "control ms": ours,
                    "its QP ms": own,
                    "solver": solver,
                    "ratio": ours / own if own else np.nan,
                    "PIQP whole ms": piqp,
                    "ratio ": ours / piqp,
                    "Clarabel whole ms": clarabel,
                    "ratio  ": ours / clarabel,
                    "apart m/s": apart,
                }
            )
    return rows


def _ready(qp: Any) -> Any:
    """Have the matrices built, so that only the solver is timed."""
    _ = qp.hessian, qp.matrix
    return qp


def _octagon_free(problem: Any, control: Any, reference: np.ndarray) -> np.ndarray:
    """Compare commands where both obey the same limits: not where an octagon bounds one only."""
    alike = control.solved | ~problem.round_limit
    return (control.commands - reference)[alike]


def one_to_one(instances: int = 300) -> Rows:
    """(d) One robot a task, period after period: against scipy.optimize.linear_sum_assignment."""
    rows = []
    for size in (50, 100, 200):
        random = np.random.default_rng(size)
        problem = random_problem(random, size, size)
        problem = replace(
            problem,
            needs=np.zeros_like(problem.needs),
            least=np.ones(size, int),
            most=np.ones(size, int),
            eligible=np.ones((size, size), bool),
            pinned=np.full(size, -1),
            swap_cost=np.zeros(size),
        )
        prices = random.uniform(0, 10, (size, size))
        assigner, ours, theirs, apart = Assigner(), [], [], 0.0
        for _ in range(instances):
            prices = prices + random.uniform(-0.1, 0.1, prices.shape)
            problem = replace(problem)
            start = time.perf_counter()
            found = assigner.assign(problem, prices)
            middle = time.perf_counter()
            row, column = linear_sum_assignment(prices)
            theirs.append(1e3 * (time.perf_counter() - middle))
            ours.append(1e3 * (middle - start))
            best = prices[row, column].sum()
            apart = max(apart, abs(found.cost - best) / best)
            problem = replace(problem, previous=found.task)
        first = timed(lambda: assign(replace(problem), prices))  # noqa: B023
        rows.append(
            {
                "robots × tasks": f"{size} × {size}",
                "assignment ms": np.median(ours),
                "linear_sum_assignment ms": np.median(theirs),
                "ratio": np.median(np.divide(ours, theirs)),
                "first of its kind ms": first,
                "apart (relative)": apart,
            }
        )
    return rows


def mixed_needs(instances: int = 20, longest: float = 90.0) -> Rows:
    """(d) Head counts and amounts, period after period: against cold scipy.optimize.milp."""
    rows = []
    for kind in ("heads", "mixed", "graded"):
        taken = _consecutive(farm(100, 40, kind), instances)
        assigner, ours, theirs, apart, ways = Assigner(), [], [], [], 0
        begun = time.perf_counter()
        for problem, prices in taken:
            start = time.perf_counter()
            found = assigner.assign(problem, prices)
            middle = time.perf_counter()
            reference = assign_with_milp(problem, prices)
            theirs.append(1e3 * (time.perf_counter() - middle))
            ours.append(1e3 * (middle - start))
            apart.append(abs(found.cost - reference.cost) / max(abs(reference.cost), 1e-9))
            ways += found.proven
            if time.perf_counter() - begun > longest / 3:
                break
        rows.append(
            {
                "100 × 40": kind,
                "instances": len(ours),
                "proven": ways,
                "assignment ms": np.median(ours),
                "milp, cold ms": np.median(theirs),
                "times faster": np.median(np.divide(theirs, ours)),
                "apart (relative)": max(apart),
            }
        )
    return rows


def _consecutive(team: Any, count: int) -> list[tuple]:
    """Give the assignment problems of consecutive periods, with their prices."""

    class Listening(Assigner):
        def assign(self, problem, prices):  # noqa: ANN001, ANN202
            taken.append((problem, prices))
            return super().assign(problem, prices)

    taken: list[tuple] = []
    allocator = Allocator(team)
    allocator.assigner = Listening()
    for _ in at_work(allocator, count):
        pass
    return taken


def growth(steps: Rows) -> Rows:
    """(e) The exponents x of time ~ (robots · tasks)^x, from the median times of (b)."""
    rows = []
    for kind in ("heads", "graded"):
        pairs = np.log([n * m for n, m, _ in SIZES])
        mine = [row for row in steps if row["needs"] == kind]
        names = [*(f"{part} ms" for part in PARTS), "step p50 ms"]
        rows.append(
            {"needs": kind}
            | {
                name.removesuffix(" ms"): np.polyfit(pairs, np.log([r[name] for r in mine]), 1)[0]
                for name in names
            }
        )
    return rows


def memory() -> Rows:
    """(f) Peak memory of a process of its own that runs 20 periods."""
    rows = []
    for robots, tasks in ((0, 0), *((n, m) for n, m, _ in SIZES)):
        said = subprocess.run(
            [sys.executable, __file__, "--memory", str(robots), str(tasks)],
            capture_output=True, text=True, check=True,
        )  # fmt: skip
        rows.append(
            {
                "robots × tasks": f"{robots} × {tasks}" if robots else "imports alone",
                "peak MB": float(said.stdout.split()[-1]),
            }
        )
    return rows


def _peak(robots: int, tasks: int) -> float:
    if robots:
        allocator = Allocator(farm(robots, tasks), budget=BUDGET)
        for _ in at_work(allocator, 20):
            pass
        allocator.close()
    # Not getrusage: its peak is inherited from the process that started this one.
    status = Path("/proc/self/status").read_text()
    return int(re.search(r"VmHWM:\s+(\d+)", status).group(1)) / 1024


def show(console: Console, title: str, rows: Rows) -> None:
    """Print one part of the table."""
    table = Table(title=title, title_justify="left", title_style="bold")
    for name in rows[0]:
        table.add_column(name, justify="right")
    for row in rows:
        table.add_row(*(_said(value) for value in row.values()))
    console.print(table)


def _said(value: Any) -> str:
    if not isinstance(value, float):
        return str(value)
    return "–" if np.isnan(value) else f"{value:.3g}" if abs(value) < 100 else f"{value:.0f}"


def main() -> None:
    """Run every part."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", type=Path, help="write the figures there too")
    parser.add_argument("--memory", type=int, nargs=2, help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.memory:
        print(_peak(*options.memory))
        return
    console = Console(width=None if sys.stdout.isatty() else 160)
    console.print(
        f"{os.cpu_count()} cores, load {os.getloadavg()[0]:.1f} before; median times unless said"
    )
    begun, results = time.perf_counter(), {}
    for title, run in (
        ("(a) a decision and the undivided statement", against_the_statement),
        (STEPS, whole_step),
        ("(c) safe control and the solvers alone", control_and_solvers),
        ("(d) one to one", one_to_one),
        ("(d) consecutive periods, to the proven optimum", mixed_needs),
        ("(e) exponent of time over robots · tasks", lambda: growth(results[STEPS])),
        ("(f) peak memory", memory),
    ):
        results[title] = run()
        show(console, title, results[title])
    console.print(f"{time.perf_counter() - begun:.0f} s in all, load {os.getloadavg()[0]:.1f} now")
    if options.json:
        options.json.write_text(json.dumps(results, indent=1, default=float))


if __name__ == "__main__":
    main()
