"""What goes into a decision: the messages of one period as plain data."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np


@dataclass(frozen=True)
class HealthReport:
    """One diagnostic status: its name, its level 0..3 (OK, WARN, ERROR, STALE), its text."""

    name: str
    level: int
    message: str = ""


@dataclass(frozen=True)
class MovedGoal:
    """A task's goal moved live: x, y, z (m) and heading (rad, None: leave as it is)."""

    task: str
    at: tuple[float, float, float]
    heading: float | None = None


@dataclass(frozen=True)
class TargetPose:
    """The newest pose on a topic that a task keeps to.

    Attributes:
        pose: x, y, z (m) and heading (rad), shape (4,); a NaN heading is not known.
        time: When it held, s.
    """

    pose: np.ndarray
    time: float


@dataclass(frozen=True)
class Observation:
    """All that was heard since the last decision, robots in the team's order.

    Attributes:
        poses: Last pose of each axle in the site frame: x, y, z (m), heading (rad);
            shape (N, 4), NaN where none was ever heard.
        pose_times: When each pose held, s on the clock of ``now``, shape (N,); NaN: never.
        velocities: Last measured velocity in the site frame: m/s three times, rad/s;
            shape (N, 4), NaN where not measured.
        charges: Last measured battery charge 0..1, shape (N,); NaN: not measured.
        charge_times: When each charge was measured, s, shape (N,); NaN: never.
        health: Diagnostic statuses that arrived since the last observation.
        goals: Goals moved since the last observation.
        quality: (robot, task) to a measured quality 0..1 that arrived since then.
        targets: Topic to the newest pose on it, for topics that tasks keep to.
    """

    poses: np.ndarray
    pose_times: np.ndarray
    velocities: np.ndarray
    charges: np.ndarray
    charge_times: np.ndarray
    health: tuple[HealthReport, ...] = ()
    goals: tuple[MovedGoal, ...] = ()
    quality: Mapping[tuple[str, str], float] = field(default_factory=dict)
    targets: Mapping[str, TargetPose] = field(default_factory=dict)

    def since(self, earlier: Observation) -> Observation:
        """Give this observation with the news of an earlier one that nobody looked at."""
        return replace(
            self,
            health=earlier.health + self.health,
            goals=earlier.goals + self.goals,
            quality=dict(earlier.quality) | dict(self.quality),
        )

    @classmethod
    def nothing(cls, count: int) -> Observation:
        """Give the observation of a team that was never heard."""
        unknown = np.full(count, np.nan)
        return cls(
            np.full((count, 4), np.nan), unknown, np.full((count, 4), np.nan), unknown, unknown
        )


@dataclass(frozen=True)
class Orders:
    """What the operator asks for beside the team file.

    Attributes:
        pins: (robot, task) pairs: the robot does that task if it is able to.
        bans: (robot, task) pairs: the robot never does that task.
        hold: All robots stand, decisions go on.
        driving: Whether the commands reach the robots; if not, nothing is
            learned from their motion.
    """

    pins: frozenset[tuple[str, str]] = frozenset()
    bans: frozenset[tuple[str, str]] = frozenset()
    hold: bool = False
    driving: bool = True
