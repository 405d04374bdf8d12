"""Drive models at work: cars, flying robots, slow starters, robots with their own navigation.

The whole campaigns: python3 -m pytest tests/test_drives.py --whole
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from builders import ROVER, Crew, robot, team_of, watch

from allocator_node.decision import Level, goal_pose
from allocator_node.drives import Aerial, Carlike, Differential, Fleet, Holonomic
from allocator_node.program.dubins import SIDES, TURNS, WORDS, dubins, sampled, traced
from allocator_node.sim import rehearsal as rehearsals
from allocator_node.sim.motion import advance
from allocator_node.sim.navigation import steer
from allocator_node.sim.rehearsal import rehearse
from allocator_node.sim.world import SimulatedTeam
from allocator_node.sim.world_file import Noise, World
from allocator_node.tasks import Patrol, Visit
from allocator_node.team import CommandSink, HeadCount, KeepOut
from allocator_node.team_file import read_team

CONFIG = Path(__file__).parents[1] / "config"
CAR = Carlike(max_speed=1.5, min_turn_radius=2.0, lookahead=0.5)
DRONE = Aerial(max_speed=3.0, max_climb=1.0, height=(4.0, 8.0))
ONE = HeadCount(1, 1)


class Watched(SimulatedTeam):
    """A simulated team that keeps what it was told and where it was.

    Attributes:
        told: Commands of every step, each (N, 4), and its length, s.
        been: Poses after every step, each (N, 4).
    """

    def __init__(self, *arguments):
        super().__init__(*arguments)
        self.told, self.been = [], []

    def step(self, commands, dt):
        super().step(commands, dt)
        self.told.append((commands.copy(), dt))
        self.been.append(self.true_poses.copy())


@pytest.fixture
def watched(monkeypatch):
    """Let rehearsals run on a watched team; give the list it will be in."""
    teams = []

    def make(*arguments):
        teams.append(Watched(*arguments))
        return teams[-1]

    monkeypatch.setattr(rehearsals, "SimulatedTeam", make)
    return teams


# -- cars -------------------------------------------------------------------------


def poses_anywhere(random, count):
    return np.column_stack([random.uniform(-6, 6, (count, 2)), random.uniform(-4, 4, count)])


def test_every_word_leads_to_its_end():
    random = np.random.default_rng(0)
    starts, ends = poses_anywhere(random, 200), poses_anywhere(random, 200)
    pieces = dubins(starts, ends, radius=1.5)
    found = np.isfinite(pieces).all(axis=2)
    assert found.sum(axis=0).min() > 50
    for i, w in np.argwhere(found):
        curved = [SIDES[letter] / 1.5 for letter in WORDS[w]]
        last = traced(starts[i], list(zip(curved, pieces[i, w], strict=True)), 0.5)[-1]
        np.testing.assert_allclose(last[:2], ends[i, :2], atol=1e-6)
        assert np.cos(last[2] - ends[i, 2]) == pytest.approx(1.0, abs=1e-9)


def test_shortest_paths_by_hand():
    """Straight on; half and quarter circles; two turns with a straight piece between."""
    here = np.zeros((1, 3))
    for end, length in (
        ((5.0, 0.0, 0.0), 5.0),
        ((0.0, 4.0, np.pi), 2 * np.pi),
        ((2.0, 2.0, np.pi / 2), np.pi),
        ((3.0, 6.0, np.pi / 2), np.pi + 17**0.5),  # circles about (0, 2) and (1, 6)
    ):
        found = dubins(here, np.array([end]), radius=2.0).sum(axis=-1).min()
        assert found == pytest.approx(length)


def test_many_paths_at_once_are_the_paths_one_by_one():
    random = np.random.default_rng(2)
    starts, ends = poses_anywhere(random, 30), poses_anywhere(random, 30)
    pieces, curvatures = dubins(starts, ends, 1.5)[:, 0], np.tile(TURNS[0] / 1.5, (30, 1))
    many = sampled(starts, curvatures, pieces, 20)
    for i, path in enumerate(many):
        for share in (7, 20):
            way, parts = pieces[i].sum() * share / 20, []
            for curvature, length in zip(curvatures[i], pieces[i], strict=True):
                parts.append((curvature, min(length, way)))
                way -= parts[-1][1]
            alone = traced(starts[i], parts, 0.1)[-1]
            np.testing.assert_allclose(path[share - 1], alone, atol=1e-9)


def test_no_sampled_way_is_shorter_than_the_shortest():
    """Random controls of bounded curvature: where they end, they took no shorter way."""
    random = np.random.default_rng(1)
    for _ in range(200):
        parts = [(random.uniform(-1, 1) / 1.5, random.uniform(0, 4)) for _ in range(4)]
        start = poses_anywhere(random, 1)[0]
        end = traced(start, parts, 1.0)[-1]
        shortest = dubins(start[None], end[None], 1.5).sum(axis=-1).min()
        assert shortest <= sum(length for _, length in parts) + 1e-6


@pytest.mark.parametrize("reverse", [False, True])
@pytest.mark.parametrize(
    ("at", "heading"),
    [
        ((0.5, 1.5), None),  # inside the turning circle
        ((-1.0, 0.0), None),  # right behind
        ((8.0, 3.0), -1.5),
        ((1.0, 0.0), 3.14),  # where it stands, but turned round
        ((0.0, 4.0), 0.0),  # beside it
    ],
)
def test_a_car_reaches_poses_that_need_it(at, heading, reverse):
    drive = replace(CAR, reverse=reverse)
    visit = Visit(name="there", at=at, heading=heading, tolerance=0.3, dwell=2.0, robots=ONE)
    crew = Crew(team_of([robot("car", 0, 0, drive=drive)], [visit]))
    for _ in range(250):
        decision = crew.drive(0.2)
        vx, turn = decision.commands[0, [0, 3]]
        assert abs(turn) <= abs(vx) / 2.0 * (1 + 1e-12)
        assert reverse or vx >= 0
        if decision.finished:
            break
    assert decision.finished == {"there"}
    there = Fleet([drive]).control_points(crew.poses)[0, :2]
    assert np.hypot(*(there - at)) <= 1.5 * 0.3
    if heading is not None:
        assert abs(np.angle(np.exp(1j * (crew.poses[0, 3] - heading)))) <= 0.2


def car_park(seed):
    """Four cars of all sorts on a site with a shed: visits, at a heading or not, and rounds."""
    random = np.random.default_rng(seed)
    starts = [(7, 7, 0.8), (23, 7, 2.3), (7, 23, -0.8), (23, 23, -2.3)]
    robots = [
        robot(
            f"car_{i}", *start[:2], start[2] + random.uniform(-0.5, 0.5), radius=0.6,
            drive=Carlike(
                max_speed=random.uniform(0.8, 2), min_turn_radius=random.uniform(1, 2.5),
                reverse=bool(random.integers(2)), max_acceleration=random.uniform(0.5, 2),
            ),
        )
        for i, start in enumerate(starts)
    ]  # fmt: skip
    tasks = [
        Visit(
            name=f"visit_{i}", at=tuple(random.uniform((5, 5), (25, 11))), robots=ONE,
            heading=random.uniform(-3, 3) if i % 2 else None,
        )
        for i in range(4)
    ]  # fmt: skip
    rounds = Patrol(name="rounds", waypoints=((6, 6), (24, 6), (24, 24), (6, 24)), robots=ONE)
    shed = KeepOut("shed", ((13, 14), (17, 14), (17, 17), (13, 17)))
    boundary = ((0, 0), (30, 0), (30, 30), (0, 30))
    return team_of(robots, [*tasks, rounds], boundary=boundary, keep_out=(shed,))


@pytest.mark.campaign(slice=3, whole=20)
def test_cars_never_turn_tighter_than_they_can(seed, watched):
    team = car_park(seed)
    noise = Noise(position_m=0.02, heading_rad=0.01)
    rehearsal = rehearse(team, World(noise=noise), seconds=60, seed=seed)
    drives = [r.drive for r in team.robots.values()]
    moved = 0.0
    for commands, dt in watched[0].told:
        for (vx, vy, _, turn), drive in zip(commands, drives, strict=True):
            assert abs(turn) * drive.min_turn_radius <= abs(vx) * (1 + 1e-9)
            assert vy == 0 and abs(vx) <= drive.max_speed and (vx >= 0 or drive.reverse)
            moved += abs(vx) * dt
    assert moved > 60
    assert len(rehearsal.finished) >= 3
    assert rehearsal.min_separation_m > 0
    assert rehearsal.body_violations == rehearsal.boundary_violations == 0
    # What really happened, pose by pose: the chord of an arc is shorter than the arc.
    been = np.array(watched[0].been)
    turned = np.abs(np.angle(np.exp(1j * np.diff(been[..., 3], axis=0))))
    arc = np.hypot(*np.moveaxis(np.diff(been[..., :2], axis=0), 2, 0)) * np.pi / 2
    radius = [drive.min_turn_radius for drive in drives]
    assert (turned * radius <= arc + 1e-9).all()


@pytest.mark.parametrize("offset", [0.0, 0.4, -0.4])
def test_cars_that_meet_head_on_pass(offset):
    """Neither may back up; exactly face to face, and a little beside each other."""
    cars = [
        robot("east", 0, 0, 0, drive=CAR, features=("camera",)),
        robot("west", 24, offset, np.pi, drive=CAR, features=("tracks",)),
    ]
    goals = [watch("e", 24, 0, needs={"scan": 0.6}), watch("w", 0, offset, needs={"rough": 1.0})]
    team = team_of(cars, goals)
    simulated, crew = SimulatedTeam(team), Crew(team)
    apart = np.inf
    for step in range(350):
        decision = crew.allocator.step(simulated.observation(), 0.1 * step)
        simulated.step(decision.commands, 0.1)
        apart = min(apart, np.hypot(*(np.diff(simulated.true_poses[:, :2], axis=0)[0])) - 0.8)
    assert apart > 0
    points = Fleet([CAR, CAR]).control_points(simulated.true_poses)
    assert np.hypot(*(points[0, :2] - (24, 0))) < 0.5
    assert np.hypot(*(points[1, :2] - (0, offset))) < 0.5


def test_a_simulated_car_does_no_more_than_a_car_can():
    """It is told to spin, to back up, and to do both."""
    fleet = Fleet([CAR, replace(CAR, reverse=True)])
    told = np.array([[[0, 0, 0, 1.0]] * 2, [[-1, 0.5, 0, 1.0]] * 2, [[9, 0, 0, -9]] * 2])
    done = np.array([fleet.clipped(np.array(commands)) for commands in told])
    np.testing.assert_allclose(done[:, 0], [[0, 0, 0, 0], [0, 0, 0, 0], [1.5, 0, 0, -0.75]])
    np.testing.assert_allclose(done[:, 1], [[0, 0, 0, 0], [-1, 0, 0, 0.5], [1.5, 0, 0, -0.75]])


def test_carts_bring_modules(watched):
    team = read_team(CONFIG / "module_carts.yaml")
    rehearsal = rehearse(team, World(noise=Noise(0.02, 0.01)), seconds=150, seed=1)
    assert set(rehearsal.finished) == {"unload", "hook_on", "hoist"}
    assert rehearsal.coverage["supply_round"] > 0.95
    assert rehearsal.min_separation_m > 0
    assert rehearsal.body_violations == rehearsal.boundary_violations == 0
    backwards = sum(dt for commands, dt in watched[0].told if commands[2, 0] < 0)
    assert backwards > 1.0  # the loader's first goal is right behind it
    assert all((commands[:2, 0] >= 0).all() for commands, _ in watched[0].told)


# -- flying robots ------------------------------------------------------------------


def test_a_drone_flies_over_a_rover_and_neither_yields():
    """As if each were alone: the same commands, to the last digit."""
    drone = robot("drone", 0, 0, drive=DRONE, features=("camera",))
    rover = robot("rover", 8, 0, np.pi, drive=ROVER, features=("tracks",))
    over = watch("over", 8, 0, needs={"scan": 0.6})
    under = watch("under", 0, 0, needs={"rough": 1.0})
    together = Crew(team_of([drone, rover], [over, under]))
    alone = [Crew(team_of([drone], [over])), Crew(team_of([rover], [under]))]
    for crew in (together, *alone):
        crew.poses[crew.poses[:, 0] == 0, 2] = 4.0
    nearest = np.inf
    for _ in range(120):
        commands = together.drive(0.1).commands
        expected = [crew.drive(0.1).commands[0] for crew in alone]
        np.testing.assert_allclose(commands, expected, atol=1e-12)
        nearest = min(nearest, np.hypot(*(together.poses[0] - together.poses[1])[:2]))
    assert nearest < 0.2


def test_a_drone_starts_from_the_ground_and_keeps_its_band():
    """From below the band it climbs; goals beyond the band are taken at its edge."""
    low = Visit(name="low", at=(6.0, 0.0, 4.2), robots=ONE, dwell=1.0, tolerance=0.4)
    high = Visit(name="high", at=(0.0, 6.0, 30.0), robots=ONE, after=("low",), tolerance=0.4)
    crew = Crew(team_of([robot("drone", 0, 0, drive=DRONE)], [low, high]))
    heights = []
    for _ in range(300):
        decision = crew.drive(0.1)
        heights.append(crew.poses[0, 2])
        assert abs(decision.commands[0, 2]) <= 1.0
    inside = int(np.argmax(np.array(heights) > 3.9))
    assert 30 < inside < 120 and (np.diff(heights[:inside]) >= 0).all()
    assert min(heights[inside:]) > 3.9 and max(heights) < 8.0
    assert np.hypot(*(crew.poses[0, :2] - (0, 6))) < 0.4 and crew.poses[0, 2] > 7.5


def test_a_third_number_is_the_height_it_flies_at():
    visit = Visit(name="module", at=(5.0, 3.0, 6.5), robots=ONE, dwell=5.0, tolerance=0.3)
    crew = Crew(team_of([robot("drone", 0, 0, drive=DRONE)], [visit]))
    crew.poses[0, 2] = 4.0
    for _ in range(150):
        if crew.drive(0.2).finished:
            break
    np.testing.assert_allclose(crew.poses[0, :3], (5.0, 3.0, 6.5), atol=0.3)


def test_drones_over_mowers(watched):
    team = read_team(CONFIG / "thermal_flight.yaml")
    rehearsal = rehearse(team, World(noise=Noise(0.02, 0.01)), seconds=120, seed=1)
    assert set(rehearsal.finished) == {"hot_spot"}
    assert min(rehearsal.coverage["overflight"], rehearsal.coverage["mowing"]) > 0.95
    assert rehearsal.min_separation_m > 0
    been = np.array(watched[0].been)
    assert 5.0 <= been[:, :2, 2].min() and been[:, :2, 2].max() <= 9.0
    apart = np.hypot(*np.moveaxis(been[:, 0, :2] - been[:, 2, :2], 1, 0))
    assert apart.min() < 1.0  # right over a mower
    speed = np.hypot(*np.moveaxis(np.diff(been[:, 0, :2], axis=0), 1, 0)) / 0.05
    assert speed[np.flatnonzero(apart[1:] < 2.0)].min() > 2.0  # and it did not slow down


# -- speeding up -----------------------------------------------------------------


SLOW_STARTERS = [
    Differential(max_speed=2.0, max_acceleration=0.5),
    Holonomic(max_speed=2.0, max_acceleration=0.8),
    Carlike(max_speed=2.0, max_acceleration=0.6, reverse=True),
    Aerial(max_speed=3.0, max_acceleration=1.0),
]


def test_nobody_speeds_up_faster_than_it_may(watched):
    """Axis by axis; with two that cross each other's way, so that they must slow down too."""
    places = [(0, 0), (20, 1), (10, -8), (0, 10)]
    goals = [(20, 0), (0, 1), (10, 12), (20, 10)]
    robots = [
        robot(f"r{i}", *at, drive=drive, features=(f"f{i}",))
        for i, (at, drive) in enumerate(zip(places, SLOW_STARTERS, strict=True))
    ]
    team = team_of(robots, [watch(f"w{i}", *at, each=(f"c{i}",)) for i, at in enumerate(goals)])
    from allocator_node.team import Way

    team = replace(team, capabilities={f"c{i}": (Way((f"f{i}",)),) for i in range(4)})
    rehearse(team, World(noise=Noise(0.02, 0.01)), seconds=30, seed=3)
    commands = np.array([commands for commands, _ in watched[0].told])[::2, :, :3]
    before, now = commands[:-1], commands[1:]
    same_way = np.where(np.sign(now) == np.sign(before), np.abs(before), 0.0)
    faster = np.abs(now) - same_way
    limits = np.array([drive.max_acceleration for drive in SLOW_STARTERS]) * 0.1
    assert (faster <= limits[:, None] + 1e-9).all()
    assert (np.abs(now).max(axis=(0, 2)) > 1.0).all()
    # The limit was what held them back, not something else.
    assert (faster.max(axis=(0, 2)) > 0.99 * limits).all()


@pytest.mark.parametrize("drive", SLOW_STARTERS, ids=lambda drive: drive.model)
def test_slowing_down_is_never_delayed(drive):
    """From full speed to nothing within one period, when the operator says hold."""
    crew = Crew(team_of([robot("r", 0, 0, drive=drive)], [watch("far", 60, 0)]))
    assert np.abs(crew.drive(8.0).commands[0, 0]) > 1.5
    crew.order(hold=True)
    assert not crew.step().commands.any()


# -- robots with their own navigation ------------------------------------------------


def mule(*at, **more):
    """Give a robot that is sent goals."""
    sink = CommandSink("mule/goal", "geometry_msgs/msg/PoseStamped")
    return robot("mule", *at, command=sink, **{"drive": ROVER} | more)


def test_a_robot_with_its_own_navigation_is_sent_goals_and_headings():
    visit = Visit(name="there", at=(5.0, 0.0), heading=1.2, robots=ONE)
    decision = Crew(team_of([mule(0, 0)], [visit])).step()
    assert not decision.commands.any()
    assert decision.navigates.tolist() == [True]
    np.testing.assert_allclose(decision.goals[0, :2], (5, 0))
    assert decision.facing[0] == pytest.approx(1.2)


def test_where_a_robot_with_its_own_navigation_is_sent():
    here, nan = np.array([1.0, 1.0, 0.5, 2.0]), np.nan
    np.testing.assert_array_equal(goal_pose(here, np.full(3, nan), nan), here)
    np.testing.assert_allclose(
        goal_pose(here, np.array([1, 5, nan]), nan), (1, 5, 0.5, np.pi / 2)
    )
    np.testing.assert_allclose(goal_pose(here, np.array([1, 5, 3.0]), -1.0), (1, 5, 3, -1))
    np.testing.assert_allclose(goal_pose(here, np.array([1.1, 1, nan]), nan), (1.1, 1, 0.5, 2))


def driven_mule(crew, seconds, grip=1.0):
    """Let the mule navigate and everybody else obey."""
    for _ in range(round(seconds / crew.period)):
        decision = crew.step()
        commands = rehearsals.driven(crew.team, decision, crew.poses)
        commands[0] *= grip
        crew.poses = advance(crew.poses, commands, crew.period)
    return decision


def test_its_efficacy_is_judged_by_its_nominal_speed():
    tasks = [Patrol(name="rounds", waypoints=((20.0, 0.0), (0.0, 0.0)), robots=ONE)]
    good, bad = (Crew(team_of([mule(0, 0)], tasks)) for _ in range(2))
    assert driven_mule(good, 15).efficacy[0, 0] > 0.95
    assert driven_mule(bad, 15, grip=0.3).efficacy[0, 0] < 0.6


def test_a_mule_arrived_or_held_is_not_judged():
    crew = Crew(team_of([mule(0, 0)], [watch("far", 20, 0)]))
    crew.order(hold=True)
    assert crew.wait(10).efficacy[0, 0] == 1.0
    near = Crew(team_of([mule(0, 0)], [watch("here", 0.1, 0)]))
    assert near.wait(10).efficacy[0, 0] == 1.0


def test_others_keep_clear_of_a_robot_that_takes_no_commands(watched):
    """It drives straight at another one that comes towards it; that one makes way."""
    team = team_of(
        [mule(0, 0, features=("tracks",)), robot("omni", 6, 0, features=("camera",))],
        [watch("end", 12, 0, each=("rough",)), watch("start", 0, 0, needs={"scan": 0.6})],
    )  # fmt: skip
    rehearsal = rehearse(team, World(noise=Noise(0.02, 0.01)), seconds=30)
    assert rehearsal.min_separation_m > 0
    last = watched[0].been[-1][:, :2]
    np.testing.assert_allclose(last, [(12, 0), (0, 0)], atol=0.35)
    # The mule went straight on, as if nobody had been there.
    assert np.abs(np.array(watched[0].been)[:, 0, 1]).max() < 0.3


def test_nobody_waits_for_a_mule_to_make_way():
    """Rows with it bind the others only."""
    crew = Crew(team_of([mule(0, 0), robot("omni", 1.5, 0)], [watch("w", -5, 0)]))
    decision = crew.step()
    assert not any(n.level is Level.ERROR for n in decision.notices)
    assert not decision.commands[0].any()


def test_it_is_rehearsed_like_the_others():
    tasks = [Visit(name="there", at=(8.0, 3.0), heading=-1.0, dwell=2.0, robots=ONE)]
    rehearsal = rehearse(team_of([mule(0, 0, 2.0)], tasks), None, seconds=30)
    assert "there" in rehearsal.finished


@pytest.mark.parametrize("goal", [(6, 2), (0.5, 1.0), (-3, 1)])
def test_a_simulated_car_navigates_to_goals(goal):
    pose, target = np.zeros(4), np.array([*goal, 0, 0.0])
    for _ in range(1200):
        command = steer(CAR, pose, target)
        np.testing.assert_allclose(Fleet([CAR]).clipped(command[None])[0], command, atol=1e-12)
        pose = advance(pose[None], command[None], 0.05)[0]
    assert np.hypot(*(pose[:2] - goal)) <= 0.3
