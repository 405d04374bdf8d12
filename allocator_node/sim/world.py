"""The simulated team: where its robots really are, and what they report."""

from __future__ import annotations

import fnmatch
from collections.abc import Sequence

import numpy as np

from ..drives import Fleet
from ..observation import HealthReport, MovedGoal, Observation, TargetPose
from ..team import Robot, Team
from .motion import advance, turned, wrapped
from .world_file import BatteryEvent, FeatureEvent, PoseEvent, StalledEvent, TaskEvent, World

LEVELS = {"ok": 0, "warn": 1, "error": 2}
"""Level in a world file to ``DiagnosticStatus.level``."""

HEALTH_PERIOD = 1.0
"""Diagnostics arrive this often, s, and at once when something changes."""

DOCKED = 0.6
"""Distance of a control point from its robot's dock within which it charges, m."""

STANDING = 0.05
"""Speed below which a robot stands, m/s."""

DUE = 1e-9
"""Events count as due this much early, s: sums of time steps are not exact."""


class SimulatedTeam:
    """Robots that obey commands on a ground that is not always good, with events.

    Attributes:
        now: Simulated time, s.
        true_poses: Poses of the axles: x, y, z (m), heading (rad), shape (N, 4).
        charge: True battery charges 0..1, shape (N,).
        energy: Energy used so far, Wh, shape (N,).
        reporting: Which robots report their pose, shape (N,).
        stalled: Which robots cannot move, shape (N,).
        task_events: Events about tasks that became due in the last step.
    """

    def __init__(self, team: Team, world: World | None = None, seed: int = 0) -> None:
        self._team, self._world = team, world or World()
        robots = list(team.robots.values())
        count = len(robots)
        self.robots = tuple(team.robots)
        self._index = {name: i for i, name in enumerate(self.robots)}
        self._fleet = Fleet([robot.drive for robot in robots])
        self._capacity = np.array([robot.battery.capacity_wh for robot in robots])
        self._idle = np.array([robot.battery.idle_w for robot in robots])
        self._drive = np.array([robot.battery.drive_w for robot in robots])
        self._charge = np.array([robot.battery.charge_w for robot in robots])
        self._docks = np.array([robot.dock or (np.nan, np.nan) for robot in robots])
        self._patches = [
            (patch, np.array([bool(set(patch.affects) & set(r.features)) for r in robots]))
            for patch in self._world.ground
        ]
        self._rules = [
            (i, rule.feature, example(rule.name)) for i, r in enumerate(robots) for rule in r.health
        ]
        self._random = np.random.default_rng(seed)

        self.now = 0.0
        self.true_poses = starting_poses(robots)
        self.charge = np.ones(count)
        self.energy = np.zeros(count)
        self.reporting = np.ones(count, dtype=bool)
        self.stalled = np.zeros(count, dtype=bool)
        self.task_events: tuple[TaskEvent, ...] = ()
        self._levels: dict[tuple[int, str], int] = {}
        self._body = np.zeros((count, 4))
        self._upcoming = list(self._world.events)
        self._moved: list[MovedGoal] = []
        self._health_due = 0.0
        self._heard_poses = np.full((count, 4), np.nan)
        self._heard_velocities = np.full((count, 4), np.nan)
        self._heard_times = np.full(count, np.nan)
        self._happen()

    def step(self, commands: np.ndarray, dt: float) -> None:
        """Drive for a time dt, exactly for these constant commands; then events happen.

        What the ground lets through is taken where the step starts.

        Args:
            commands: vx, vy, vz (m/s), ω (rad/s) in the body frame, shape (N, 4);
                NaN counts as zero.
            dt: Time, s.
        """
        commands = self._fleet.clipped(np.nan_to_num(np.asarray(commands, dtype=float)))
        commands[self.charge <= 0] = 0.0
        self._body = commands.copy()
        grip = self._grip()
        self._body[:, :3] *= grip[:, None]
        # A slower car turns more slowly on the same circle.
        self._body[self._fleet.steered, 3] *= grip[self._fleet.steered]
        self._body[self.stalled] = 0.0
        self.true_poses = advance(self.true_poses, self._body, dt)
        self._drain(commands, dt)
        self.now += dt
        self._happen()

    def poses(self) -> np.ndarray:
        """Give the poses as measured now, with fresh noise, shape (N, 4)."""
        noise = self._world.noise
        poses = self.true_poses.copy()
        ground = poses[:, :2].shape
        poses[:, :2] += noise.position_m * self._random.standard_normal(ground)
        turn = noise.heading_rad * self._random.standard_normal(len(poses))
        poses[:, 3] = wrapped(poses[:, 3] + turn)
        return poses

    def velocities(self) -> np.ndarray:
        """Give the velocities of the axles in the site frame, m/s and rad/s, shape (N, 4)."""
        velocities = self._body.copy()
        velocities[:, :2] = turned(self._body[:, :2], self.true_poses[:, 3])
        return velocities

    def charges(self) -> np.ndarray:
        """Give the battery charges 0..1, shape (N,)."""
        return self.charge.copy()

    def health(self) -> list[HealthReport]:
        """Give one report for each health rule of each robot."""
        return [
            HealthReport(name, level, "" if level == 0 else f"{feature} simulated as failing")
            for robot, feature, name in self._rules
            for level in [self._levels.get((robot, feature), 0)]
        ]

    def observation(self) -> Observation:
        """Give what was heard since the last observation; silent robots stay as last heard."""
        heard = self.reporting
        self._heard_poses[heard] = self.poses()[heard]
        self._heard_velocities[heard] = self.velocities()[heard]
        self._heard_times[heard] = self.now
        health: Sequence[HealthReport] = ()
        if self.now >= self._health_due - DUE:
            health, self._health_due = self.health(), self.now + HEALTH_PERIOD
        goals, self._moved = tuple(self._moved), []
        return Observation(
            poses=self._heard_poses.copy(),
            pose_times=self._heard_times.copy(),
            velocities=self._heard_velocities.copy(),
            charges=self.charges(),
            charge_times=np.full(len(self.robots), self.now),
            health=tuple(health),
            goals=goals,
            targets={
                topic: TargetPose(pose, self.now) for topic, pose in self.target_poses().items()
            },
        )

    def target_poses(self) -> dict[str, np.ndarray]:
        """Give where the world's targets are: topic to x, y, z (m), heading (rad), (4,)."""
        poses = {}
        for target in self._world.targets:
            times, *way = np.array(target.path).T
            x, y = (np.interp(self.now, times, part) for part in way)
            leg = int(np.clip(np.searchsorted(times, self.now, "right"), 1, max(len(times) - 1, 1)))
            ahead = [part[min(leg, len(times) - 1)] - part[leg - 1] for part in way]
            poses[target.topic] = np.array([x, y, 0.0, np.arctan2(ahead[1], ahead[0])])
        return poses

    def _grip(self) -> np.ndarray:
        """Give the share of speed the ground leaves each robot, (N,); patches multiply."""
        grip = np.ones(len(self.robots))
        for patch, affected in self._patches:
            x, y, radius = patch.circle
            away = np.hypot(self.true_poses[:, 0] - x, self.true_poses[:, 1] - y)
            grip[affected & (away <= radius)] *= patch.keeps
        return grip

    def _drain(self, commands: np.ndarray, dt: float) -> None:
        """Take idle power, and drive power by the share of full command, from the batteries."""
        limits = np.where(self._fleet.limits > 0, self._fleet.limits, np.inf)
        shares = np.abs(commands) / limits
        shares[:, 0] = np.hypot(commands[:, 0], commands[:, 1]) / self._fleet.max_speed
        watts = self._idle + self._drive * np.clip(shares.max(axis=1), 0.0, 1.0)
        docked = self.docked()
        watts[docked] = 0.0
        used = np.minimum(watts * dt / 3600.0, self.charge * self._capacity)
        self.energy += used
        gained = np.where(docked, self._charge, 0.0) * dt / 3600.0
        self.charge = np.clip(self.charge + (gained - used) / self._capacity, 0.0, 1.0)

    def docked(self) -> np.ndarray:
        """Tell which robots stand in their docks, which then feed and charge them, (N,)."""
        points = self._fleet.control_points(self.true_poses)
        away = np.linalg.norm(points[:, :2] - self._docks, axis=1)
        standing = np.abs(self._body[:, :3]).max(axis=1) < STANDING
        return (away <= DOCKED) & standing

    def _happen(self) -> None:
        """Let the events that are due happen."""
        tasks = []
        while self._upcoming and self._upcoming[0].at <= self.now + DUE:
            event = self._upcoming.pop(0)
            match event:
                case FeatureEvent():
                    self._levels[self._index[event.robot], event.feature] = LEVELS[event.level]
                    self._health_due = self.now
                case PoseEvent():
                    self.reporting[self._index[event.robot]] = event.pose == "resumed"
                case BatteryEvent():
                    self.charge[self._index[event.robot]] = event.battery
                case StalledEvent():
                    self.stalled[self._index[event.robot]] = event.stalled
                case TaskEvent():
                    tasks.append(event)
                    if event.move is not None:
                        self._moved.append(moved_goal(self._team, event))
        self.task_events = tuple(tasks)


def moved_goal(team: Team, event: TaskEvent) -> MovedGoal:
    """Give the goal an event moves; a task that has a height keeps it."""
    at = getattr(team.tasks[event.task], "at", ())
    return MovedGoal(event.task, (*event.move, at[2] if len(at) == 3 else 0.0))


def starting_poses(robots: Sequence[Robot]) -> np.ndarray:
    """Give the start of each robot; flying ones at the lowest height they may have; (N, 4)."""
    poses = np.zeros((len(robots), 4))
    for pose, robot in zip(poses, robots, strict=True):
        band = robot.drive.height_band
        pose[:] = (*robot.start[:2], band[0] if band else 0.0, robot.start[2])
    return poses


def example(pattern: str) -> str:
    """Give a name that a shell pattern matches; a name without wildcards is its own example."""
    name, rest = "", pattern
    while rest:
        if rest[0] == "*":
            rest = rest[1:]
        elif rest[0] == "?":
            name, rest = name + "1", rest[1:]
        elif rest[0] == "[" and (end := rest.find("]", 2)) > 0:
            choice, rest = rest[: end + 1], rest[end + 1 :]
            name += next(c for c in map(chr, range(32, 127)) if fnmatch.fnmatchcase(c, choice))
        else:
            name, rest = name + rest[0], rest[1:]
    return name
