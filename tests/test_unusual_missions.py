"""Missions a real site could ask for, each of which once went wrong."""

from __future__ import annotations

import json
from collections import Counter
from dataclasses import replace

import numpy as np
import pytest
from builders import ERROR, OK, ROVER, Crew, doing, robot, team_of, watch

from allocator_node.drives import Aerial, Differential
from allocator_node.model import Model
from allocator_node.observation import MovedGoal
from allocator_node.program import Safety
from allocator_node.settings import Settings
from allocator_node.sim.rehearsal import rehearse
from allocator_node.tasks import Encircle, Follow, Patrol, Sweep, Task, Visit
from allocator_node.team import Battery, HeadCount, HealthRule, KeepOut, Target

FENCED = {"boundary": ((0, 0), (40, 0), (40, 12), (0, 12))}
MOWER = {"features": ("camera",), "drive": ROVER}
TESTER = {"features": ("tracks",), "drive": ROVER}


def test_one_that_stands_by_the_fence_is_passed_on_its_other_side() -> None:
    """The agreed right-hand side is a wall: turned that way for ever, nobody gets by."""
    team = team_of(
        [robot("rover", 2, 1.5, **TESTER), robot("mower", 12, 1.5, **MOWER)],
        [watch("far", 35, 1.5, each=("rough",)), watch("here", 12, 1.5, each=("scan",))],
        **FENCED,
    )
    crew = Crew(team)
    crew.drive(60)
    assert np.hypot(*(crew.poses[0, :2] - (35, 1.5))) < 1.0


def test_a_robot_with_its_way_free_again_goes_on() -> None:
    team = team_of(
        [robot("rover", 2, 1.0, **TESTER), robot("mower", 12, 1.0, **MOWER)],
        [watch("far", 35, 1.0, each=("rough",)), watch("here", 12, 1.0, each=("scan",))],
        **FENCED,
    )
    crew = Crew(team)
    crew.drive(20)
    crew.edit(watch("here", 12, 10, each=("scan",)))
    crew.drive(60)
    assert np.hypot(*(crew.poses[0, :2] - (35, 1.0))) < 1.0


def test_two_visits_to_the_side_of_a_fast_robot_do_not_take_turns() -> None:
    """What each turn makes cheaper is the other one; 1200 changes in two minutes, once."""
    fast = Differential(max_speed=2.0)
    visits = [
        Visit(name="ahead", at=(9.4, 28.9), dwell=1, urgency=50),
        Visit(name="behind", at=(27.5, 28.6), dwell=1),
    ]
    crew = Crew(team_of([robot("r", 25.4, 31.03, -2.56, drive=fast)], visits))
    assert crew.drive(40).finished == {"ahead", "behind"}
    assert len(crew.log) < 10


@pytest.mark.parametrize("speed", [0.05, 0.1, 0.2, 1.0])
def test_slow_robots_use_the_speed_they_have(speed: float) -> None:
    """Within 3% of the speed, whatever it is: by hand, 100 of the objective's 101 parts."""
    crew = Crew(team_of([robot("slow", drive=Differential(max_speed=speed))],
                        [watch("far", 50, 0)]))  # fmt: skip
    assert crew.step().commands[0, 0] == pytest.approx(speed, rel=0.03)


def test_a_ring_around_a_finished_task_lets_its_robots_go() -> None:
    ring = Encircle(name="ring", around=Target(task="sample"), radius=3.0, priority=4,
                    robots=HeadCount(2, 2))  # fmt: skip
    sample = Visit(name="sample", at=(3, 0), each=("rough",))
    gate = watch("gate", 0, 9, count=1)
    robots = [robot("a", 0, 5), robot("b", 6, 5), robot("tester", 2, 0, **TESTER)]
    crew = Crew(team_of(robots, [sample, ring, gate]))
    assert Counter(doing(crew.step()).values())["ring"] == 2
    decision = crew.drive(20)
    assert decision.finished == {"sample"}
    assert Counter(doing(decision).values()) == {"gate": 1, None: 2}
    (end,) = (change for change in crew.log if change.task == "ring" and not change.after)
    assert end.detail == "sample, which ring keeps to, is over"
    assert not decision.shortfalls


def test_a_task_behind_a_wall_is_named_and_nobody_is_short_of_energy() -> None:
    wall = KeepOut("wall", ((20, -1), (21, -1), (21, 13), (20, 13)))
    crew = Crew(team_of([robot("r", 5, 6)], [watch("far", 30, 6)], **FENCED, keep_out=(wall,)))
    crew.charges[:] = 1.0
    decision = crew.step()
    assert {(n.about, n.text) for n in decision.notices} == {
        ("far", "no robot that could do it finds a way there")
    }
    assert doing(decision) == {"r": None}


def test_a_robot_goes_to_its_dock_while_it_can_still_reach_it() -> None:
    """The dock is 2 m away behind a fence, and 110 m to drive."""
    fence = KeepOut("fence", ((0, 9.5), (55, 9.5), (55, 10), (0, 10)))
    small = Battery(capacity_wh=20, idle_w=50, drive_w=250, charge_w=900)
    team = team_of(
        [robot("r", 4, 6, drive=ROVER, dock=(3, 12), battery=small)],
        [Patrol(name="rounds", waypoints=((4, 3), (12, 3), (12, 7), (4, 7)))],
        boundary=((0, 0), (60, 0), (60, 20), (0, 20)),
        keep_out=(fence,),
    )
    run = rehearse(team, None, seconds=400.0)
    charges = np.array([charge for _, charge in run.charges["r"]])
    assert charges.min() >= small.reserve - 0.02, "20% of it are to be left at the dock"
    assert charges[charges.argmin():].max() > 0.5, "it is charged there"


@pytest.mark.parametrize(
    "drive, height", [(Aerial(max_speed=3.0, height=(4, 8)), 12.0), (ROVER, 6.0)]
)
def test_a_visit_is_done_at_the_height_a_robot_can_take(drive, height: float) -> None:
    crew = Crew(team_of([robot("r", drive=drive)], [Visit(name="v", at=(5, 0, height))]))
    crew.poses[0, 2] = 4.0 if isinstance(drive, Aerial) else 0.0
    assert crew.drive(20).finished == {"v"}


@pytest.mark.parametrize("rate", [2.0, 10.0])
def test_a_sweep_is_done_at_any_rate(rate: float) -> None:
    field = Sweep(name="s", area=((0, 0), (12, 0), (12, 3), (0, 3)), lane_width=1.0)
    mower = robot("m", -2, 0, drive=Differential(max_speed=1.2))
    crew = Crew(team_of([mower], [field]), period=1 / rate)
    assert crew.drive(150).finished == {"s"}


def test_robots_at_their_margin_are_no_danger_for_pose_noise() -> None:
    """Two that stand where they may, with the noise the settings expect."""
    crew = Crew(team_of([robot("a", 0, 0), robot("b", 1.4, 0)],
                        [watch("left", 0, 0), watch("right", 1.4, 0)]))  # fmt: skip
    crew.drive(5)
    random, rest = np.random.default_rng(0), crew.poses.copy()
    errors = 0
    for _ in range(300):
        crew.poses = rest + random.normal(0, 0.05, rest.shape) * [1, 1, 0, 0]
        errors += any(n.level.value == 2 for n in crew.step().notices)
    assert errors <= 6


def test_a_robot_that_cannot_get_there_is_named() -> None:
    """Its goal is nearer to the fence than its body and margin allow."""
    big = robot("big", 20, 6, radius=1.5)
    crew = Crew(team_of([big], [watch("post", 20, 0.5)], **FENCED))
    decision = crew.drive(45)
    said = {n.about: n.text for n in decision.notices}
    assert said["big"].startswith("gets no nearer to where it is to go")
    assert said["post"] == "the margins keep everyone that could do it from coming near enough"


def test_a_place_beside_the_fence_is_for_one_that_is_small_enough() -> None:
    """The big one is nearer; body 1.5 m and margin 0.3 m end 1 m short of the place."""
    robots = [robot("big", 20, 6, radius=1.5), robot("small", 2, 6, radius=0.2)]
    visit = Visit(name="post", at=(20, 0.8), tolerance=0.3, robots=HeadCount(1, 1))
    crew = Crew(team_of(robots, [visit], **FENCED))
    assert doing(crew.step()) == {"big": None, "small": "post"}
    decision = crew.drive(30)
    assert decision.finished == {"post"} and not decision.notices


def test_a_place_beside_the_fence_is_for_whoever_there_is() -> None:
    """A big one at the place as near as may be is better than nobody, and obeys a pin."""
    robots = [robot("big", 20, 6, radius=1.5), robot("small", 2, 6, radius=0.2)]
    crew = Crew(team_of(robots, [watch("post", 20, 0.8)], **FENCED))
    assert doing(crew.step())["small"] == "post"
    crew.silent.add("small")
    assert doing(crew.wait(2))["big"] == "post"
    crew.silent.clear()
    assert doing(crew.wait(2))["small"] == "post"
    crew.order(pins=frozenset({("big", "post")}))
    assert doing(crew.wait(2))["big"] == "post"


def test_a_group_stands_around_what_none_of_it_could_stand_on() -> None:
    """Two of 1 m: the place itself is too near to the fence, those beside it are not asked."""
    robots = [robot(name, x, 6, radius=1.0) for name, x in (("a", 18), ("b", 22))]
    crew = Crew(team_of(robots, [watch("post", 20, 0.5, count=2)], **FENCED))
    decision = crew.step()
    assert doing(decision) == {"a": "post", "b": "post"} and not decision.notices


def test_nobody_drives_onto_the_trail_of_a_silent_robot_from_within_its_circle() -> None:
    """It fell silent at (0, 0), told to go 4 m; its circle of 5 m covers who is at (4.5, -1.5)."""
    team = team_of([robot("me", 4.5, -1.5), robot("lost")], [])
    safety = Safety(team, Model(team), Settings())
    points = np.array([[4.5, -1.5, 0], [0, 0, 0]])
    both, heard = np.array([True, True]), np.array([True, False])
    growth, trail = np.array([0.0, 5.0]), np.array([[0.0, 0.0], [4.0, 0.0]])
    circle = safety.rows(points, both, heard, growth)
    rows = safety.rows(points, both, heard, growth, trail=trail)
    out = points[0, :2] / np.hypot(4.5, 1.5)
    along = np.zeros((2, 3))
    # Calmly out, and at 2 m/s across the end of the trail.
    along[0, :2] = 0.3 * out + 2.0 * np.array([-out[1], out[0]])
    assert (circle.slackness(along) >= -1e-9).all()
    assert rows.slackness(along).min() < -0.2
    back = np.zeros((2, 3))
    back[0, :2] = 0.5 * np.array([0.5, -1.5])
    assert (rows.slackness(back) >= -1e-9).all()


def test_a_wall_across_the_site_keeps_patrols_away_too() -> None:
    """A kind that tells how far its work is finds no way through it."""
    wall = KeepOut(name="wall", polygon=((19, -1), (21, -1), (21, 13), (19, 13)))
    patrol = Patrol(name="round", waypoints=((30, 4), (34, 4), (34, 8)))
    team = team_of([robot("a", 5, 6)], [patrol, watch("post", 30, 6)], **FENCED, keep_out=(wall,))
    decision = Crew(team).step()
    assert doing(decision) == {"a": None}
    assert {n.about for n in decision.notices if "no robot" in n.text} == {"round", "post"}


def test_a_goal_that_is_sent_again_and_again_keeps_nobody_from_learning() -> None:
    """Another task's goal, the same place in every period; the robot sits in mud."""
    robots = [robot("one", 0, 0), robot("two", -20, 5), robot("three", 0, 30)]
    crew = Crew(team_of(robots, [watch("gate", 40, 0, priority=3), watch("pond", 0, 30)]))
    crew.grip[0] = 0.0
    for _ in range(100):
        crew.goals.append(MovedGoal("pond", (0.0, 30.0, 0.0), None))
        decision = crew.drive(0.1)
    assert doing(decision)["two"] == "gate" and decision.efficacy[0, 0] < 1.0


def test_one_false_charge_takes_nobody_off_for_long() -> None:
    """A driver that restarts says 0 once."""
    crew = Crew(team_of([robot("one", 8, 0, dock=(0, 0))], [watch("gate", 10, 0)]))
    crew.charges[0] = 0.8
    assert doing(crew.drive(1)) == {"one": "gate"}
    crew.charges[0] = 0.0
    assert doing(crew.step()) == {"one": None}
    crew.charges[0] = 0.8
    assert doing(crew.drive(1)) == {"one": "gate"}


def test_a_decision_every_two_seconds_notices_a_silent_diagnostic() -> None:
    rule = HealthRule(name="one: camera", feature="camera")
    crew = Crew(team_of([robot("one", 0, 0, health=(rule,))],
                        [watch("gate", 5, 0, each=("scan",))]), period=2.0)  # fmt: skip
    crew.says("one: camera", OK)
    assert doing(crew.step()) == {"one": "gate"}
    assert doing(crew.wait(12)) == {"one": None}


def test_a_target_nobody_tells_of_is_named() -> None:
    follow = Follow(name="escort", target=Target(topic="beacon/pose"), offset=(-2.0, 0.0))
    decision = Crew(team_of([robot("one", 0, 0)], [follow])).step()
    said = {n.about: n.text for n in decision.notices}
    assert said["escort"] == "beacon/pose, which it keeps to, is not heard"


def after_restart(crew: Crew, *tasks: Task) -> Crew:
    """Give a crew that goes on from what another one remembers, maybe with other tasks."""
    memory = json.loads(json.dumps(crew.allocator.memory()))
    table = {task.name: task for task in tasks} or crew.team.tasks
    again = Crew(crew.team.with_tasks(table))
    again.poses = crew.poses
    again.allocator.recall(memory)
    return again


def test_a_restart_lets_nobody_go_who_was_told_to_stand() -> None:
    crew = Crew(team_of([robot("one", 0, 0)], [watch("gate", 20, 0)]))
    crew.drive(1)
    crew.order(hold=True)
    again = after_restart(crew)
    decision = again.drive(1)
    assert not decision.commands.any() and decision.activity == ("held",)
    assert decision.since[0] == 0.0  # s: counted from the restart, not unknown
    again.order(hold=False)
    assert after_restart(again).drive(1).commands.any()


def test_a_restart_leaves_tasks_where_they_were_moved_to() -> None:
    """Unless the file says something else now."""
    gate = watch("gate", 20, 0)
    crew = Crew(team_of([robot("one", 0, 0)], [gate]))
    crew.goals.append(MovedGoal("gate", (-20.0, 3.0, 0.0), None))
    crew.step()
    crew.goals.append(MovedGoal("gate", (-20.0, 5.0, 0.0), None))
    crew.step()
    assert after_restart(crew).allocator.team.tasks["gate"].at == (-20.0, 5.0)
    # Also where the table was moved already, as between two activations.
    crew.team = crew.allocator.team
    between = after_restart(crew)
    between.team = crew.team.with_tasks({"gate": gate})
    assert after_restart(between).allocator.team.tasks["gate"].at == (-20.0, 5.0)
    crew.team = between.team
    assert after_restart(crew, watch("gate", 20, 9)).allocator.team.tasks["gate"].at == (20, 9)


def test_a_visit_to_another_place_is_not_done_because_one_of_its_name_was() -> None:
    visit = Visit(name="sample", at=(1, 0), dwell=0.5)
    crew = Crew(team_of([robot("one", 0, 0)], [visit]))
    assert crew.drive(5).finished == {"sample"}
    assert after_restart(crew).step().finished == {"sample"}
    assert after_restart(crew, replace(visit, priority=4)).step().finished == {"sample"}
    moved = after_restart(crew, replace(visit, at=(9, 9)))
    assert doing(moved.step()) == {"one": "sample"}


def test_a_failure_only_an_earlier_run_heard_of_is_named() -> None:
    rule = HealthRule(name="one: camera", feature="camera")
    crew = Crew(team_of([robot("one", 0, 0, health=(rule,))],
                        [watch("gate", 5, 0, each=("scan",))]))  # fmt: skip
    crew.says("one: camera", ERROR)
    crew.step()
    again = after_restart(crew)
    (said,) = (n.text for n in again.step().notices if n.about == "one")
    assert said.startswith("camera counts as failed: 'one: camera' said so before the restart")
    again.says("one: camera", OK)
    assert doing(again.step()) == {"one": "gate"}
