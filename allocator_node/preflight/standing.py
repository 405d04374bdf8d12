"""A team standing at its starts, and what the live allocator decides for it."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import replace

import numpy as np

from ..allocator import Allocator
from ..decision import Decision
from ..observation import Observation
from ..settings import Settings
from ..sim.world import starting_poses
from ..team import Team


def decide(
    team: Team,
    settings: Settings,
    silent: Collection[str] = (),
    before: Mapping[str, str] | None = None,
) -> Decision:
    """Give the allocator's decision for a team at its starts with full batteries.

    Args:
        team: The team; every declared feature works.
        settings: Weights and times.
        silent: Robots that are not heard from.
        before: Robot to the task it has already; None: nobody has one.
    """
    allocator = Allocator(team, settings)
    if before is not None:
        allocator.recall({"efficacy": [], "finished": [], "assignment": dict(before)})
    try:
        return allocator.step(at_starts(team, silent), 0.0)
    finally:
        allocator.close()


def at_starts(team: Team, silent: Collection[str] = ()) -> Observation:
    """Give what is heard of a team at its starts."""
    heard = np.array([name not in silent for name in team.robots])
    count = len(heard)
    poses = np.where(heard[:, None], starting_poses(list(team.robots.values())), np.nan)
    return replace(
        Observation.nothing(count),
        poses=poses,
        pose_times=np.where(heard, 0.0, np.nan),
        velocities=np.where(heard[:, None], np.zeros((count, 4)), np.nan),
    )


def tasks_of(decision: Decision) -> dict[str, str]:
    """Give robot to task, for the robots that have one."""
    return {
        robot: decision.tasks[m]
        for robot, m in zip(decision.robots, decision.assignment, strict=True)
        if m >= 0
    }
