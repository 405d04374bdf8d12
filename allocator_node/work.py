"""The tasks in progress: what is active, what is done, where each goes on."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable
from contextlib import suppress
from dataclasses import dataclass, fields
from functools import partial
from typing import Any

import numpy as np

from .model import Model
from .program import Safety
from .tasks import Goals, Located, Scene, Task
from .team import Target, Team
from .view import View


class Work:
    """Keeps the state of every task of a team.

    Attributes:
        team: The team with its present task table.
    """

    def __init__(self, team: Team) -> None:
        """Begin every task."""
        self.team = team
        self._states: dict[str, Any] = {name: task.begin() for name, task in team.tasks.items()}

    def advance(self, m: int, stage: Stage) -> Goals:
        """Take task m on by what it sees, and give its goals."""
        name = stage.model.tasks[m]
        task, scene = self.team.tasks[name], stage.scene(m)
        self._states[name] = task.advance(self._states[name], scene)
        return task.goals(self._states[name], scene)

    def progress(self) -> dict[str, float]:
        """Give the share that is done of the tasks that have such a thing."""
        shares = {
            name: task.progress(self._states[name]) for name, task in self.team.tasks.items()
        }
        return {name: share for name, share in shares.items() if share is not None}

    def remarks(self) -> dict[str, str]:
        """Give what a person should know of tasks, by name."""
        said = {name: task.remark(self._states[name]) for name, task in self.team.tasks.items()}
        return {name: text for name, text in said.items() if text is not None}

    def keeping_to(self, tasks: Iterable[int]) -> set[int]:
        """Give the tasks that keep to whoever does one of these."""
        names = list(self.team.tasks)
        looked_at = {names[m] for m in tasks}
        return {
            m
            for m, task in enumerate(self.team.tasks.values())
            if isinstance(task.keeps_to, Target) and task.keeps_to.task in looked_at
        }

    def finished(self) -> frozenset[str]:
        """Give the names of the tasks that have come to their end."""
        tasks = self.team.tasks
        return frozenset(name for name in tasks if tasks[name].finished(self._states[name]))

    def active(self) -> np.ndarray:
        """Tell which tasks are to be done now, shape (M,): none that keeps to one that is not."""
        finished, tasks = self.finished(), self.team.tasks
        now = {
            name
            for name, task in tasks.items()
            if task.active and name not in finished and finished.issuperset(task.after)
        }
        keeps_to = {
            name: task.keeps_to.task
            for name, task in tasks.items()
            if isinstance(task.keeps_to, Target) and task.keeps_to.task is not None
        }
        while idle := {name for name in now if keeps_to.get(name, name) not in now}:
            now -= idle
        return np.array([name in now for name in tasks], dtype=bool)

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

    def saved(self) -> dict[str, Any]:
        """Give what is done of unfinished tasks, as JSON-able data by name."""
        parts = {
            name: task.saved(self._states[name])
            for name, task in self.team.tasks.items()
            if not task.finished(self._states[name])
        }
        return {name: part for name, part in parts.items() if part is not None}

    def restore(self, name: str, saved: Any) -> None:
        """Go on with a task where an earlier run left it; a task that has changed begins anew."""
        if name in self.team.tasks:
            with suppress(ValueError):
                self._states[name] = self.team.tasks[name].restored(saved)

    def fingerprint(self, name: str) -> str:
        """Give what tells a task's work from any other's, who may do it and when aside."""
        return fingerprint(_bare(self.team.tasks[name]))

    def end(self, name: str) -> None:
        """Take a task as finished, as an earlier run left it."""
        if name in self.team.tasks:
            self._states[name] = self.team.tasks[name].ended()


@dataclass(frozen=True)
class Stage:
    """The team as its tasks see it in one period, under one assignment.

    Attributes:
        model: The team.
        view: What is known.
        assignment: Task of each robot, −1: none, shape (N,).
        safety: What keeps them apart, and off the edges of the site.
    """

    model: Model
    view: View
    assignment: np.ndarray
    safety: Safety

    def scene(self, m: int) -> Scene:
        """Give what task m sees."""
        view, fleet = self.view, self.model.fleet
        members = np.flatnonzero((self.assignment == m) & view.places.heard)
        reach = self.safety.reach[members].max(initial=0.0)
        spacing = 2 * reach + 1.5 * self.safety.settings.margin
        return Scene(
            view.now, view.points, view.poses[:, 3], fleet.ahead, members, spacing,
            partial(self.suffice, m), fleet.cruise, self.find, self.safety.clear,
            fleet.height_band,
        )  # fmt: skip

    def suffice(self, m: int, robots: np.ndarray) -> bool:
        """Tell whether some robots meet head count and needs of task m."""
        amounts = self.view.capability[robots].sum(axis=0)
        enough = (amounts >= self.model.needs[m] - 1e-9).all()
        return bool(enough and len(robots) >= max(self.model.least[m], 1))

    def find(self, target: Target) -> Located | None:
        """Give where a target is; None where it is not known, or nobody does the task."""
        view = self.view
        if target.topic is not None:
            if target.topic not in view.topics:
                return None
            pose, velocity = view.topics[target.topic]
            # A heading nobody told is that of the site's axes.
            return Located(pose[:3], float(np.nan_to_num(pose[3])), velocity)
        if target.robot is not None:
            robots = np.array([self.model.robot_of[target.robot]])
        else:
            robots = np.flatnonzero(self.assignment == self.model.task_of[target.task])
        robots = robots[view.places.known[robots]]
        if not len(robots):
            return None
        poses = view.poses[robots]
        heading = np.angle(np.exp(1j * poses[:, 3]).sum())
        at = np.array([*poses[:, :2].mean(axis=0), np.nan])
        return Located(at, float(heading), view.places.velocities[robots].mean(axis=0))


_ASIDE = {part.name for part in fields(Task)} - {"name"}
"""What every task has beside its work."""


def _bare(task: Task) -> Task:
    """Give a task without who may do it and when."""
    work = {p.name: getattr(task, p.name) for p in fields(task) if p.name not in _ASIDE}
    return type(task)(**work)


def fingerprint(task: Task) -> str:
    """Give a short text that another definition of a task does not have."""
    return hashlib.sha256(repr(task).encode()).hexdigest()[:16]


def _same_work(old: Task, new: Task) -> bool:
    """Tell whether two tasks are the same but for who may do them and when."""
    return type(old) is type(new) and _bare(old) == _bare(new)
