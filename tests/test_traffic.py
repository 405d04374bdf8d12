"""Robots meet, cross and make way: nobody touches, everybody arrives."""

from __future__ import annotations

import math

import numpy as np
import pytest
from builders import CAPABILITIES, Crew, robot, team_of, watch

from allocator_node.allocator import Allocator
from allocator_node.drives import Aerial, Differential, Drive, Holonomic
from allocator_node.sim.world import SimulatedTeam
from allocator_node.tasks import Patrol, Watch
from allocator_node.team import HeadCount, KeepOut, Robot, Way

PERIOD = 0.1
WHEELS = Differential(max_speed=1.0, max_turn_rate=1.5, lookahead=0.2)

Pose = tuple[float, float, float]
Place = tuple[float, float]


class Crossing:
    """Robots on their way to a place each; some have none and stand.

    Attributes:
        arrived: When each control point came within reach of its place, s; NaN: not yet.
        gap: Smallest distance between two bodies so far, m.
        driven: Way of each robot, m.
    """

    REACHED = 0.35

    def __init__(
        self,
        starts: list[Pose],
        places: list[Place | None],
        drive: Drive = WHEELS,
        radius: float = 0.3,
        **site: object,
    ) -> None:
        robots = [
            Robot(f"r{i}", drive, radius=radius, features=(f"f{i}",), start=start)
            for i, start in enumerate(starts)
        ]
        watches = [
            Watch(name=f"t{i}", at=place, each=(f"c{i}",), robots=HeadCount(1, 1))
            for i, place in enumerate(places)
            if place is not None
        ]
        own = {f"c{i}": (Way((f"f{i}",)),) for i in range(len(starts))}
        self.team = team_of(robots, watches, capabilities=own, **site)
        self.radius = radius
        self.going = [i for i, place in enumerate(places) if place is not None]
        self.places = np.array([places[i] for i in self.going])
        self.arrived = np.full(len(self.going), np.nan)
        self.gap = math.inf
        self.driven = np.zeros(len(starts))

    def play(self, seconds: float) -> Crossing:
        """Let them drive until all have arrived, or the time is over."""
        allocator, simulated = Allocator(self.team, period=PERIOD), SimulatedTeam(self.team, None)
        before = simulated.true_poses[:, :2].copy()
        while simulated.now < seconds and np.isnan(self.arrived).any():
            decision = allocator.step(simulated.observation(), simulated.now)
            for _ in range(2):
                simulated.step(decision.commands, PERIOD / 2)
                self._look(simulated, before)
        return self

    def _look(self, simulated: SimulatedTeam, before: np.ndarray) -> None:
        poses = simulated.true_poses
        self.driven += np.linalg.norm(poses[:, :2] - before, axis=1)
        before[:] = poses[:, :2]
        apart = np.linalg.norm(poses[:, None, :2] - poses[None, :, :2], axis=2)
        np.fill_diagonal(apart, np.inf)
        self.gap = min(self.gap, float(apart.min()) - 2 * self.radius)
        lead = WHEELS.lookahead * np.column_stack([np.cos(poses[:, 3]), np.sin(poses[:, 3])])
        away = np.linalg.norm((poses[:, :2] + lead)[self.going] - self.places, axis=1)
        self.arrived[np.isnan(self.arrived) & (away < self.REACHED)] = simulated.now


def circle(count: int, radius: float, seed: int | None) -> Crossing:
    """Give robots on a circle that all want to the other side; without a seed, symmetric."""
    random = np.random.default_rng(seed)
    wobble = 0.0 if seed is None else 0.06
    angles = 2 * np.pi * np.arange(count) / count + random.normal(0, 1, count) * wobble
    reach = radius + random.normal(0, 2, count) * wobble
    turned = random.normal(0, 8, count) * wobble
    starts = [
        (float(r * np.cos(a)), float(r * np.sin(a)), float(a + np.pi + t))
        for r, a, t in zip(reach, angles, turned, strict=True)
    ]
    places = [(float(-radius * np.cos(a)), float(-radius * np.sin(a))) for a in angles]
    return Crossing(starts, places)


def swapped(crossing: Crossing) -> bool:
    """Tell whether all arrived within twice the straight-line time, without a touch."""
    straight = 12.0 / WHEELS.max_speed
    return bool(crossing.arrived.max() <= 2 * straight and crossing.gap > 0)


def test_twelve_swap_sides_in_exact_symmetry():
    crossing = circle(12, 6.0, None).play(60)
    assert swapped(crossing), (crossing.arrived.max(), crossing.gap)


@pytest.mark.campaign(slice=2, whole=20)
def test_twelve_swap_sides(seed):
    crossing = circle(12, 6.0, seed).play(60)
    assert swapped(crossing), (crossing.arrived.max(), crossing.gap)


def test_two_head_on_pass_each_other_on_the_right():
    crossing = Crossing([(0, 0, 0), (10, 0, math.pi)], [(10, 0), (0, 0)]).play(30)
    assert crossing.arrived.max() < 20
    assert crossing.gap > 0


def test_two_meet_in_a_corridor_that_fits_one():
    """The bodies and the margins they keep fill the corridor: one must back out."""
    walls = (
        KeepOut("north", ((2, 1), (8, 1), (8, 3), (2, 3))),
        KeepOut("south", ((2, -3), (8, -3), (8, -1), (2, -1))),
    )
    crossing = Crossing([(-1, 0, 0), (11, 0, math.pi)], [(11, 0), (-1, 0)], keep_out=walls)
    assert crossing.play(90).gap > 0
    assert crossing.arrived.max() < 90


def test_a_robot_without_a_task_makes_way():
    crossing = Crossing([(0, 0, 0), (5, 0, 0)], [(10, 0), None]).play(30)
    assert crossing.arrived[0] < 15
    assert crossing.driven[1] > 0.3


def test_a_robot_without_a_task_in_nobodys_way_stands():
    crossing = Crossing([(0, 0, 0), (5, 6, 0)], [(10, 0), None]).play(30)
    assert crossing.driven[1] == 0


def test_a_robot_that_stands_on_another_ones_place_leaves_it():
    crossing = Crossing([(0, 0, 0), (10, 0, 0)], [(10, 0), None]).play(40)
    assert np.isfinite(crossing.arrived).all()


def test_robots_deep_inside_each_others_margin_come_apart_calmly():
    """They start 5 cm apart where 30 cm and both look-aheads are asked for."""
    crossing = Crossing([(0, 0, 0), (0.65, 0, 0)], [(-6, 0), (6, 0)]).play(30)
    assert np.isfinite(crossing.arrived).all()
    assert crossing.gap > 0.0


def test_a_patrol_passes_a_waypoint_that_somebody_stuck_stands_on():
    loop = Patrol(name="rows", waypoints=((0, 0), (8, 0), (8, 6), (0, 6)), laps=1,
                  needs={"scan": 1.0}, robots=HeadCount(1, 1))  # fmt: skip
    scout = Robot("scout", WHEELS, radius=0.3, features=("camera", "gimbal"), start=(0, 3, 0))
    stone = Robot("stone", WHEELS, radius=0.3, start=(8, 0, 0))
    team = team_of([scout, stone], [loop], capabilities=CAPABILITIES)
    allocator, simulated = Allocator(team, period=PERIOD), SimulatedTeam(team, None)
    while simulated.now < 80:
        decision = allocator.step(simulated.observation(), simulated.now)
        commands = decision.commands.copy()
        commands[1] = 0.0  # it does not obey
        for _ in range(2):
            simulated.step(commands, PERIOD / 2)
    assert decision.finished == {"rows"}


def test_a_flying_robot_and_one_on_the_ground_ignore_each_other():
    drives = {"rover": WHEELS, "drone": Aerial(max_speed=2.0, height=(4, 8))}
    robots = [
        Robot("rover", drives["rover"], radius=0.3, features=("wheels",), start=(0, 0, 0)),
        Robot("drone", drives["drone"], radius=0.3, features=("rotors",), start=(10, 0, math.pi)),
    ]
    watches = [
        Watch(name="east", at=(10, 0), each=("drives",)),
        Watch(name="west", at=(0, 0), each=("flies",)),
    ]
    skills = {"drives": (Way(("wheels",)),), "flies": (Way(("rotors",)),)}
    team = team_of(robots, watches, capabilities=skills)
    allocator, simulated = Allocator(team, period=PERIOD), SimulatedTeam(team, None)
    sideways = 0.0
    while simulated.now < 14:
        decision = allocator.step(simulated.observation(), simulated.now)
        simulated.step(decision.commands, PERIOD)
        sideways = max(sideways, float(np.abs(simulated.true_poses[:, 1]).max()))
    assert sideways < 0.05
    assert np.hypot(*(simulated.true_poses[0, :2] - (10, 0))) < 0.6
    assert np.hypot(*(simulated.true_poses[1, :2] - (0, 0))) < 0.6


@pytest.mark.parametrize("drive", [WHEELS, Holonomic(max_speed=1.0)], ids=["wheels", "omni"])
def test_robots_on_the_ground_keep_apart_whatever_their_localizations_say_of_height(drive) -> None:
    """One by satellite, with the height above the sea, the other by odometry in a plane."""
    crew = Crew(
        team_of(
            [robot("one", 0, 0, drive=drive), robot("two", 20, 0.2, math.pi, drive=drive)],
            [watch("east", 20, 0), watch("west", 0, 0.2)],
        )
    )
    crew.order(pins=frozenset({("one", "east"), ("two", "west")}))
    least = math.inf
    for _ in range(300):
        crew.poses[1, 2] = 350.0
        crew.drive(0.1)
        least = min(least, math.dist(crew.poses[0, :2], crew.poses[1, :2]))
    assert least > 0.8  # two bodies of 0.4 m
    assert math.dist(crew.poses[0, :2], (20, 0)) < 1.0


def test_a_drone_passes_over_what_is_far_below_it() -> None:
    drone = robot("drone", 0, 0, drive=Aerial(max_speed=1.0, height=(3.0, 6.0)))
    crew = Crew(team_of([drone, robot("rover", 5, 0)], [watch("east", 10, 0, 4.0)]))
    crew.order(pins=frozenset({("drone", "east")}))
    crew.poses[0, 2] = 4.0
    least = math.inf
    for _ in range(150):
        crew.drive(0.1)
        least = min(least, math.dist(crew.poses[0, :2], crew.poses[1, :2]))
    assert least < 0.3
