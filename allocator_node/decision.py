"""What comes out of a decision, as plain data."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum

import numpy as np


class Level(Enum):
    """How bad something is; the values are those of DiagnosticStatus."""

    OK = 0
    WARN = 1
    ERROR = 2


class Cause(Enum):
    """Why an assignment changed."""

    START = "start"
    FEATURE = "feature"
    EFFICACY = "efficacy"
    SILENT = "silent"
    RETURNED = "returned"
    ENERGY = "energy"
    TASK = "task"
    PIN = "pin"
    CHEAPER = "cheaper"


@dataclass(frozen=True)
class Reallocation:
    """One change of a task's group, with its reason.

    Attributes:
        time: When, s.
        task: Task whose group changed.
        before: Robots on it before, sorted.
        after: Robots on it now, sorted.
        cause: Why.
        detail: The reason in a plain sentence.
    """

    time: float
    task: str
    before: tuple[str, ...]
    after: tuple[str, ...]
    cause: Cause
    detail: str


@dataclass(frozen=True)
class Shortfall:
    """What an active task lacks: robots (capability None) or an amount of a capability."""

    task: str
    missing: float
    capability: str | None = None

    def __str__(self) -> str:
        if self.capability is None:
            count = round(self.missing)
            return f"{self.task} lacks {count} robot{'s' if count != 1 else ''}"
        return f"{self.task} lacks {self.missing:.2g} of {self.capability}"


@dataclass(frozen=True)
class Notice:
    """Something a person should know: about which robot or task, how bad, what."""

    about: str
    level: Level
    text: str


@dataclass(frozen=True)
class Decision:
    """What one period decided; robots and tasks in the team's order.

    Attributes:
        time: Time of the decision, s.
        robots: Names of the N robots.
        tasks: Names of the M tasks.
        assignment: Task index of each robot, −1: none; shape (N,).
        since: When each robot got its present task, s, shape (N,).
        commands: Body velocities (vx, vy, vz, ω) for each robot, m/s and rad/s, shape (N, 4);
            0 for robots that bring their own navigation.
        goals: Goal point of each robot, m, shape (N, 3); NaN without a task, and
            for robots that are not steady.
        facing: Heading each robot is to take at its goal, rad, shape (N,); NaN: any.
        navigates: Robots that bring their own navigation, shape (N,).
        poses: Poses carried to ``time``, shape (N, 4).
        heard: Which robots are heard from, shape (N,).
        steady: Those whose poses follow from one another too, shape (N,).
        able: Which robots are eligible for which task, shape (N, M).
        suitability: a_im, shape (N, M).
        efficacy: η_im, shape (N, M).
        charge: Battery charge 0..1, shape (N,).
        charge_estimated: Where the charge is counted, not measured, shape (N,).
        finished: Tasks that have come to their end.
        reallocations: Changes of this period.
        shortfalls: What active tasks lack.
        notices: What a person should know now; empty when all is well.
        seconds: Part of the step to the time it took, s.
        gap: Bound on how far the standing assignment is from the optimum, Wh.
        progress: Share done of the tasks that have such a thing.
        activity: What each robot does: "working", "idle", "to dock", "queueing",
            "charging", "held" or "silent".
    """

    time: float
    robots: tuple[str, ...]
    tasks: tuple[str, ...]
    assignment: np.ndarray
    since: np.ndarray
    commands: np.ndarray
    goals: np.ndarray
    facing: np.ndarray
    navigates: np.ndarray
    poses: np.ndarray
    heard: np.ndarray
    steady: np.ndarray
    able: np.ndarray
    suitability: np.ndarray
    efficacy: np.ndarray
    charge: np.ndarray
    charge_estimated: np.ndarray
    finished: frozenset[str]
    reallocations: tuple[Reallocation, ...]
    shortfalls: tuple[Shortfall, ...]
    notices: tuple[Notice, ...]
    seconds: Mapping[str, float]
    gap: float = 0.0
    progress: Mapping[str, float] = field(default_factory=dict)
    activity: tuple[str, ...] = ()

    @property
    def specialization(self) -> np.ndarray:
        """s_im = a_im · η_im, shape (N, M)."""
        return self.suitability * self.efficacy

    def task_of(self, robot: int) -> str | None:
        """Give the name of a robot's task."""
        task = self.assignment[robot]
        return None if task < 0 else self.tasks[task]

    def group_of(self, task: int) -> tuple[str, ...]:
        """Give the sorted names of the robots on a task."""
        return tuple(sorted(self.robots[i] for i in range(len(self.robots))
                            if self.assignment[i] == task))


NEAR = 0.3
"""A goal closer than this, m, gives no direction worth turning to."""


def goal_pose(pose: np.ndarray, goal: np.ndarray, facing: float) -> np.ndarray:
    """Give the pose a robot with its own navigation is sent to, shape (4,).

    Without a goal it is where the robot is; without a heading demanded, it looks the way
    it came.

    Args:
        pose: Where it is: x, y, z (m), heading (rad), shape (4,).
        goal: Goal point, m, shape (3,); NaN x: none, NaN height: any.
        facing: Heading to take, rad; NaN: any.
    """
    target = pose.copy()
    if np.isnan(goal[0]):
        return target
    east, north = goal[:2] - pose[:2]
    if np.isfinite(facing):
        target[3] = facing
    elif np.hypot(east, north) > NEAR:
        target[3] = np.arctan2(north, east)
    target[:2] = goal[:2]
    if not np.isnan(goal[2]):
        target[2] = goal[2]
    return target
