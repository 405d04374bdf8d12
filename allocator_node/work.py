"""The tasks in progress: what is active, what is done, where each goes on."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from .model import Model
from .tasks import Goals, Scene, Task
from .team import Team


class Work:
    """Keeps the state of every task of a team.

    Attributes:
        team: The team with its present task table.
    """

    def __init__(self, team: Team) -> None:
        """Begin every task."""
        self.team = team
        self._states: dict[str, Any] = {name: task.begin() for name, task in team.tasks.items()}

    def advance(self, m: int, scene: Scene) -> Goals:
        """Take task m on by what the scene shows, and give its goals."""
        name, task = list(self.team.tasks.items())[m]
        self._states[name] = task.advance(self._states[name], scene)
        return task.goals(self._states[name], scene)

    def finished(self) -> frozenset[str]:
        """Give the names of the tasks that have come to their end."""
        tasks = self.team.tasks
        return frozenset(name for name in tasks if tasks[name].finished(self._states[name]))

    def active(self) -> np.ndarray:
        """Tell which tasks are to be done now, shape (M,)."""
        finished = self.finished()
        return np.array(
            [
                task.active and name not in finished and finished.issuperset(task.after)
                for name, task in self.team.tasks.items()
            ],
            dtype=bool,
        )

    def edit(self, team: Team) -> None:
        """Go on with another task table; tasks whose work changed begin anew."""
        old = self.team.tasks
        self._states = {
            name: self._states[name]
            if name in old and _same_work(old[name], task)
            else task.begin()
            for name, task in team.tasks.items()
        }
        self.team = team

    def end(self, name: str) -> None:
        """Take a task as finished, as an earlier run left it."""
        if name in self.team.tasks:
            self._states[name] = self.team.tasks[name].ended()


def scene_of(
    model: Model,
    now: float,
    poses: np.ndarray,
    points: np.ndarray,
    capability: np.ndarray,
    members: np.ndarray,
    m: int,
    spacing: float,
) -> Scene:
    """Give what task m sees of the team.

    Args:
        model: The team.
        now: Time, s.
        poses: Poses, shape (N, 4).
        points: Control points, m, shape (N, 3).
        capability: c_ik, shape (N, K).
        members: Indices of the robots on the task, shape (n,).
        m: Index of the task.
        spacing: Distance to leave between two places of a group, m.
    """

    def suffices(robots: np.ndarray) -> bool:
        enough = (capability[robots].sum(axis=0) >= model.needs[m] - 1e-9).all()
        return bool(enough and len(robots) >= max(model.least[m], 1))

    return Scene(now, points, poses[:, 3], model.fleet.ahead, members, spacing, suffices)


def _same_work(old: Task, new: Task) -> bool:
    """Tell whether two tasks are the same but for who may do them and when."""
    if type(old) is not type(new):
        return False
    common = ("needs", "each", "robots", "priority", "urgency", "after", "active")
    return replace(old, **{name: getattr(new, name) for name in common}) == new
