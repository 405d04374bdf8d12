"""The simulated team against exact motion, hand calculation and the message definitions."""

import fnmatch

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from allocator_node.drives import Aerial, Differential, Fleet, Holonomic
from allocator_node.sim.motion import advance
from allocator_node.sim.site import Site
from allocator_node.sim.world import SimulatedTeam, example
from allocator_node.sim.world_file import (
    BatteryEvent,
    FeatureEvent,
    GroundPatch,
    Noise,
    PoseEvent,
    StalledEvent,
    TaskEvent,
    World,
)
from allocator_node.tasks import Watch
from allocator_node.team import Battery, HealthRule, KeepOut, Robot, Team

ROVER = Differential(max_speed=1.2, max_turn_rate=1.5, lookahead=0.25)
OMNI = Holonomic(max_speed=1.0)
DRONE = Aerial(max_speed=3.0, height=(5.0, 9.0))


def team_of(*robots: Robot, **more) -> Team:
    return Team(robots={robot.name: robot for robot in robots}, **more)


def rover(name: str = "rover", **more) -> Robot:
    return Robot(**{"name": name, "drive": ROVER, "features": ("wheels", "camera")} | more)


def drive_on(simulated: SimulatedTeam, command: list[list[float]], seconds: float) -> None:
    for _ in range(round(seconds / 0.05)):
        simulated.step(np.array(command), 0.05)


def test_motion_is_that_of_the_differential_equation():
    """ẋ = vx cos θ − vy sin θ, ẏ = vx sin θ + vy cos θ, θ̇ = ω, integrated by scipy."""
    random = np.random.default_rng(3)
    poses = random.uniform(-3, 3, (20, 4))
    body = random.uniform(-2, 2, (20, 4))
    body[:3, 3] = 0.0, 1e-9, -1e-7
    after = advance(poses, body, 1.7)
    for pose, (vx, vy, vz, turn), moved in zip(poses, body, after, strict=True):
        def rate(_, state, vx=vx, vy=vy, vz=vz, turn=turn):
            cos, sin = np.cos(state[3]), np.sin(state[3])
            return [vx * cos - vy * sin, vx * sin + vy * cos, vz, turn]

        exact = solve_ivp(rate, (0, 1.7), pose, rtol=1e-11, atol=1e-12).y[:, -1]
        np.testing.assert_allclose(moved[:3], exact[:3], atol=1e-8)
        assert abs(np.angle(np.exp(1j * (moved[3] - exact[3])))) < 1e-8


def test_many_steps_are_one_step():
    pose, body = np.array([[1.0, 2.0, 0.0, 3.0]]), np.array([[0.8, -0.3, 0.1, 1.1]])
    steps = pose
    for _ in range(100):
        steps = advance(steps, body, 0.03)
    np.testing.assert_allclose(steps, advance(pose, body, 3.0), atol=1e-12)


def test_control_points_move_as_the_jacobian_says():
    """ṗ = G v of the look-ahead point, against central differences of the exact motion."""
    fleet = Fleet([ROVER, OMNI, DRONE])
    random = np.random.default_rng(5)
    for _ in range(20):
        poses = random.uniform(-3, 3, (3, 4))
        body = random.uniform(-1, 1, (3, 4)) * (fleet.limits > 0)
        step = 1e-5
        ahead, behind = (advance(poses, body, dt) for dt in (step, -step))
        rate = (fleet.control_points(ahead) - fleet.control_points(behind)) / (2 * step)
        np.testing.assert_allclose(
            rate, np.einsum("nij,nj->ni", fleet.jacobians(poses), body), atol=1e-8
        )


def test_signs_are_those_of_rep_103():
    """REP 103: x forward, y left, z up; counter-clockwise turns are positive."""
    robots = [rover(drive=OMNI), rover("drone", drive=DRONE)]
    simulated = SimulatedTeam(team_of(*robots))
    drive_on(simulated, [[0.0, 0.5, 0.0, 0.0], [0.5, 0.0, 0.5, 0.5]], 1.0)
    omni, drone = simulated.true_poses
    np.testing.assert_allclose(omni, [0, 0.5, 0, 0], atol=1e-12)
    assert drone[1] > 0
    assert drone[2] == pytest.approx(5.5)
    assert drone[3] == pytest.approx(0.5)


def test_velocities_are_in_the_site_frame():
    simulated = SimulatedTeam(team_of(rover(start=(0, 0, np.pi / 2))))
    simulated.step(np.array([[1.0, 0, 0, 0]]), 0.05)
    np.testing.assert_allclose(simulated.velocities(), [[0, 1, 0, 0]], atol=1e-12)


def test_commands_stay_within_the_drives_limits():
    simulated = SimulatedTeam(team_of(rover(), rover("omni", drive=OMNI)))
    drive_on(simulated, [[9, 9, 9, 0], [3, 4, 9, 0]], 1.0)
    np.testing.assert_allclose(simulated.true_poses[0], [1.2, 0, 0, 0], atol=1e-12)
    np.testing.assert_allclose(simulated.true_poses[1], [0.6, 0.8, 0, 0], atol=1e-12)


def test_a_command_that_is_no_number_moves_nobody():
    simulated = SimulatedTeam(team_of(rover()))
    simulated.step(np.full((1, 4), np.nan), 0.05)
    np.testing.assert_array_equal(simulated.true_poses, np.zeros((1, 4)))


def test_watt_hours_by_hand():
    """30 W idle + 160 W at half command for 90 s: 110 W · 90 s / 3600 s/h = 2.75 Wh."""
    battery = Battery(capacity_wh=480, idle_w=30, drive_w=160)
    simulated = SimulatedTeam(team_of(rover(battery=battery)))
    drive_on(simulated, [[0.6, 0, 0, 0.1]], 90.0)
    assert simulated.energy[0] == pytest.approx(2.75, rel=1e-9)
    assert simulated.charge[0] == pytest.approx(1 - 2.75 / 480, rel=1e-9)


def test_an_empty_battery_stands_still():
    """1 Wh at 360 W lasts 10 s."""
    battery = Battery(capacity_wh=1.0, idle_w=180, drive_w=180)
    simulated = SimulatedTeam(team_of(rover(battery=battery)))
    drive_on(simulated, [[1.2, 0, 0, 0]], 30.0)
    assert simulated.true_poses[0, 0] == pytest.approx(12.0, abs=0.1)
    assert simulated.energy[0] == pytest.approx(1.0)
    assert simulated.charge[0] == 0.0


def test_patches_slow_down_whom_they_affect_and_multiply():
    world = World(ground=(
        GroundPatch("mud", (0, 0, 5), 0.5, ("wheels",)),
        GroundPatch("slope", (0, 0, 5), 0.4, ("wheels", "tracks")),
        GroundPatch("far", (90, 0, 5), 0.0, ("wheels",)),
    ))
    robots = [
        rover(), rover("crawler", features=("tracks",)), rover("drone", features=("rotors",))
    ]
    simulated = SimulatedTeam(team_of(*robots), world)
    drive_on(simulated, [[1.0, 0, 0, 0.0]] * 3, 1.0)
    np.testing.assert_allclose(simulated.true_poses[:, 0], [0.2, 0.4, 1.0], atol=1e-12)
    drive_on(simulated, [[0.0, 0, 0, 1.0]] * 3, 1.0)
    np.testing.assert_allclose(simulated.true_poses[:, 3], 1.0)


def test_events_happen_in_their_time():
    world = World(events=(
        StalledEvent(1.0, "rover", True),
        FeatureEvent(1.0, "rover", "camera", "error"),
        PoseEvent(1.0, "rover", "silent"),
        BatteryEvent(1.0, "rover", 0.18),
        TaskEvent(1.0, "gate", move=(3.0, 4.0)),
        StalledEvent(2.0, "rover", False),
        FeatureEvent(2.0, "rover", "camera", "warn"),
        PoseEvent(2.0, "rover", "resumed"),
        TaskEvent(2.0, "gate", active=False),
    ))
    gate = Watch(name="gate", at=(1.0, 1.0))
    simulated = SimulatedTeam(team_of(rover(), tasks={"gate": gate}), world)
    drive_on(simulated, [[1.0, 0, 0, 0]], 0.95)
    assert {report.level for report in simulated.observation().health} == {0}
    drive_on(simulated, [[1.0, 0, 0, 0]], 0.05)
    assert [event.move for event in simulated.task_events] == [(3.0, 4.0)]
    assert simulated.charges()[0] == 0.18
    first = simulated.observation()
    assert first.goals[0].at == (3.0, 4.0, 0.0)
    assert first.pose_times[0] == pytest.approx(0.95)
    assert first.poses[0, 0] == pytest.approx(0.95)
    assert {r.name: r.level for r in first.health} == {"rover: wheels": 0, "rover: camera": 2}
    drive_on(simulated, [[1.0, 0, 0, 0]], 1.0)
    second = simulated.observation()
    assert second.goals == ()
    assert second.pose_times[0] == pytest.approx(2.0)
    assert second.poses[0, 0] == pytest.approx(1.0)
    assert {r.name: r.level for r in second.health} == {"rover: wheels": 0, "rover: camera": 1}
    assert [event.active for event in simulated.task_events] == [False]
    drive_on(simulated, [[1.0, 0, 0, 0]], 1.0)
    assert simulated.true_poses[0, 0] == pytest.approx(2.0)


def test_noise_is_gaussian_of_the_size_asked_for_and_seeded():
    world = World(noise=Noise(0.05, 0.035))
    robots = [rover(f"r{i}", start=(0, 0, 3.1)) for i in range(20)]
    poses = np.array([SimulatedTeam(team_of(*robots), world, seed).poses() for seed in range(100)])
    flat = poses.reshape(-1, 4)
    turn = np.angle(np.exp(1j * (flat[:, 3] - 3.1)))
    # Standard error of a standard deviation from n samples: σ / √(2 n).
    assert flat[:, 0].std() == pytest.approx(0.05, abs=5 * 0.05 / np.sqrt(2 * len(flat)))
    assert turn.std() == pytest.approx(0.035, abs=5 * 0.035 / np.sqrt(2 * len(flat)))
    np.testing.assert_array_equal(poses[7], SimulatedTeam(team_of(*robots), world, 7).poses())


@pytest.mark.parametrize(
    "pattern", ["rover_1: camera", "rover_1*camera", "*", "unit ?: [abc]*", "x[!a-z]y"]
)
def test_an_example_matches_its_pattern(pattern):
    assert fnmatch.fnmatchcase(example(pattern), pattern)


def test_each_health_rule_speaks():
    rules = (HealthRule("drivers/*: cam", "camera"), HealthRule("motor", "wheels"))
    world = World(events=(FeatureEvent(0.0, "rover", "camera", "error"),))
    reports = SimulatedTeam(team_of(rover(health=rules)), world).health()
    assert [report.level for report in reports] == [2, 0]
    assert all(fnmatch.fnmatchcase(r.name, rule.name)
               for r, rule in zip(reports, rules, strict=True))


def test_separation_is_between_surfaces_of_bodies_at_like_heights():
    robots = [rover("a", radius=0.4), rover("b", radius=0.6), rover("c", drive=DRONE)]
    site = Site(team_of(*robots), height_clearance=2.0)
    poses = np.array([[0, 0, 0, 0], [3, 4, 0, 0], [0, 0, 5, 0.0]])
    assert site.separation(poses) == (pytest.approx(4.0), (0, 1))
    assert site.separation(poses[[0, 0, 0]] + [[0, 0, 9 * i, 0] for i in range(3)]) is None


def test_out_of_bounds_is_outside_the_boundary_or_inside_a_keep_out():
    shed = KeepOut("shed", ((4, 4), (6, 4), (6, 6), (4, 6)))
    robots = [rover(f"r{i}", radius=0.5) for i in range(5)]
    team = team_of(*robots, boundary=((0, 0), (10, 0), (10, 10), (0, 10)), keep_out=(shed,))
    poses = np.zeros((5, 4))
    poses[:, :2] = [[2, 2], [0.3, 2], [-0.1, 2], [3.7, 5], [5, 5]]
    by_centre, by_body = Site(team, 2.0).outside(poses)
    assert by_centre.tolist() == [False, False, True, False, True]
    assert by_body.tolist() == [False, True, True, True, True]
