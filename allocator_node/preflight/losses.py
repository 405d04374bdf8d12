"""What each loss would leave uncovered: the live allocator, with the loss applied."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from typing import Literal

from ..charging import dock_of
from ..decision import Decision, Shortfall
from ..model import Model
from ..settings import Settings
from ..team import Team
from .standing import decide, tasks_of


@dataclass(frozen=True)
class Loss:
    """Something that fails.

    Attributes:
        kind: A whole robot, one feature of a robot, a dock, or two robots at once.
        robots: Robots concerned, in the team's order. With a dock go all robots that
            charge there: they are out once their batteries are spent.
        feature: The feature, where it is one.
    """

    kind: Literal["robot", "feature", "dock", "pair"]
    robots: tuple[str, ...]
    feature: str | None = None

    def __str__(self) -> str:
        names = ", ".join(self.robots)
        if self.kind == "feature":
            return f"{names}: {self.feature}"
        return f"dock of {names}" if self.kind == "dock" else names

    @property
    def silent(self) -> tuple[str, ...]:
        """Robots that are out altogether."""
        return () if self.kind == "feature" else self.robots


@dataclass(frozen=True)
class Outcome:
    """What the allocator makes of a loss.

    Attributes:
        loss: The loss.
        shortfalls: All that active tasks lack then.
        harm: Those of them that are not there, or smaller, without the loss.
        steps: Task to the robots that step in, sorted.
        tasks: Robot to task afterwards, for the robots that have one.
    """

    loss: Loss
    shortfalls: tuple[Shortfall, ...]
    harm: tuple[Shortfall, ...]
    steps: dict[str, tuple[str, ...]]
    tasks: dict[str, str]

    @property
    def uncovered(self) -> tuple[str, ...]:
        """Tasks the loss leaves uncovered, each once."""
        return tuple(dict.fromkeys(shortfall.task for shortfall in self.harm))


def single_losses(team: Team) -> Iterator[Loss]:
    """Give every robot, every feature of every robot, every dock."""
    for robot in team.robots.values():
        yield Loss("robot", (robot.name,))
        for feature in robot.features:
            yield Loss("feature", (robot.name,), feature)
    docks: dict[int, list[str]] = {}
    for name, dock in zip(team.robots, dock_of(Model(team)), strict=True):
        if dock >= 0:
            docks.setdefault(int(dock), []).append(name)
    for users in docks.values():
        yield Loss("dock", tuple(users))


def without(team: Team, loss: Loss) -> Team:
    """Give the team without a lost feature; robots that are out stay, silent."""
    if loss.kind != "feature":
        return team
    robot = team.robots[loss.robots[0]]
    left = replace(
        robot,
        features=tuple(feature for feature in robot.features if feature != loss.feature),
        health=tuple(rule for rule in robot.health or () if rule.feature != loss.feature),
    )
    return replace(team, robots={**team.robots, robot.name: left})


class Losses:
    """Predicts losses from a team's start.

    A loss is decided anew only where it can matter. A robot that has no task, or
    a feature without which its capabilities are the same, takes nothing from the
    standing assignment, which therefore stays the best one there is.
    """

    def __init__(self, team: Team, settings: Settings, start: Decision) -> None:
        """Prepare.

        Args:
            team: The team.
            settings: Weights and times.
            start: What is decided before anything is lost.
        """
        self._team, self._settings, self._start = team, settings, start
        self._tasks = tasks_of(start)
        self._model = Model(team)
        self._health = self._model.declared.astype(float)
        self._capability = self._model.capability(self._health)

    def predict(self, loss: Loss, before: dict[str, str] | None = None) -> Outcome:
        """Predict one loss; ``before``: robot to task when it happens, default the start's."""
        before = self._tasks if before is None else before
        if not self._matters(loss, before):
            return self._outcome(loss, self._start.shortfalls, self._tasks)
        decision = decide(without(self._team, loss), self._settings, loss.silent, before)
        return self._outcome(loss, decision.shortfalls, tasks_of(decision))

    def singles(self, on_progress: Callable[[], None] = lambda: None) -> list[Outcome]:
        """Predict every single loss, those that leave something uncovered first."""
        outcomes = []
        for loss in single_losses(self._team):
            outcomes.append(self.predict(loss))
            on_progress()
        return sorted(outcomes, key=lambda outcome: not outcome.harm)

    def pairs(
        self, singles: Iterable[Outcome], on_progress: Callable[[], None] = lambda: None
    ) -> list[Outcome]:
        """Predict every two robots at once; give those worse than either alone.

        Where the second robot has no task after the loss of the first, nothing
        more is lost with it.
        """
        alone = {o.loss.robots[0]: o for o in singles if o.loss.kind == "robot"}
        worse = []
        for first, second in itertools.combinations(self._team.robots, 2):
            one, other = alone[first], alone[second]
            if second in one.tasks and first in other.tasks:
                both = self.predict(Loss("pair", (first, second)))
                if not set(both.uncovered) <= {*one.uncovered, *other.uncovered}:
                    worse.append(both)
            on_progress()
        return worse

    def _matters(self, loss: Loss, before: dict[str, str]) -> bool:
        if loss.kind != "feature":
            return any(robot in before for robot in loss.robots)
        i = self._model.robots.index(loss.robots[0])
        health = self._health.copy()
        health[i, self._model.features.index(loss.feature)] = 0.0
        changed = self._model.capability(health)[i] != self._capability[i]
        return loss.robots[0] in before and bool(changed.any())

    def _outcome(
        self, loss: Loss, shortfalls: tuple[Shortfall, ...], tasks: dict[str, str]
    ) -> Outcome:
        known = {(s.task, s.capability): s.missing for s in self._start.shortfalls}
        harm = tuple(
            s for s in shortfalls if s.missing > known.get((s.task, s.capability), 0.0) + 1e-9
        )
        steps: dict[str, tuple[str, ...]] = {}
        for robot, task in sorted(tasks.items()):
            if self._tasks.get(robot) != task:
                steps[task] = (*steps.get(task, ()), robot)
        return Outcome(loss, shortfalls, harm, steps, tasks)

