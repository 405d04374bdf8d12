"""What is known now: features, poses, energy and efficacy.

The whole campaign: python3 -m pytest tests/test_beliefs.py --whole
"""

from dataclasses import replace

import numpy as np
import pytest
from builders import ERROR, OK, OMNI, ROVER, STALE, WARN, Crew, doing, robot, team_of, watch

from allocator_node.allocator import Allocator
from allocator_node.belief import EfficacyBelief, EnergyBelief, FeatureBelief, PoseBelief
from allocator_node.belief.efficacy import Step
from allocator_node.decision import Cause
from allocator_node.model import Model
from allocator_node.observation import HealthReport, Observation
from allocator_node.settings import Settings
from allocator_node.sim.world import SimulatedTeam
from allocator_node.sim.world_file import Noise, World
from allocator_node.tasks import Patrol, Visit
from allocator_node.team import Battery, HeadCount, HealthRule, KeepOut

SETTINGS = Settings()

FASTEST = np.array([[1.0, 1.5]])
"""m/s and rad/s of one rover."""

# -- features ------------------------------------------------------------------------


class Camera:
    """The belief in one robot's camera, with health rules of its own."""

    def __init__(self, *names: str) -> None:
        rules = tuple(HealthRule(name, "camera") for name in names)
        team = team_of([robot("one", features=("camera",), health=rules or None)], [])
        model = Model(team)
        self.index = model.features.index("camera")
        self.belief = FeatureBelief(team, model.features, model.declared)

    def hears(self, now: float, *reports: tuple[str, int], text: str = "") -> float:
        """Take in (name, level) reports and give the camera's health."""
        told = tuple(HealthReport(name, level, text) for name, level in reports)
        return self.belief.update(told, now, SETTINGS)[0, self.index]

    def says(self, now: float) -> str:
        return self.belief.says(0, self.index, now, SETTINGS)


@pytest.mark.parametrize(("level", "health"), [(0, 1.0), (1, 0.5), (2, 0.0), (3, 0.0)])
def test_levels_are_those_of_diagnostic_status(level, health):
    """diagnostic_msgs/msg/DiagnosticStatus: OK = 0, WARN = 1, ERROR = 2, STALE = 3."""
    assert (OK, WARN, ERROR, STALE) == (0, 1, 2, 3)
    assert Camera().hears(0.0, ("one: camera", level)) == health


def test_a_feature_never_reported_counts_as_working_and_is_named():
    camera = Camera()
    assert camera.hears(1000.0) == 1.0
    assert camera.belief.unheard() == [("one", "camera", "one: camera")]
    camera.hears(1001.0, ("one: camera", OK))
    assert camera.belief.unheard() == []


def test_a_status_not_repeated_is_stale():
    camera = Camera()
    assert camera.hears(0.0, ("one: camera", OK), text="fine") == 1.0
    assert camera.says(5.0) == "OK: fine"
    assert camera.hears(5.0) == 1.0
    assert camera.hears(5.1) == 0.0
    assert camera.says(5.1) == "STALE, not reported for 5.1 s"
    assert camera.hears(9.0, ("one: camera", OK)) == 1.0


def test_wildcards_and_the_worst_of_several():
    camera = Camera("one/camera/*", "power of one")
    assert camera.hears(0.0, ("one/camera/left", OK), ("power of one", OK)) == 1.0
    assert camera.hears(1.0, ("one/camera/right", WARN)) == 0.5
    assert camera.hears(2.0, ("power of one", ERROR)) == 0.0
    assert camera.hears(3.0, ("power of one", OK), ("two/camera/left", ERROR)) == 0.5
    assert camera.hears(4.0, ("one/camera/right", OK)) == 1.0


def test_a_feature_a_robot_was_not_declared_with_is_zero():
    team = team_of([robot("one", features=("camera",)), robot("two", features=("tracks",))], [])
    model = Model(team)
    health = FeatureBelief(team, model.features, model.declared).update((), 0.0, SETTINGS)
    tracks, camera = model.features.index("tracks"), model.features.index("camera")
    assert health[0, camera] == health[1, tracks] == 1.0
    assert health[0, tracks] == health[1, camera] == 0.0


# -- poses ---------------------------------------------------------------------------


def seen(pose, at: float, velocity=None) -> Observation:
    """Give the observation of one robot."""
    return replace(
        Observation.nothing(1),
        poses=np.array([pose], dtype=float),
        pose_times=np.array([at]),
        velocities=np.array([velocity if velocity is not None else [np.nan] * 4], dtype=float),
    )


def test_a_pose_is_carried_forward_by_the_measured_velocity():
    belief = PoseBelief(FASTEST)
    places = belief.update(seen([1, 2, 0, 3.0], 0.0, [1.0, -0.5, 0, 1.0]), 0.4, 1.0)
    turned = 3.4 - 2 * np.pi
    np.testing.assert_allclose(places.poses, [[1.4, 1.8, 0, turned]])
    assert places.heard[0] and places.age[0] == pytest.approx(0.4)


def test_without_a_measured_velocity_it_is_taken_from_the_poses():
    belief = PoseBelief(FASTEST)
    for step in range(50):
        places = belief.update(seen([0.08 * step, 0, 0, 0], 0.1 * step), 0.1 * step, 1.0)
    places = belief.update(seen([0.08 * 49, 0, 0, 0], 4.9), 5.4, 1.0)
    assert places.poses[0, 0] == pytest.approx(0.08 * 54, abs=1e-3)


def test_a_silent_robot_is_where_it_was_last_seen():
    belief = PoseBelief(FASTEST)
    belief.update(seen([1, 2, 0, 0], 0.0, [1.0, 0, 0, 0]), 0.0, 1.0)
    places = belief.update(seen([1, 2, 0, 0], 0.0, [1.0, 0, 0, 0]), 1.1, 1.0)
    assert places.known[0] and not places.heard[0]
    np.testing.assert_allclose(places.poses, [[1, 2, 0, 0]])
    places = belief.update(seen([1.5, 2, 0, 0], 1.2), 1.2, 1.0)
    assert places.heard[0]


@pytest.mark.parametrize("leap", [(30, 0, 0, 0), (0, 0, 9, 0), (1e6, -1e6, 0, 0), (0, 0, 0, 3)])
def test_a_pose_that_jumped_counts_once_it_has_settled(leap):
    """Until then the robot is where it was, for as long as its last good pose is good."""
    belief = PoseBelief(FASTEST)
    belief.update(seen([1, 2, 0, 0], 0.0), 0.0, 1.0)
    there = np.add([1, 2, 0, 0], leap)
    for now in np.arange(1, 8) / 10:
        places = belief.update(seen(there, now), now, 1.0)
        assert places.heard[0] and not places.steady[0] and not places.moved[0]
        np.testing.assert_allclose(places.poses, [[1, 2, 0, 0]])
        assert places.jumped[0] == pytest.approx(np.linalg.norm(leap[:3]), abs=1e-6)
    places = belief.update(seen(there, 0.85), 0.85, 1.0)
    assert places.steady[0] and not places.moved[0]
    np.testing.assert_allclose(places.poses, [there])
    np.testing.assert_allclose(places.velocities, 0.0)
    assert belief.update(seen(there, 0.95), 0.95, 1.0).moved[0]


def test_two_localizations_in_turn_never_settle():
    """The robot stands, and is silent once its last good pose is stale."""
    belief = PoseBelief(FASTEST)
    belief.update(seen([0, 0, 0, 0], 0.0), 0.0, 1.0)
    for step in range(1, 40):
        now = 0.1 * step
        places = belief.update(seen([30.0 * (step % 2), 0, 0, 0], now), now, 1.0)
        assert not places.steady[0]
        assert places.heard[0] == (now < 1.05)


def begun_anew(how):
    """Give a belief for which the robot at (0, 0) begins anew: no time is known any more."""
    belief = PoseBelief(FASTEST)
    if how == "restart":
        belief.recall(0, (0.0, 0.0, 0.0, 0.0))
        return belief
    belief.update(seen([0, 0, 0, 0], 400.0), 400.0, 1.0)
    belief.update(seen([30, 0, 0, 0], 400.1), 400.1, 1.0)
    if how == "clock set back":
        belief.forget_times()
    return belief


BEGINNINGS = [("restart", 0.0), ("clock set back", 300.0), ("future", 300.0), ("silence", 460.0)]


@pytest.mark.parametrize("how, start", BEGINNINGS)
def test_two_localizations_never_settle_after_a_new_beginning_either(how, start):
    """Nothing but the last good place tells which of the two is wrong."""
    belief = begun_anew(how)
    for step in range(40):
        now = start + 0.1 * step
        places = belief.update(seen([30.0 * (step % 2 == 0), 0, 0, 0], now), now, 1.0)
        assert not places.steady[0]
        np.testing.assert_allclose(places.poses, [[0, 0, 0, 0]])


@pytest.mark.parametrize("how, start", BEGINNINGS)
def test_after_a_new_beginning_a_robot_near_its_last_place_counts_at_once(how, start):
    belief = begun_anew(how)
    near = [1.5 * 2 * 0.9, 0, 0, 0]  # what it may have rolled
    if how == "silence":  # its last pose was far away: that one is compared
        belief.update(seen(near, start), start, 1.0)
        start += 0.8
    places = belief.update(seen(near, start), start, 1.0)
    assert places.steady[0]
    np.testing.assert_allclose(places.poses, [near])


def test_a_robot_carried_away_while_silent_counts_once_it_has_settled():
    belief = PoseBelief(FASTEST)
    belief.update(seen([0, 0, 0, 0], 0.0), 0.0, 1.0)
    for now in np.arange(60.0, 60.65, 0.1):
        assert not belief.update(seen([30, 0, 0, 0], now), now, 1.0).steady[0]
    assert belief.update(seen([30, 0, 0, 0], 60.71), 60.71, 1.0).steady[0]


@pytest.mark.parametrize("hz", [1.5, 5.0, 50.0])
def test_driving_downhill_and_small_corrections_are_no_jumps(hz):
    """1.5 times the highest speed, and 0.9 m at once: common practice of a map match."""
    belief = PoseBelief(FASTEST)
    for step in range(100):
        now = step / hz
        pose = [1.5 * now + 0.9 * (step > 50), 0, 0, np.angle(np.exp(2j * now))]
        assert belief.update(seen(pose, now), now, 1.0).steady[0]


def test_a_velocity_no_robot_can_have_is_not_used():
    belief = PoseBelief(FASTEST)
    belief.update(seen([0, 0, 0, 0], 0.0, [9e5, 0, 0, 0]), 0.0, 1.0)
    places = belief.update(seen([0.1, 0, 0, 0], 0.2, [0, 0, 0, 400.0]), 0.3, 1.0)
    assert np.abs(places.velocities).max() < 1.0
    assert places.poses[0, 0] == pytest.approx(0.1, abs=0.1)


def test_a_robot_whose_pose_jumps_stands_keeps_its_task_and_learns_nothing():
    crew = Crew(team_of([robot("a", 0, 0), robot("b", 0, -60)], [watch("gate", 40, 0)]))
    crew.drive(2.0)
    before = doing(crew.step())
    assert before["a"] == "gate"
    for leap in (30.0, -30.0):
        crew.poses[0, 1] += leap
        crew.log.clear()
        held = [crew.step() for _ in range(7)]
        assert all((decision.commands[0] == 0).all() for decision in held)
        assert all(doing(decision) == before for decision in held)
        assert {n.text for d in held for n in d.notices if n.about == "a"} == {
            "its pose jumped by 30.0 m: it stands until its poses agree"
        }
        assert held[-1].activity[0] == "held"
        decision = crew.step()
        assert not decision.notices
        assert not crew.log
    assert crew.drive(1.0).commands[0, 0] > 0.9
    assert (decision.efficacy == 1.0).all()


def test_a_robot_never_heard_is_nowhere():
    places = PoseBelief(FASTEST).update(Observation.nothing(1), 5.0, 1.0)
    assert not places.known[0] and not places.heard[0]
    assert np.isnan(places.poses).all()


def test_a_pose_from_the_future_is_not_taken_until_its_time_comes():
    belief = PoseBelief(FASTEST)
    belief.update(seen([1, 0, 0, 0], 0.0, [0] * 4), 0.0, 1.0)
    places = belief.update(seen([9, 0, 0, 0], 50.0, [0] * 4), 0.1, 1.0)
    assert places.poses[0, 0] == 1.0


def test_a_clock_set_back_does_not_make_robots_silent():
    """As a simulation that is started again does: from 100 s back to 0."""
    belief = PoseBelief(FASTEST)
    belief.update(seen([1, 0, 0, 0], 100.0, [0] * 4), 100.0, 1.0)
    places = belief.update(seen([2, 0, 0, 0], 0.0, [0] * 4), 0.0, 1.0)
    assert places.heard[0] and places.poses[0, 0] == 2.0


def test_the_allocator_goes_on_when_the_clock_is_set_back():
    crew = Crew(team_of([robot("one")], [watch("gate", 50, 0)]))
    crew.now = 1000.0
    crew.says("one: camera", OK)
    crew.drive(3)
    crew.now = 2.0
    crew.log.clear()
    decision = crew.drive(3)
    assert doing(decision)["one"] == "gate" and decision.commands[0, 0] > 0.5
    assert crew.log == [] and decision.heard[0]
    np.testing.assert_array_equal(decision.efficacy, [[1.0]])


# -- energy --------------------------------------------------------------------------

HERE = np.zeros((1, 3))
"""Where one robot is, m; it has no dock."""


def test_watt_hours_counted_by_hand():
    """30 W idle + half of 160 W for 90 s: 110 W · 90 s / 3600 s/h = 2.75 Wh of 500."""
    battery = Battery(capacity_wh=500, reserve=0.2, idle_w=30, drive_w=160)
    model = Model(team_of([robot("one", drive=OMNI, battery=battery)], []))
    belief = EnergyBelief(model)
    commands = np.array([[0.3, -0.4, 0, 0]])
    for step in range(900):
        belief.update(Observation.nothing(1), model, commands, HERE, 0.1 * step, 0.1, 30.0)
    assert belief.charge[0] == pytest.approx(1 - 2.75 / 500, rel=1e-9)
    assert belief.estimated[0]
    assert belief.spendable(model)[0] == pytest.approx(500 * 0.8 - 2.75)
    assert belief.dearness(model)[0] == pytest.approx(400 / (400 - 2.75))


def charged(charge: float, at: float) -> Observation:
    nothing = Observation.nothing(1)
    return replace(nothing, charges=np.array([charge]), charge_times=np.array([at]))


def test_a_measured_charge_is_taken_as_it_is_and_counted_on_from():
    battery = Battery(capacity_wh=100, idle_w=36, drive_w=0)
    model = Model(team_of([robot("one", battery=battery)], []))
    belief = EnergyBelief(model)
    still = np.zeros((1, 4))
    belief.update(charged(0.5, 10.0), model, still, HERE, 10.0, 0.1, 30.0)
    assert belief.charge[0] == 0.5 and not belief.estimated[0]
    belief.update(charged(0.5, 10.0), model, still, HERE, 39.0, 1.0, 30.0)
    assert not belief.estimated[0]
    # The same message is no second measurement: one second of 36 W is 0.01 Wh.
    assert belief.charge[0] == pytest.approx(0.5 - 0.0001)
    belief.update(charged(0.5, 10.0), model, still, HERE, 41.0, 1.0, 30.0)
    assert belief.estimated[0]
    belief.update(charged(0.8, 42.0), model, still, HERE, 42.0, 1.0, 30.0)
    assert belief.charge[0] == 0.8 and not belief.estimated[0]


def test_a_charge_out_of_range_is_clipped_and_none_is_none():
    """sensor_msgs/msg/BatteryState: percentage 0 to 1, NaN where it is not measured."""
    model = Model(team_of([robot("one", battery=Battery(idle_w=0, drive_w=0))], []))
    belief = EnergyBelief(model)
    still = np.zeros((1, 4))
    for charge, expected in ((1.7, 1.0), (0.4, 0.4), (np.nan, 0.4), (-0.1, 0.0)):
        now = belief.measured_at[0] + 1 if np.isfinite(belief.measured_at[0]) else 0.0
        belief.update(charged(charge, now), model, still, HERE, now, 0.1, 30.0)
        assert belief.charge[0] == expected


def test_energy_is_dearer_the_emptier_the_battery():
    model = Model(team_of([robot("one"), robot("two")], []))
    belief = EnergyBelief(model)
    belief.charge[:] = 1.0, 0.36
    np.testing.assert_allclose(belief.dearness(model), [1.0, 5.0])


# -- efficacy ------------------------------------------------------------------------


def lone(*tasks, **settings) -> Crew:
    tasks = tasks or (watch("gate", 60, 0), watch("yard", -60, 0))
    crew = Crew(team_of([robot("one")], list(tasks)), Settings(**settings))
    crew.order(pins=frozenset({("one", "gate")}))
    return crew


def test_it_falls_in_mud_for_the_task_tried_only():
    crew = lone()
    crew.grip[0] = 0.05
    eta = crew.drive(10).efficacy[0]
    assert eta[0] < 0.4 and eta[1] == 1.0


def test_a_honest_loss_costs_nothing():
    """The allowance: tyres and gains honestly cost a fifth of the speed."""
    crew = lone()
    crew.grip[0] = 0.81
    assert crew.drive(30).efficacy[0, 0] > 0.99
    crew = lone()
    crew.grip[0] = 0.4
    assert crew.drive(30).efficacy[0, 0] == pytest.approx(0.4 / 0.8, abs=0.02)


def test_the_ratio_law_by_hand():
    """r = 0.4 / 0.8, τ = 4 s, one window of 4 s, then η = 0.5 + 0.5 e^(−t/τ)."""
    belief, settings = EfficacyBelief(1, 1), replace(SETTINGS, pose_noise=0.0)
    task, away = np.zeros(1, int), np.full(1, 20.0)
    for step in range(1, 81):
        motion = Step(0.1 * step, np.array([0.1]), np.array([0.04]), np.ones(1, bool))
        belief.update(motion, task, away, 0.1, settings)
    assert belief.eta[0, 0] == pytest.approx(0.5 + 0.5 * np.exp(-8.0 / 4.0), abs=1e-9)


def test_the_additive_law_by_hand():
    """η falls by β (Δh expected − Δh measured), h = −d²/2: β · d · 0.6 m/s for each second."""
    settings = replace(SETTINGS, efficacy_law="additive", efficacy_gain=0.01, pose_noise=0.0)
    belief = EfficacyBelief(1, 1)
    task, away = np.zeros(1, int), np.full(1, 10.0)
    etas = []
    for step in range(1, 101):
        motion = Step(0.1 * step, np.array([0.1]), np.array([0.04]), np.ones(1, bool))
        belief.update(motion, task, away, 0.1, settings)
        etas.append(belief.eta[0, 0])
    # Once the window of 4 s is full; 0.01 · 10 m · 0.6 m/s is 0.06 a second.
    assert etas[89] - etas[99] == pytest.approx(0.06, rel=0.03)


def test_the_additive_law_in_the_allocator():
    crew = lone(watch("gate", 60, 0), efficacy_law="additive", efficacy_gain=0.001)
    crew.grip[0] = 0.05
    assert crew.drive(8).efficacy[0, 0] < 0.8
    crew = lone(watch("gate", 60, 0), efficacy_law="additive", efficacy_gain=0.001)
    assert crew.drive(60).efficacy[0, 0] > 0.97


def test_holding_and_standing_never_lower_it():
    crew = lone(watch("gate", 5, 0))
    crew.grip[0] = 0.0
    crew.order(hold=True)
    assert crew.drive(30).efficacy[0, 0] == 1.0
    crew.grip[0] = 1.0
    crew.order(hold=False)
    crew.drive(10)
    crew.grip[0] = 0.0
    assert crew.drive(60).efficacy[0, 0] == 1.0


def test_commands_that_reach_nobody_teach_nothing():
    crew = lone()
    crew.order(driving=False)
    assert crew.wait(30).efficacy[0, 0] == 1.0


def test_yielding_is_not_taken_for_inability():
    """A robot that cannot move stands in the gap of a fence: the other waits behind it."""
    fence = [
        KeepOut("left", ((20, 0.8), (21, 0.8), (21, 90), (20, 90))),
        KeepOut("right", ((20, -90), (21, -90), (21, -0.8), (20, -0.8))),
    ]
    robots = [robot("one", 15, 0), robot("stalled", 20.5, 0)]
    crew = Crew(team_of(robots, [watch("gate", 40, 0)], keep_out=tuple(fence)))
    crew.order(pins=frozenset({("one", "gate")}))
    crew.grip[1] = 0.0
    decision = crew.drive(60)
    assert doing(decision)["one"] == "gate" and 17 < crew.poses[0, 0] < 20
    np.testing.assert_array_equal(decision.efficacy, np.ones((2, 1)))


def test_two_that_meet_head_on_lose_nothing():
    robots = [robot("one", 0, 0, 0.0, drive=ROVER), robot("two", 30, 0, np.pi, drive=ROVER)]
    crew = Crew(team_of(robots, [watch("east", 30, 0), watch("west", 0, 0)]))
    crew.order(pins=frozenset({("one", "east"), ("two", "west")}))
    decision = crew.drive(60)
    assert np.linalg.norm(crew.poses[:, :2] - [[30, 0], [0, 0]], axis=1).max() < 0.7
    assert decision.efficacy.min() > 0.99


def test_off_the_task_it_relaxes_with_growing_delay():
    belief, settings = EfficacyBelief(1, 2), replace(SETTINGS, pose_noise=0.0, retry_after=30.0)
    away, now, delays = np.full(1, 20.0), 0.0, []

    def spend(seconds: float, task: int, measured: float) -> None:
        nonlocal now
        for _ in range(round(seconds / 0.1)):
            now += 0.1
            moved = Step(now, np.array([0.1]), np.array([measured]), np.ones(1, bool))
            belief.update(moved, np.array([task]), away, 0.1, settings)

    for _ in range(4):
        spend(8.0, 0, 0.0)
        failed = belief.eta[0, 0]
        assert failed < 0.2
        belief.reassigned(np.array([0]), np.array([0]), now, settings)
        assert belief.barred[0, 0]
        left = now
        while belief.barred[0, 0]:
            spend(0.1, 1, 0.1)
        # Relaxation by hand: 1 − (1 − failed) e^(−t/T) = 0.6.
        delays.append((now - left) / np.log((1 - failed) / 0.4))
        belief.reassigned(np.array([0]), np.array([1]), now, settings)
    np.testing.assert_allclose(delays, [30, 60, 120, 240], rtol=0.02)


def test_a_success_restores_the_short_delay():
    belief, settings = EfficacyBelief(1, 1), replace(SETTINGS, pose_noise=0.0)
    belief.recall(0, 0, 0.7, failures=4, barred=False)
    for step in range(1, 200):
        motion = Step(0.1 * step, np.array([0.1]), np.array([0.1]), np.ones(1, bool))
        belief.update(motion, np.zeros(1, int), np.full(1, 20.0), 0.1, settings)
    assert belief.eta[0, 0] > 0.9 and belief.failures[0, 0] == 0


def test_a_change_of_goal_inside_the_window_does_no_harm():
    """Progress is summed along the direction to the goal at each step."""
    crew = lone(watch("gate", 60, 0))
    crew.drive(5)
    gate = crew.allocator.team.tasks["gate"]
    for side in (1, -1, 1, -1):
        crew.edit(replace(gate, at=(crew.poses[0, 0], 40.0 * side)))
        decision = crew.drive(3)
    assert decision.efficacy[0, 0] == 1.0


def test_tasks_are_swapped_when_one_is_stuck_at_its_goal():
    """Mud around one goal that holds wheels but not tracks: the two change places."""
    tasks = [watch("bog", 10, 0, each=("scan",)), watch("gate", -10, 0, each=("scan",))]
    crew = Crew(team_of([robot("wheels", 2, 0), robot("tracks", -2, 0)], tasks))
    for _ in range(600):
        decision = crew.step()
        in_mud = np.hypot(crew.poses[:, 0] - 10, crew.poses[:, 1]) < 6
        crew.grip[:] = np.where(in_mud & [True, False], 0.03, 1.0)
        crew.poses[:, :2] += 0.1 * crew.grip[:, None] * decision.commands[:, :2]
    assert doing(decision) == {"wheels": "gate", "tracks": "bog"}
    assert decision.efficacy[0, 0] < 0.7
    assert decision.efficacy[[0, 1, 1], [1, 0, 1]].min() > 0.9
    assert Cause.EFFICACY in {change.cause for change in crew.log}
    np.testing.assert_allclose(crew.poses[:, 0], [-10, 10], atol=0.5)


def test_outside_quality_counts_like_a_window():
    """One message of quality 0 with τ = 4 s and windows of 4 s: η = e⁻¹."""
    crew = lone(watch("gate", 0, 0))
    crew.step()
    crew.quality[("one", "gate")] = 0.0
    crew.quality[("nobody", "gate")] = 0.0
    assert crew.step().efficacy[0, 0] == pytest.approx(np.exp(-1))


def test_forgetting():
    crew = lone()
    crew.grip[0] = 0.0
    crew.drive(6)
    crew.allocator.forget()
    crew.grip[0] = 1.0
    assert crew.step().efficacy.min() == 1.0


@pytest.mark.slow
@pytest.mark.campaign(slice=1, whole=10)
def test_pose_noise_is_not_taken_for_inability(seed):
    """5 cm and 2° at 10 Hz, ten minutes of honest driving: nothing below 0.9.

    Two drives, fast and slow; patrols, a watch and a chain of visits. At 0.2 m/s the noise
    is as large as what a window of 4 s shows.
    """
    tasks = [
        Patrol(name="rows", waypoints=((5, 5), (35, 5), (35, 12), (5, 12)),
               robots=HeadCount(2, 2)),
        Patrol(name="fence", waypoints=((0, 0), (40, 0), (40, 30), (0, 30))),
        watch("gate", 20, 25, face=(20, 40)),
        *(Visit(name=f"sample_{i}", at=(10.0 + 20 * (i % 2), 18.0 + 2 * (i % 3)), dwell=5.0,
                robots=HeadCount(1, 1), after=(f"sample_{i - 1}",) if i else ())
          for i in range(4)),
    ]  # fmt: skip
    robots = [
        robot(f"robot_{i}", 4.0 * i, 2.0 + i, drive=replace((ROVER, OMNI)[i % 2], max_speed=speed))
        for i, speed in enumerate((1.0, 0.2, 0.2, 1.0, 0.5))
    ]
    team = team_of(robots, tasks)
    world = World(noise=Noise(position_m=0.05, heading_rad=np.radians(2)))
    simulated, allocator = SimulatedTeam(team, world, seed), Allocator(team)
    lowest = 1.0
    for step in range(6000):
        decision = allocator.step(simulated.observation(), 0.1 * step)
        lowest = min(lowest, decision.efficacy.min())
        simulated.step(decision.commands, 0.1)
    assert lowest >= 0.9
    assert len(decision.finished) == 4, "they did drive"
