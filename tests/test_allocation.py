"""Who does what, through Allocator.step with observations made by hand.

The whole campaign: python3 -m pytest tests/test_allocation.py --whole
"""

import itertools
import json
from dataclasses import replace

import numpy as np
import pytest
from builders import (
    CAPABILITIES,
    ERROR,
    OK,
    OMNI,
    ROVER,
    WARN,
    Crew,
    doing,
    groups,
    robot,
    team_of,
    watch,
)

from allocator_node import allocator
from allocator_node.decision import Decision, Level
from allocator_node.drives import Aerial, Differential, Holonomic
from allocator_node.observation import MovedGoal
from allocator_node.program import Problem, price
from allocator_node.program.assignment import evaluate
from allocator_node.settings import Settings
from allocator_node.tasks import Patrol, Visit
from allocator_node.team import Battery, HeadCount, Robot, Way

# -- seven robots along a fence ------------------------------------------------------

ABLE_FOR_ALL = ("fence_1", "fence_5")


def fence() -> Crew:
    """Seven robots 4 m apart along a fence; three places to watch on its other side.

    Five have only a camera, which serves the first place. Two have tracks too; only
    they can do the second and third. fence_1 stands nearest to the first place.
    """
    robots = [
        robot(
            f"fence_{i}", 4.0 * i, 0.0,
            features=("camera", "tracks") if f"fence_{i}" in ABLE_FOR_ALL else ("camera",),
        )
        for i in range(7)
    ]  # fmt: skip
    return Crew(
        team_of(
            robots,
            [
                watch("near", 4.5, 6.0, each=("scan",)),
                watch("middle", 14.0, 10.0, each=("rough",)),
                watch("far", 30.0, 10.0, each=("rough",)),
            ],
        )
    )


def test_cheapest_able_robots_are_recruited_and_the_others_stand():
    """fence_1 is nearest to the first place, but needed for one only it and fence_5 can do."""
    crew = fence()
    decision = crew.step()
    assert groups(decision) == {
        "near": ("fence_2",), "middle": ("fence_1",), "far": ("fence_5",)
    }  # fmt: skip
    idle = decision.assignment < 0
    assert idle.sum() == 4
    assert not decision.commands[idle].any()
    assert np.abs(decision.commands[~idle]).max(axis=1).min() > 0.1
    assert decision.shortfalls == ()


def test_without_the_later_tasks_the_nearest_would_go():
    crew = fence()
    tasks = crew.team.tasks
    crew.edit(*(replace(tasks[name], active=False) for name in ("middle", "far")))
    assert groups(crew.step())["near"] == ("fence_1",)


def test_one_more_head_means_one_more_robot_and_nothing_else():
    crew = fence()
    before = doing(crew.step())
    near = crew.allocator.team.tasks["near"]
    crew.edit(replace(near, robots=HeadCount(2, 2)))
    crew.log.clear()
    after = doing(crew.step())
    changed = {name for name in before if before[name] != after[name]}
    assert len(changed) == 1
    (joined,) = changed
    assert before[joined] is None and after[joined] == "near"
    assert [change.task for change in crew.log] == ["near"]


def test_spare_robots_stay_where_they_are_for_minutes():
    crew = fence()
    start = crew.poses.copy()
    decision = crew.drive(120)
    idle = decision.assignment < 0
    np.testing.assert_array_equal(crew.poses[idle], start[idle])
    assert len(crew.log) == 3
    away = np.linalg.norm((decision.goals - crew.poses[:, :3])[~idle, :2], axis=1)
    assert away.max() < 0.5


def amounts(random: np.random.Generator) -> Crew:
    """Seven robots with cameras of unlike grades, and a scan that takes an amount of them."""
    capabilities = {
        "scan": tuple(Way((f"camera_{g}",), g / 10) for g in (10, 7, 4)),
    }
    robots = [
        robot(
            f"robot_{i}", *random.uniform(0, 30, 2),
            features=(f"camera_{random.choice([10, 7, 4])}",),
            battery=Battery(drive_w=random.uniform(50, 300)),
        )
        for i in range(7)
    ]  # fmt: skip
    needs = {"scan": float(random.choice([1.0, 1.7, 2.1]))}
    tasks = [watch("rows", 15.0, 15.0, count=0, most=7, needs=needs)]
    return Crew(team_of(robots, tasks, capabilities=capabilities))


@pytest.mark.parametrize("seed", range(10))
def test_an_amount_is_met_by_the_group_that_costs_least(seed, monkeypatch):
    """Against every one of the 2⁷ groups."""
    crew = amounts(np.random.default_rng(seed))
    problem, prices, decision = program_of(crew, monkeypatch)
    groups = [np.array(group) for group in itertools.product([-1, 0], repeat=7)]
    enough = [g for g in groups if problem.capability[g == 0].sum() >= problem.needs[0, 0] - 1e-9]
    best = min(enough, key=lambda group: prices[group == 0].sum())
    np.testing.assert_array_equal(decision.assignment, best)


def program_of(crew: Crew, monkeypatch) -> tuple[Problem, np.ndarray, Decision]:
    """Step once; give the period's program, its prices and the decision."""
    seen = []

    def watched(problem):
        seen.append(problem)
        return price(problem)

    monkeypatch.setattr(allocator, "price", watched)
    decision = crew.step()
    return seen[-1], price(seen[-1]), decision


# -- who is able ---------------------------------------------------------------------


def test_the_better_way_counts_and_falls_back_to_the_lesser():
    """0.6 without the gimbal: two robots where one did before."""
    tasks = [watch("rows", 5, 0, count=1, most=2, needs={"scan": 1.0})]
    crew = Crew(team_of([robot("one", 1, 0), robot("two", -20, 0, features=("camera",))], tasks))
    assert groups(crew.step())["rows"] == ("one",)
    crew.says("one: gimbal", ERROR)
    decision = crew.step()
    assert groups(decision)["rows"] == ("one", "two")
    np.testing.assert_allclose(decision.suitability[:, 0], [0.6, 0.6])
    assert decision.shortfalls == ()


def test_a_warning_counts_half_and_is_named_where_it_leaves_a_need_open():
    tasks = [watch("rows", 5, 0, needs={"scan": 1.0})]
    crew = Crew(team_of([robot("one")], tasks), Settings(warn_health=0.5))
    crew.says("one: camera", WARN)
    decision = crew.step()
    assert decision.suitability[0, 0] == 0.5
    assert [str(s) for s in decision.shortfalls] == ["rows lacks 0.5 of scan"]
    assert doing(decision)["one"] == "rows"


def test_every_member_must_have_what_each_demands():
    tasks = [watch("bog", 5, 0, count=2, each=("rough",))]
    robots = [robot("wheels", 4, 0), robot("tracks", -9, 0, features=("tracks",))]
    decision = Crew(team_of(robots, tasks)).step()
    assert groups(decision)["bog"] == ("tracks",)
    assert [str(s) for s in decision.shortfalls] == ["bog lacks 1 robot"]


def test_a_robot_that_contributes_nothing_does_not_fill_the_heads():
    tasks = [watch("rows", 5, 0, count=2, needs={"scan": 1.0})]
    robots = [robot("one", 1, 0), robot("blind", 4, 0, features=("tracks",))]
    assert groups(Crew(team_of(robots, tasks)).step())["rows"] == ("one",)


def test_pins_and_bans():
    tasks = [watch("gate", 10, 0), watch("yard", -10, 0)]
    crew = Crew(team_of([robot("one", 9, 0), robot("two", -9, 0), robot("three", 30, 0)], tasks))
    assert doing(crew.step()) == {"one": "gate", "two": "yard", "three": None}
    crew.order(pins=frozenset({("one", "yard")}))
    assert doing(crew.step()) == {"one": "yard", "two": "gate", "three": None}
    crew.order(pins=frozenset(), bans=frozenset({("one", "gate"), ("one", "yard")}))
    decision = crew.step()
    assert decision.task_of(0) is None
    assert not decision.commands[0].any()
    assert all(groups(decision).values())


def test_a_pin_a_robot_cannot_meet_is_passed_over():
    tasks = [watch("bog", 5, 0, each=("rough",)), watch("gate", 10, 0)]
    robots = [robot("one", 0, 0), robot("tracks", 30, 0, features=("tracks",))]
    crew = Crew(team_of(robots, tasks))
    crew.order(pins=frozenset({("one", "bog"), ("nobody", "gate"), ("one", "nowhere")}))
    assert doing(crew.step()) == {"one": "gate", "tracks": "bog"}


def test_more_pins_than_a_task_takes_are_still_obeyed():
    crew = Crew(team_of([robot("one"), robot("two")], [watch("gate", 10, 0)]))
    crew.order(pins=frozenset({("one", "gate"), ("two", "gate")}))
    assert groups(crew.step())["gate"] == ("one", "two")


def test_a_robot_that_could_not_come_home_is_not_sent():
    """10 Wh above the reserve; out and home are 2 · 100 m at 120 W and 1 m/s: 6.7 Wh."""
    battery = Battery(capacity_wh=100, reserve=0.2, idle_w=20, drive_w=100)
    robots = [robot("one", 0, 0, battery=battery, dock=(0, 0))]
    crew = Crew(team_of(robots, [watch("gate", 100, 0)]))
    crew.charges[0] = 0.30
    assert doing(crew.step())["one"] == "gate"
    crew.charges[0] = 0.26
    decision = crew.step()
    assert doing(decision)["one"] is None
    assert [str(s) for s in decision.shortfalls] == ["gate lacks 1 robot"]
    assert any("energy" in notice.text for notice in decision.notices)


def test_a_robot_that_was_never_heard_is_not_sent():
    crew = Crew(team_of([robot("one", 9, 0), robot("two", -30, 0)], [watch("gate", 10, 0)]))
    crew.silent.add("one")
    decision = crew.step()
    assert doing(decision) == {"one": None, "two": "gate"}
    assert [(n.about, n.level, n.text) for n in decision.notices] == [
        ("one", Level.WARN, "never heard")
    ]


# -- tasks that end, wait and change -------------------------------------------------


def visit(name: str, *at: float, count: int = 1, **more) -> Visit:
    return Visit(name=name, at=at, robots=HeadCount(count, count), **more)


def test_a_finished_visit_releases_its_robots_and_lets_others_begin():
    tasks = [visit("sample", 3, 0, dwell=1.0), watch("gate", 6, 0, after=("sample",))]
    crew = Crew(team_of([robot("one")], tasks))
    decision = crew.step()
    assert doing(decision)["one"] == "sample"
    assert decision.shortfalls == (), "a task that waits lacks nothing"
    decision = crew.drive(20)
    assert decision.finished == {"sample"}
    assert doing(decision)["one"] == "gate"


def test_a_finished_visit_leaves_its_robot_standing_where_there_is_nothing_else():
    crew = Crew(team_of([robot("one")], [visit("sample", 2, 0)]))
    decision = crew.drive(10)
    assert doing(decision)["one"] is None
    assert not decision.commands.any()


def test_a_visit_takes_the_whole_group_to_finish():
    tasks = [visit("lift", 5, 0, count=2)]
    crew = Crew(team_of([robot("one", 5, 0), robot("two", 20, 0)], tasks))
    assert not crew.drive(3).finished
    assert crew.drive(25).finished


def test_a_task_switched_off_frees_its_robot():
    crew = Crew(team_of([robot("one")], [watch("gate", 10, 0)]))
    crew.step()
    crew.edit(replace(crew.team.tasks["gate"], active=False))
    decision = crew.step()
    assert doing(decision)["one"] is None and decision.shortfalls == ()


def test_a_moved_goal_is_driven_to():
    crew = Crew(team_of([robot("one", 0, 0)], [watch("gate", 10, 0)]))
    assert crew.step().commands[0, 0] > 0.5
    crew.goals.append(MovedGoal("gate", (-10.0, 0.0, 0.0)))
    decision = crew.step()
    np.testing.assert_allclose(decision.goals[0, :2], [-10, 0])
    assert decision.commands[0, 0] < -0.5


def test_a_moved_goal_can_change_who_goes():
    crew = Crew(team_of([robot("one", 0, 0), robot("two", 40, 0)], [watch("gate", 3, 0)]))
    assert groups(crew.step())["gate"] == ("one",)
    crew.goals.append(MovedGoal("gate", (39.0, 0.0, 0.0)))
    assert groups(crew.step())["gate"] == ("two",)


def test_a_goal_moved_for_an_unknown_task_says_nothing():
    crew = Crew(team_of([robot("one")], [watch("gate", 3, 0)]))
    crew.goals.append(MovedGoal("nowhere", (1.0, 1.0, 0.0)))
    assert doing(crew.step())["one"] == "gate"


# -- staying with a choice -----------------------------------------------------------


def test_a_small_advantage_does_not_move_a_robot():
    """Taking a robot off its task costs 3 m of driving: 2 m nearer is not enough."""
    crew = Crew(team_of([robot("one", 0, 5), robot("two", 30, 0)], [watch("gate", 0, 0)]))
    crew.step()
    crew.poses[1, :2] = 0.0, -3.0
    assert groups(crew.wait(1.0))["gate"] == ("one",)
    crew.poses[0, :2] = 0.0, 8.0
    assert groups(crew.wait(1.0))["gate"] == ("two",)


def test_noise_does_not_make_two_equals_take_turns():
    random = np.random.default_rng(0)
    crew = Crew(team_of([robot("one", 0, 5), robot("two", 0, -5)], [watch("gate", 0, 0)]))
    crew.order(driving=False)
    places = crew.poses.copy()
    for _ in range(200):
        crew.poses = places + random.normal(0, [0.2, 0.2, 0, 0.05], (2, 4))
        crew.step()
    assert len(crew.log) == 1


def test_hold_stops_everybody_and_learns_nothing():
    crew = Crew(team_of([robot("one"), robot("two", 0, 9)], [watch("gate", 30, 0)]))
    assert crew.step().commands.any()
    crew.order(hold=True)
    for _ in range(300):
        decision = crew.step()
        assert not decision.commands.any()
    assert doing(decision)["one"] == "gate"
    np.testing.assert_array_equal(decision.efficacy, np.ones((2, 1)))
    crew.order(hold=False)
    assert crew.step().commands.any()


def test_a_task_edit_keeps_what_was_learned_and_done():
    tasks = [watch("gate", 30, 0), visit("sample", 1, 0), watch("yard", 0, 30)]
    crew = Crew(team_of([robot("one"), robot("two", 5, 5)], tasks))
    crew.drive(5)
    for _ in range(4):
        crew.quality[("one", "gate")] = 0.5
        crew.step()
    before = crew.step()
    m = before.tasks.index("gate")
    team = crew.allocator.team
    table = {"extra": watch("extra", 50, 0)} | dict(reversed(team.tasks.items()))
    table.pop("yard")
    crew.allocator.edit(team.with_tasks(table), crew.now)
    after = crew.step()
    assert after.tasks == ("extra", "sample", "gate")
    assert after.finished == {"sample"}
    assert after.efficacy[0, 2] == pytest.approx(before.efficacy[0, m], abs=0.02)
    assert after.efficacy[0, 2] < 0.7
    np.testing.assert_array_equal(after.efficacy[:, :2], np.ones((2, 2)))


def test_what_was_learned_and_done_survives_a_restart():
    tasks = [watch("gate", 30, 0), visit("sample", 1, 0), watch("yard", 0, 30)]
    team = team_of([robot("one"), robot("two", 5, 5)], tasks)
    crew = Crew(team)
    crew.drive(5)
    for _ in range(4):
        crew.quality[("one", "gate")] = 0.5
        crew.step()
    before = crew.step()
    memory = json.loads(json.dumps(crew.allocator.memory()))
    again = Crew(team)
    again.poses[:] = crew.poses
    again.allocator.recall(memory)
    after = again.step()
    np.testing.assert_allclose(after.efficacy, before.efficacy, atol=1e-3)
    np.testing.assert_array_equal(after.assignment, before.assignment)
    assert after.finished == {"sample"}
    assert again.log == [], "what goes on is no change"


def test_a_restart_does_not_take_broken_or_empty_robots_for_good_ones():
    """Diagnostics and charges come again only after a while; until then the last ones hold."""
    near = Battery(capacity_wh=500)
    robots = [robot("broken", 20, 0), robot("empty", 20, 5, battery=near), robot("far")]
    crew = Crew(team_of(robots, [watch("gate", 30, 0, needs={"scan": 1.0})]))
    crew.says("broken: camera", ERROR, "no picture")
    crew.charges = np.array([0.9, 0.1, 0.9])
    assert groups(crew.step())["gate"] == ("far",)
    again = Crew(crew.allocator.team)
    again.allocator.recall(json.loads(json.dumps(crew.allocator.memory())))
    again.order(driving=False)
    assert groups(again.wait(20.0))["gate"] == ("far",)
    assert again.log == []
    again.says("broken: camera", OK)
    again.charges[:] = 0.9
    again.wait(1.0)
    again.says("broken: camera", OK)
    assert groups(again.wait(1.0))["gate"] == ("broken",)


def test_after_a_restart_a_silent_robot_is_still_in_the_way():
    """It may be heard never again; whoever drives through its last place would hit it."""
    robots = [robot("driver", 0, 0), robot("silent", 8, 0, features=())]
    team = team_of(robots, [watch("gate", 16, 0, needs={"scan": 1.0})])
    crew = Crew(team)
    crew.wait(0.2)
    crew.silent.add("silent")
    again = Crew(team)
    again.silent.add("silent")
    again.allocator.recall(json.loads(json.dumps(crew.allocator.memory())))
    for _ in range(400):
        decision = again.drive(0.1)
        assert np.linalg.norm(again.poses[0, :2] - [8, 0]) > 0.8
    assert {n.text for n in decision.notices if n.about == "silent"} == {"never heard"}


def test_a_memory_of_another_team_is_passed_over():
    crew = Crew(team_of([robot("one")], [watch("gate", 3, 0)]))
    learned = {"robot": "stranger", "task": "gate", "value": 0.1, "failures": 1, "barred": True}
    crew.allocator.recall(
        {"efficacy": [learned], "finished": ["gone"], "assignment": {"one": "gone"}}
    )
    assert doing(crew.step())["one"] == "gate"


@pytest.mark.parametrize(
    "memory", [{}, [], None, {"efficacy": 1, "finished": [], "assignment": {}},
               {"efficacy": [{"robot": "one"}], "finished": [], "assignment": {}}]
)  # fmt: skip
def test_what_is_no_memory_is_refused(memory):
    crew = Crew(team_of([robot("one")], [watch("gate", 3, 0)]))
    with pytest.raises(ValueError, match="memory"):
        crew.allocator.recall(memory)


# -- never infeasible ----------------------------------------------------------------


def random_crew(random: np.random.Generator) -> Crew:
    """Give a team that cannot meet all it is asked for: more heads than robots."""
    features = ("camera", "gimbal", "tracks", "rotors")
    drives = (OMNI, ROVER, Differential(max_speed=2.0), Aerial(max_speed=3.0, height=(4.0, 8.0)))
    robots = [
        Robot(
            f"robot_{i}",
            drives[random.integers(4)],
            features=tuple(f for f in features if random.random() < 0.6),
            battery=Battery(capacity_wh=random.uniform(20, 500)),
            start=(*random.uniform(0, 40, 2), random.uniform(-3, 3)),
        )
        for i in range(random.integers(1, 7))
    ]
    tasks, heads = [], 0
    while heads <= len(robots):
        name, least = f"task_{len(tasks)}", int(random.integers(0, 4))
        heads += least
        common = {
            "name": name,
            "needs": {k: random.uniform(0.3, 2) for k in CAPABILITIES if random.random() < 0.4},
            "each": tuple(k for k in CAPABILITIES if random.random() < 0.15),
            "robots": HeadCount(least, max(1, least + int(random.integers(0, 2)))),
            "priority": int(random.integers(0, 5)),
        }
        at = tuple(random.uniform(0, 40, 2))
        if random.random() < 0.3:
            tasks.append(Patrol(waypoints=(at, tuple(random.uniform(0, 40, 2))), **common))
        else:
            tasks.append(Visit(at=at, **common))
    crew = Crew(team_of(robots, tasks))
    crew.charges[:] = random.uniform(0.1, 1.0, len(robots))
    for r in robots:
        for feature in r.features:
            if random.random() < 0.2:
                crew.says(f"{r.name}: {feature}", int(random.choice([OK, WARN, ERROR])))
    if random.random() < 0.3:
        crew.silent.add(robots[0].name)
    return crew


@pytest.mark.campaign(slice=60, whole=500)
def test_there_is_always_a_decision_and_higher_priorities_come_first(seed, monkeypatch):
    """Against every assignment, compared level by level; what is lacking is named."""
    crew = random_crew(np.random.default_rng(seed))
    problem, prices, decision = program_of(crew, monkeypatch)
    robots, tasks = prices.shape
    found = evaluate(problem, prices, decision.assignment, proven=True)

    choices = [[-1, *np.flatnonzero(problem.eligible[i])] for i in range(robots)]
    if np.prod([len(choice) for choice in choices]) <= 1000:
        every = [np.array(task) for task in itertools.product(*choices)]
        heads = [np.bincount(task[task >= 0], minlength=tasks) for task in every]
        levels = [
            tuple(evaluate(problem, prices, task, True).shortfall.round(7))
            for task, count in zip(every, heads, strict=True)
            if (count <= problem.most).all()
        ]
        assert tuple(found.shortfall.round(7)) == min(levels)

    named = {(s.task, s.capability): s.missing for s in decision.shortfalls}
    for m, task in enumerate(crew.team.tasks.values()):
        members = decision.assignment == m
        brought = dict(zip(CAPABILITIES, problem.capability[members].sum(axis=0), strict=True))
        lacking = {None: task.robots.min - members.sum()} | {
            name: amount - brought[name] for name, amount in task.needs.items()
        }
        for what, missing in lacking.items():
            assert named.get((task.name, what), 0.0) == pytest.approx(max(missing, 0), abs=1e-6)
    assert decision.shortfalls, "these teams cannot meet all they are asked for"

    for _ in range(5):
        decision = crew.drive(0.2)
        assert np.isfinite(decision.commands).all()


def test_lower_priorities_are_left_uncovered_first():
    tasks = [watch(f"task_{q}", 10.0 * q + 1, 0, priority=q) for q in range(5)]
    crew = Crew(team_of([robot("one"), robot("two")], tasks))
    decision = crew.step()
    assert sorted(filter(None, doing(decision).values())) == ["task_3", "task_4"]
    assert [s.task for s in decision.shortfalls] == ["task_0", "task_1", "task_2"]


def test_no_saving_buys_a_shortfall():
    """A kilometre for the important task, though the other is next door."""
    tasks = [watch("next_door", 1, 0, priority=1), watch("far", 1000, 0, priority=2)]
    assert doing(Crew(team_of([robot("one")], tasks)).step())["one"] == "far"


def test_nobody_and_nothing():
    assert Crew(team_of([robot("one")], [])).step().assignment.tolist() == [-1]
    crew = Crew(team_of([robot("one")], [watch("gate", 1, 0)]))
    crew.silent.add("one")
    assert [str(s) for s in crew.step().shortfalls] == ["gate lacks 1 robot"]


def test_commands_stay_within_the_drives_limits():
    random = np.random.default_rng(6)
    drives = (ROVER, Holonomic(max_speed=0.7), Aerial(max_speed=3.0))
    robots = [
        robot(f"r{i}", *random.uniform(0, 30, 2), random.uniform(-3, 3), drive=drives[i % 3])
        for i in range(9)
    ]
    tasks = [watch(f"t{m}", *random.uniform(0, 30, 2), face=(0, 0)) for m in range(9)]
    crew = Crew(team_of(robots, tasks))
    limits = np.array([r.drive.limits() for r in robots])
    for _ in range(40):
        commands = crew.drive(0.5).commands
        assert (np.abs(commands) <= limits + 1e-9).all()
        assert (np.linalg.norm(commands[:, :2], axis=1) <= limits[:, 0] + 1e-9).all()
