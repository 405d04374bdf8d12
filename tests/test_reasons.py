"""Every cause in the smallest situation that has it, and the sentence that goes with it."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from builders import ERROR, OK, Crew, doing, robot, team_of, watch

from allocator_node.decision import Cause
from allocator_node.observation import MovedGoal
from allocator_node.program import Assigner
from allocator_node.settings import Settings
from allocator_node.sim.rehearsal import rehearse
from allocator_node.sim.world_file import read_world
from allocator_node.tasks import Visit
from allocator_node.team import Battery, HeadCount
from allocator_node.team_file import read_team

CONFIG = Path(__file__).parents[1] / "config"


def pair(**settings) -> Crew:
    """Give one place to watch, "one" near it and "two" further away, already decided."""
    tasks = [watch("gate", 10, 0, needs={"scan": 1.0})]
    crew = Crew(team_of([robot("one", 5, 0), robot("two", -5, 0)], tasks), Settings(**settings))
    assert doing(crew.step()) == {"one": "gate", "two": None}
    crew.log.clear()
    return crew


def only(crew: Crew):
    """Give the one reallocation there was."""
    (change,) = crew.log
    crew.log.clear()
    return change


def test_start():
    crew = Crew(team_of([robot("one")], [watch("gate", 10, 0)]))
    crew.step()
    change = only(crew)
    assert (change.task, change.before, change.after) == ("gate", (), ("one",))
    assert change.cause is Cause.START
    assert change.time == 0.0


def test_start_of_a_robot_that_reports_late():
    crew = Crew(team_of([robot("one"), robot("two", 5, 0)], [watch("gate", 10, 0)]))
    crew.silent.add("two")
    crew.step()
    crew.silent.clear()
    crew.log.clear()
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert change.cause is Cause.START
    assert change.detail == "two is heard for the first time"


def test_feature():
    crew = pair()
    crew.says("one: camera", ERROR, "no frames")
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert change.cause is Cause.FEATURE
    assert change.detail == "one: camera failed (ERROR: no frames)"


def test_feature_that_comes_back():
    crew = pair()
    crew.says("one: camera", ERROR)
    crew.step()
    crew.log.clear()
    crew.says("one: camera", OK)
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("two",), ("one",))
    assert (change.cause, change.detail) == (Cause.FEATURE, "one: camera works again")


def test_feature_whose_diagnostics_fell_silent():
    crew = pair(health_timeout=1.95)
    crew.says("one: camera", OK)
    crew.wait(2.0)
    assert crew.log == []
    crew.step()
    change = only(crew)
    assert change.cause is Cause.FEATURE
    assert change.detail == "one: camera failed (STALE, not reported for 2.0 s)"


def test_efficacy_of_a_robot_that_is_stuck():
    crew = pair()
    crew.grip[0] = 0.0
    crew.drive(20)
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert change.cause is Cause.EFFICACY
    assert change.detail.startswith("one makes too little progress on gate: efficacy 1.00 → ")
    assert float(change.detail.rsplit(" ", 1)[1]) < 0.9


def test_efficacy_of_a_robot_that_may_try_again():
    crew = pair(retry_after=5.0)
    crew.grip[0] = 0.0
    while not crew.log:
        crew.drive(0.1)
    assert only(crew).cause is Cause.EFFICACY
    crew.order(bans=frozenset({("two", "gate")}))
    crew.step()
    assert only(crew).after == ()
    crew.wait(10)
    change = crew.log[0]
    assert (change.before, change.after) == ((), ("one",))
    assert (change.cause, change.detail) == (Cause.EFFICACY, "one may try gate again")


def test_a_spare_robot_that_was_there_all_along_is_not_the_cause():
    """Neither that it once reported, nor that it was silent for a while, brought it in now."""
    crew = pair()
    crew.silent.add("two")
    crew.wait(2)
    crew.silent.clear()
    crew.wait(2)
    assert crew.log == []
    crew.poses[:, 0] = -5.0, 9.0
    crew.wait(1.0)
    assert only(crew).cause is Cause.CHEAPER


def test_silent_and_returned():
    crew = pair()
    crew.silent.add("one")
    crew.wait(1.5)
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert (change.cause, change.detail) == (Cause.SILENT, "one is silent")
    crew.silent.clear()
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("two",), ("one",))
    assert (change.cause, change.detail) == (Cause.RETURNED, "one is heard again")


def test_energy_that_does_not_suffice():
    crew = pair()
    crew.charges[:] = 0.2001, 1.0
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert change.cause is Cause.ENERGY
    assert change.detail == "one has too little energy left for gate"


def test_energy_that_is_back():
    crew = pair()
    crew.charges[:] = 0.2001, 1.0
    crew.step()
    crew.log.clear()
    crew.charges[0] = 1.0
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("two",), ("one",))
    assert (change.cause, change.detail) == (
        Cause.ENERGY, "one has enough energy again for gate"
    )  # fmt: skip


def test_energy_that_becomes_dear():
    """One fifth left above the reserve: five times as dear, though it would suffice."""
    crew = Crew(team_of([robot("one", 0, 0), robot("two", -2, 0)], [watch("gate", 10, 0)]))
    crew.order(driving=False)
    crew.charges[:] = 1.0, 1.0
    crew.step()
    crew.log.clear()
    for charge in np.arange(1.0, 0.35, -0.01):
        crew.charges[0] = charge
        crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert (change.cause, change.detail) == (Cause.ENERGY, "the energy of one runs low")


def test_task_that_is_new_switched_off_and_on():
    crew = pair()
    crew.edit(watch("yard", -10, 0))
    crew.step()
    change = only(crew)
    assert (change.task, change.before, change.after) == ("yard", (), ("two",))
    assert (change.cause, change.detail) == (Cause.TASK, "yard is to be done now")
    crew.edit(watch("yard", -10, 0, active=False))
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("two",), ())
    assert (change.cause, change.detail) == (Cause.TASK, "yard is switched off")


def test_task_that_finishes():
    visit = Visit(name="sample", at=(1, 0), robots=HeadCount(1, 1))
    crew = Crew(team_of([robot("one")], [visit, watch("gate", 9, 0, after=("sample",))]))
    crew.drive(5)
    causes = {change.task: (change.cause, change.detail) for change in crew.log[1:]}
    assert causes == {
        "sample": (Cause.TASK, "sample is finished"),
        "gate": (Cause.TASK, "gate is to be done now"),
    }


def test_task_that_was_moved_or_asks_for_more():
    crew = pair()
    crew.goals.append(MovedGoal("gate", (-10.0, 0.0, 0.0)))
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert (change.cause, change.detail) == (Cause.TASK, "gate was moved")
    gate = crew.allocator.team.tasks["gate"]
    crew.edit(replace(gate, robots=HeadCount(2, 2)))
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("two",), ("one", "two"))
    assert (change.cause, change.detail) == (Cause.TASK, "gate was changed (robots)")


def test_pin_and_ban():
    crew = pair()
    crew.order(pins=frozenset({("two", "gate")}))
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert (change.cause, change.detail) == (Cause.PIN, "two is pinned to gate")
    crew.order(pins=frozenset(), bans=frozenset({("two", "gate")}))
    crew.step()
    change = only(crew)
    assert (change.before, change.after) == (("two",), ("one",))
    assert (change.cause, change.detail) == (Cause.PIN, "two is banned from gate")


def test_cheaper_says_by_how_much():
    """By hand: 20 W idle + 100 W at 1 m/s are 1/30 Wh a metre; two saves 15 − 2 − 3 of them."""
    crew = pair(kappa=0.0)
    crew.poses[:, 0] = -5.0, 12.0
    crew.wait(1.0)
    change = only(crew)
    assert (change.before, change.after) == (("one",), ("two",))
    assert change.cause is Cause.CHEAPER
    assert change.detail == f"the new choice saves {10 / 30:.3g} Wh"


# -- chains --------------------------------------------------------------------------


def chain() -> Crew:
    """Two places: "one" can do the important one, "two" both, "three" only the other.

    two stands by its own place; one fails; two moves over and three steps in for it.
    """
    tasks = [
        watch("gate", 10, 0, needs={"scan": 1.0}, priority=3),
        watch("yard", -10, 0, each=("rough",)),
    ]
    both, tracks = ("camera", "gimbal", "tracks"), ("tracks",)
    robots = [
        robot("one", 9, 0),
        robot("two", -9, 0, features=both),
        robot("three", -40, 0, features=tracks),
    ]
    crew = Crew(team_of(robots, tasks))
    assert doing(crew.step()) == {"one": "gate", "two": "yard", "three": None}
    crew.log.clear()
    return crew


@pytest.mark.parametrize(
    ("happens", "cause", "detail"),
    [
        (lambda crew: crew.says("one: camera", ERROR), Cause.FEATURE,
         "one: camera failed (ERROR)"),
        (lambda crew: crew.order(bans=frozenset({("one", "gate")})), Cause.PIN,
         "one is banned from gate"),
        (lambda crew: crew.charges.put(0, 0.2), Cause.ENERGY,
         "one has too little energy left for gate"),
        (lambda crew: crew.silent.add("one"), Cause.SILENT, "one is silent"),
    ],
    ids=["feature", "pin", "energy", "silent"],
)  # fmt: skip
def test_a_chain_carries_the_cause_it_began_with(happens, cause, detail):
    crew = chain()
    happens(crew)
    decision = crew.wait(1.5)
    assert doing(decision) == {"one": None, "two": "gate", "three": "yard"}
    assert {change.task: (change.before, change.after) for change in crew.log} == {
        "gate": (("one",), ("two",)), "yard": (("two",), ("three",))
    }  # fmt: skip
    assert {(change.cause, change.detail) for change in crew.log} == {(cause, detail)}


def test_a_chain_back():
    crew = chain()
    crew.says("one: camera", ERROR)
    crew.step()
    crew.log.clear()
    crew.says("one: camera", OK)
    decision = crew.step()
    assert doing(decision) == {"one": "gate", "two": "yard", "three": None}
    assert {(change.cause, change.detail) for change in crew.log} == {
        (Cause.FEATURE, "one: camera works again")
    }


def test_two_things_at_once_are_told_apart():
    """Two exchanges that share no task: each has its own reason."""
    tasks = [watch("gate", 0, 0), watch("yard", 100, 0)]
    robots = [robot("a", 1, 0), robot("b", 5, 0), robot("c", 101, 0), robot("d", 105, 0)]
    crew = Crew(team_of(robots, tasks))
    crew.step()
    crew.log.clear()
    crew.order(bans=frozenset({("a", "gate")}))
    crew.charges[:] = np.array([1.0, 1.0, 0.2, 1.0])
    crew.step()
    assert [(c.task, c.cause, c.after) for c in crew.log] == [
        ("gate", Cause.PIN, ("b",)), ("yard", Cause.ENERGY, ("d",))
    ]  # fmt: skip


def test_nothing_changes_nothing_is_said():
    crew = pair()
    crew.drive(30)
    assert crew.log == []


def test_groups_are_sorted():
    robots = [robot(name, i, 0, battery=Battery()) for i, name in enumerate("cab")]
    crew = Crew(team_of(robots, [watch("gate", 9, 0, count=3)]))
    crew.step()
    assert only(crew).after == ("a", "b", "c")


class Late(Assigner):
    """Searches beside the loop, and has found whatever it looks for one period later."""

    def __init__(self) -> None:
        super().__init__(budget=0.0)

    def assign(self, *problem):
        """Wait for the search that the last period began."""
        self.wait()
        return super().assign(*problem)


def test_a_search_that_takes_longer_than_a_period_loses_no_reason():
    """The demo's mishaps: the same causes whether the assignment is found at once or later."""
    team = read_team(CONFIG / "solar_farm.yaml")
    world = read_world(CONFIG / "solar_farm_world.yaml", team)
    at_once, later = (
        rehearse(team, world, seconds=150.0, assigner=assigner) for assigner in (None, Late())
    )
    causes = [{(e["task"], e["cause"]) for e in run.events} for run in (at_once, later)]
    assert causes[0] == causes[1]
    assert {cause for _, cause in causes[0]} == {
        "start", "efficacy", "task", "feature", "silent", "returned", "energy"
    }  # fmt: skip
