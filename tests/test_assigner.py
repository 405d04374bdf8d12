"""The assignment from period to period: as good as solved afresh, honest about its gap.

The whole campaign: python3 -m pytest tests/test_assigner.py --whole
"""

import time
from dataclasses import replace

import numpy as np
import pytest
from builders import Crew, random_problem, robot, team_of, watch

from allocator_node.program import Assigner, Problem, assign, price
from allocator_node.program.assigner import LONGEST_SEARCH
from allocator_node.program.assignment import evaluate
from allocator_node.program.highs import Limit, SearchFailed
from allocator_node.program.integers import Integers
from allocator_node.program.repair import repair


def periods(seed: int, count: int = 6):
    """Give a problem that drifts: prices and former tasks move, at times a robot fails."""
    random = np.random.default_rng(seed)
    problem = random_problem(random, random.integers(5, 14), random.integers(2, 6))
    for _ in range(count):
        yield problem
        problem = replace(
            problem,
            energy=problem.energy + random.normal(0, 0.2, problem.energy.shape).clip(-0.3, 0.3),
            previous=random.integers(-1, len(problem.most), len(problem.previous)),
        )
        if random.random() < 0.3:
            eligible, pinned = problem.eligible.copy(), problem.pinned.copy()
            failed = random.integers(len(eligible))
            eligible[failed], pinned[failed] = False, -1
            problem = replace(problem, eligible=eligible, pinned=pinned)


@pytest.mark.campaign(slice=25, whole=300)
def test_what_is_kept_between_periods_changes_no_optimum(seed):
    assigner = Assigner()
    for problem in periods(seed):
        prices = price(problem)
        kept, afresh = assigner.assign(problem, prices), assign(problem, prices)
        np.testing.assert_allclose(kept.shortfall, afresh.shortfall, atol=1e-6)
        assert kept.cost == pytest.approx(afresh.cost, rel=1e-6, abs=1e-9)
        assert kept.proven


@pytest.mark.campaign(slice=15, whole=200)
def test_the_gap_bounds_the_distance_from_the_optimum(seed):
    """With no time in the loop at all, everything is searched beside it."""
    assigner = Assigner(budget=-1.0)
    try:
        for problem in periods(seed):
            prices = price(problem)
            found, best = assigner.assign(problem, prices), assign(problem, prices)
            apart = found.shortfall - best.shortfall
            first = np.flatnonzero(np.abs(apart) > 1e-6)
            assert not len(first) or apart[first[0]] > 0
            if np.isfinite(found.gap):
                assert not len(first)
                assert found.cost - found.gap <= best.cost + 1e-6
    finally:
        assigner.close()


def hard(seed: int = 1) -> Problem:
    """Give a program whose proof takes a while: odd amounts of one capability, dear swaps."""
    random = np.random.default_rng(seed)
    robots, tasks = 60, 12
    problem = random_problem(random, robots, tasks)
    return replace(
        problem,
        capability=random.uniform(0.2, 1.0, (robots, 3)),
        needs=random.uniform(1.0, 2.0, (tasks, 3)),
        least=np.ones(tasks, int),
        most=np.full(tasks, 5),
        energy=random.uniform(1, 1.1, (robots, tasks)),
    )


def test_the_loop_does_not_wait_and_closing_ends_the_search():
    problem = hard()
    prices = price(problem)
    assigner = Assigner(budget=0.0)
    found = assigner.assign(problem, prices)
    assert not found.proven and found.gap == np.inf
    mended = evaluate(problem, prices, repair(problem, prices, problem.previous))
    np.testing.assert_array_equal(found.task, mended.task)
    begun = time.perf_counter()
    assigner.close()
    assert time.perf_counter() - begun < LONGEST_SEARCH / 2


def test_a_search_that_is_stopped_says_so():
    problem = hard()
    with pytest.raises(SearchFailed):
        Integers(problem).solve(price(problem), limit=Limit(stop=lambda: True))


def test_the_proof_is_taken_up_once_it_is_there():
    for problem in periods(3, 1):
        prices = price(problem)
        best = assign(problem, prices)
        assigner = Assigner(budget=-1.0)
        assert assigner.assign(problem, prices).gap == np.inf
        assigner.wait()
        found = assigner.assign(problem, prices)
        assert found.proven and found.gap == 0.0
        assert found.cost == pytest.approx(best.cost, rel=1e-6)
        assigner.close()


def test_nothing_is_taken_up_from_another_task_table():
    """Tasks are removed while a search is under way, and after its proof was taken up."""
    for taken_up in (False, True):
        parts = ("camera", "gimbal")
        robots = [robot(f"r{i}", i, 0, features=parts[: 1 + i % 2]) for i in range(6)]
        tasks = [watch(f"t{m}", 5 * m, 9, most=4, needs={"scan": 1.2}) for m in range(3)]
        crew = Crew(team_of(robots, tasks))
        crew.allocator.assigner.budget = -1.0
        for _ in range(3 if taken_up else 1):
            crew.step()
            if taken_up:
                crew.allocator.assigner.wait()
        kept = {"t0": tasks[0]}
        crew.allocator.edit(crew.allocator.team.with_tasks(kept), crew.now)
        for _ in range(3):
            decision = crew.step()
            crew.allocator.assigner.wait()
            assert decision.tasks == ("t0",) and decision.assignment.max() < 1
        crew.allocator.close()


def test_a_search_nobody_waits_for_any_more_is_over_all_the_same():
    """Its graded task is switched off while it goes on; what is left is head counts."""
    parts = ("camera", "gimbal")
    robots = [robot(f"r{i}", i, 0, features=parts[: 1 + i % 2]) for i in range(4)]
    graded = watch("graded", 5, 9, most=4, needs={"scan": 1.2})
    crew = Crew(team_of(robots, [graded, watch("plain", 9, 9)]))
    crew.allocator.assigner.budget = -1.0
    crew.step()
    assert crew.allocator.assigner.searching
    crew.edit(replace(graded, active=False))
    crew.allocator.assigner.wait()
    crew.step()
    assert not crew.allocator.assigner.searching
    crew.allocator.close()


def test_a_robot_that_fails_is_replaced_in_the_same_period():
    problem = hard()
    assigner = Assigner(budget=-1.0)
    first = assigner.assign(problem, price(problem))
    failed = int(np.flatnonzero(first.task >= 0)[0])
    eligible = problem.eligible.copy()
    eligible[failed] = False
    after = replace(problem, eligible=eligible, previous=first.task)
    second = assigner.assign(after, price(after))
    assert second.task[failed] == -1
    assert second.shortfall.sum() <= first.shortfall.sum() + 1e-9
    assigner.close()


def test_levels_are_served_in_order_where_no_weights_can_hold_them_apart():
    """80 tasks of one robot each on five levels, 60 robots: by hand, the lowest 20 lack one."""
    random = np.random.default_rng(0)
    robots, tasks = 60, 80
    problem = replace(
        random_problem(random, robots, tasks),
        needs=np.zeros((tasks, 3)),
        least=np.ones(tasks, int),
        most=np.ones(tasks, int),
        eligible=np.ones((robots, tasks), bool),
        pinned=np.full(robots, -1),
        priority=np.arange(tasks) % 5,
    )
    found = assign(problem, price(problem))
    assert found.proven
    np.testing.assert_allclose(found.shortfall, [0, 0, 0, 4, 16], atol=1e-9)
