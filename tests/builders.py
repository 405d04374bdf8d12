"""Small teams, random programs, and a team that stands where a test puts it."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from allocator_node.allocator import Allocator
from allocator_node.decision import Cause, Decision, Reallocation
from allocator_node.drives import Differential, Holonomic
from allocator_node.observation import HealthReport, MovedGoal, Observation
from allocator_node.program import Problem
from allocator_node.settings import Settings
from allocator_node.sim.motion import advance
from allocator_node.tasks import Task, Watch
from allocator_node.team import HeadCount, Robot, Team, Way

OK, WARN, ERROR, STALE = 0, 1, 2, 3
"""Levels of diagnostic_msgs/msg/DiagnosticStatus, from its definition."""

ROVER = Differential(max_speed=1.0, max_turn_rate=1.5, lookahead=0.25)
OMNI = Holonomic(max_speed=1.0)

CAPABILITIES = {
    "scan": (Way(("camera", "gimbal")), Way(("camera",), 0.6)),
    "rough": (Way(("tracks",)),),
}
"""Scan at grade 1 with a gimbal, 0.6 without; rough ground on tracks."""


def robot(name: str, *at: float, **more: Any) -> Robot:
    """Give an omnidirectional robot with a camera and a gimbal, at x, y (m), heading (rad)."""
    start = (*at, *(0.0,) * (3 - len(at)))
    return Robot(**{"name": name, "drive": OMNI, "features": ("camera", "gimbal"),
                    "start": start} | more)  # fmt: skip


def watch(name: str, *at: float, count: int = 1, most: int | None = None, **more: Any) -> Watch:
    """Give a place to be watched by ``count`` robots or more, up to ``most``."""
    return Watch(name=name, at=at, robots=HeadCount(count, most or max(count, 1)), **more)


def team_of(robots: list[Robot], tasks: list[Task], **more: Any) -> Team:
    """Give a team on an open site."""
    return Team(**{"robots": {r.name: r for r in robots}, "tasks": {t.name: t for t in tasks},
                   "capabilities": CAPABILITIES} | more)  # fmt: skip


class Crew:
    """A team that is heard every period and stands, or obeys, as a test wants it to.

    Attributes:
        allocator: What decides.
        now: Time, s.
        poses: Where the robots are: x, y, z (m), heading (rad), shape (N, 4).
        silent: Names of robots that are not heard.
        charges: Measured charges 0..1, shape (N,); NaN: not measured.
        grip: Share of its command's speed each robot really moves at, shape (N,).
        reports: Diagnostics that arrive with the next step.
        goals, quality: What else arrives with the next step.
        log: All reallocations so far.
    """

    def __init__(self, team: Team, settings: Settings | None = None, period: float = 0.1) -> None:
        self.team, self.period = team, period
        self.allocator = Allocator(team, settings, period)
        count = len(team.robots)
        self.names = list(team.robots)
        self.now = 0.0
        self.poses = np.zeros((count, 4))
        self.poses[:, [0, 1, 3]] = [r.start for r in team.robots.values()]
        self.times = np.full(count, np.nan)
        self.silent: set[str] = set()
        self.charges = np.full(count, np.nan)
        self.grip = np.ones(count)
        self.reports: list[HealthReport] = []
        self.goals: list[MovedGoal] = []
        self.quality: dict[tuple[str, str], float] = {}
        self.log: list[Reallocation] = []

    def step(self) -> Decision:
        """Let the allocator decide once; nobody moves."""
        heard = np.array([name not in self.silent for name in self.names])
        self.times[heard] = self.now
        nothing = Observation.nothing(len(self.names))
        observation = replace(
            nothing,
            poses=np.where(np.isfinite(self.times)[:, None], self.poses, np.nan),
            pose_times=self.times.copy(),
            velocities=np.zeros((len(self.names), 4)),
            charges=self.charges.copy(),
            charge_times=np.where(np.isfinite(self.charges), self.now, np.nan),
            health=tuple(self.reports),
            goals=tuple(self.goals),
            quality=self.quality,
        )
        self.reports, self.goals, self.quality = [], [], {}
        decision = self.allocator.step(observation, self.now)
        self.log += decision.reallocations
        self.now += self.period
        return decision

    def drive(self, seconds: float) -> Decision:
        """Let the robots obey for a while; give the last decision."""
        for _ in range(round(seconds / self.period)):
            decision = self.step()
            moving = decision.commands * self.grip[:, None]
            self.poses = advance(self.poses, moving, self.period)
        return decision

    def wait(self, seconds: float) -> Decision:
        """Let time pass while nobody moves, whatever the commands."""
        for _ in range(round(seconds / self.period)):
            decision = self.step()
        return decision

    def says(self, name: str, level: int, message: str = "") -> None:
        """Let a diagnostic arrive with the next step."""
        self.reports.append(HealthReport(name, level, message))

    def order(self, **orders: Any) -> None:
        """Give orders: pins, bans, hold, driving."""
        self.allocator.orders = replace(self.allocator.orders, **orders)

    def edit(self, *tasks: Task) -> None:
        """Put tasks into the task table, new ones or in the place of old ones."""
        team = self.allocator.team
        table = dict(team.tasks) | {task.name: task for task in tasks}
        self.allocator.edit(team.with_tasks(table), self.now)

    def causes(self) -> list[tuple[str, Cause]]:
        """Give task and cause of each reallocation so far, and forget them."""
        causes = [(change.task, change.cause) for change in self.log]
        self.log.clear()
        return causes


def doing(decision: Decision) -> dict[str, str | None]:
    """Give the task of each robot by name."""
    return {name: decision.task_of(i) for i, name in enumerate(decision.robots)}


def groups(decision: Decision) -> dict[str, tuple[str, ...]]:
    """Give the robots on each task by name."""
    return {name: decision.group_of(m) for m, name in enumerate(decision.tasks)}


def random_problem(random: np.random.Generator, robots: int, tasks: int) -> Problem:
    """Give a program with mixed needs, priorities, pins, former tasks and weights."""
    capabilities = 3
    limits, jacobians = np.zeros((robots, 4)), np.zeros((robots, 3, 4))
    for i in range(robots):
        if random.random() < 0.5:
            limits[i], ahead = [random.uniform(0.5, 2), 0, 0, random.uniform(0.5, 2)], 0.25
        else:
            speed = random.uniform(0.5, 2)
            limits[i], ahead = [speed, speed, random.choice([0.0, 1.0]), 1], 0.0
        heading = random.uniform(-3, 3)
        cos, sin = np.cos(heading), np.sin(heading)
        jacobians[i] = [[cos, -sin, 0, -ahead * sin], [sin, cos, 0, ahead * cos], [0, 0, 1, 0]]
    away = random.normal(size=(robots, tasks, 3)) * [1, 1, 0.2]
    least = random.integers(0, 3, tasks)
    eligible = random.random((robots, tasks)) < 0.8
    pinned = np.full(robots, -1)
    if random.random() < 0.3:
        i, m = random.integers(robots), random.integers(tasks)
        pinned[i] = m if eligible[i, m] else -1
    near = random.random((robots, tasks)) < 0.2
    return Problem(
        capability=random.choice([0, 0.6, 1.0], size=(robots, capabilities)),
        needs=random.choice([0, 0, 0.5, 1.0, 1.6], size=(tasks, capabilities)),
        least=least,
        most=np.maximum(least + random.integers(0, 3, tasks), 1),
        priority=random.integers(0, 5, tasks),
        eligible=eligible,
        pinned=pinned,
        previous=random.integers(-1, tasks, robots),
        swap_cost=random.uniform(0, 0.3, robots),
        energy=random.uniform(0, 3, (robots, tasks)),
        limits=limits,
        gear=np.zeros(robots, dtype=int),
        jacobians=jacobians,
        away=away / np.linalg.norm(away, axis=2, keepdims=True),
        closing=np.where(near, 0.0, random.uniform(0, 1.5, (robots, tasks))),
        goal_speed=random.uniform(-0.3, 0.3, (robots, tasks)),
        kappa=random.choice([0.002, 0.1, 1.0]),
        slack_weight=random.uniform(50, 200, robots),
    )


def with_cars(problem: Problem, random: np.random.Generator) -> Problem:
    """Give the program with about half of its robots steered, forward or in reverse."""
    limits, jacobians = problem.limits.copy(), problem.jacobians.copy()
    gear = np.zeros(len(limits), dtype=int)
    for i in np.flatnonzero(random.random(len(limits)) < 0.5):
        gear[i] = random.choice([1, -1])
        limits[i] = [random.uniform(0.5, 2), 0, 0, random.uniform(0.2, 2)]
        (cos, sin), ahead = jacobians[i, :2, 0], random.uniform(0.2, 1.0)
        jacobians[i, :2, 3] = -ahead * sin, ahead * cos
    return replace(problem, limits=limits, jacobians=jacobians, gear=gear)
