"""Why an assignment changed: what was true when it was chosen against what is true now."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np

from .decision import Cause, Reallocation
from .model import Model
from .tasks import Task

NOTICEABLE = 0.05
"""Change of efficacy or suitability that can be a reason."""


@dataclass(frozen=True)
class Situation:
    """Everything that decides about an assignment, at one moment.

    Attributes:
        known, heard: Robots ever heard, heard now, shape (N,).
        health: φ, shape (N, F).
        suitability: a, shape (N, M).
        efficacy: η, shape (N, M).
        barred: Pairs that failed and wait for their next try, shape (N, M).
        enough: Where the energy suffices, shape (N, M).
        dearness: λ, shape (N,).
        prices: κ w + e, Wh, shape (N, M).
        pinned, banned: Shape (N, M).
        active: Tasks to be done now, shape (M,).
        tasks: The task definitions, in order.
        finished: Names of tasks that have come to their end.
    """

    known: np.ndarray
    heard: np.ndarray
    health: np.ndarray
    suitability: np.ndarray
    efficacy: np.ndarray
    barred: np.ndarray
    enough: np.ndarray
    dearness: np.ndarray
    prices: np.ndarray
    pinned: np.ndarray
    banned: np.ndarray
    active: np.ndarray
    tasks: tuple[Task, ...]
    finished: frozenset[str]

    ROBOTS = (
        "known", "heard", "health", "suitability", "efficacy", "barred",
        "enough", "dearness", "prices", "pinned", "banned",
    )  # fmt: skip
    """Parts whose first axis is the robot."""

    PAIRS = ("suitability", "efficacy", "barred", "enough", "prices", "pinned", "banned")
    """Parts of shape (N, M)."""

    def updated(self, now: Situation, robots: np.ndarray, tasks: Iterable[int]) -> Situation:
        """Give this situation with some robots and tasks as they are now."""
        parts = {}
        for name in self.ROBOTS:
            part = getattr(self, name).copy()
            part[robots] = getattr(now, name)[robots]
            parts[name] = part
        chosen = set(tasks)
        active = self.active.copy()
        active[list(chosen)] = now.active[list(chosen)]
        mixed = tuple(now.tasks[m] if m in chosen else task for m, task in enumerate(self.tasks))
        return replace(self, **parts, active=active, tasks=mixed, finished=now.finished)

    def retabled(self, kept: np.ndarray, tasks: tuple[Task, ...]) -> Situation:
        """Give this situation with another task table; new tasks were not active in it."""
        stays = kept >= 0
        parts = {}
        for name in self.PAIRS:
            former = getattr(self, name)
            part = np.zeros((len(former), len(kept)), dtype=former.dtype)
            part[:, stays] = former[:, kept[stays]]
            parts[name] = part
        active = np.zeros(len(kept), dtype=bool)
        active[stays] = self.active[kept[stays]]
        then = tuple(self.tasks[m] if m >= 0 else new for m, new in zip(kept, tasks, strict=True))
        return replace(self, **parts, active=active, tasks=then)


@dataclass(frozen=True)
class _Reason:
    rank: int
    cause: Cause
    detail: str


class Reasons:
    """Explains changes; keeps the situation in which each robot and task was last decided."""

    def __init__(self, model: Model, say_feature: Callable[[int, int], str]) -> None:
        """Begin with nothing decided.

        Args:
            model: The team.
            say_feature: Gives what the diagnostics say of robot i's feature f.
        """
        self.model = model
        self.say_feature = say_feature
        self.chosen: Situation | None = None

    def retable(self, model: Model, kept: np.ndarray) -> None:
        """Go on with another task table.

        Args:
            model: The team with it.
            kept: Former index of each task, −1 for a new one, shape (M,).
        """
        self.model = model
        if self.chosen is not None:
            self.chosen = self.chosen.retabled(kept, tuple(model.team.tasks.values()))

    def explain(
        self,
        now: Situation,
        before: np.ndarray,
        after: np.ndarray,
        swap_cost: np.ndarray,
        time: float,
    ) -> tuple[Reallocation, ...]:
        """Give one reallocation for each task whose group changed.

        Args:
            now: The present situation.
            before, after: Task of each robot, −1: none, shape (N,).
            swap_cost: ρ, Wh, shape (N,).
            time: s.
        """
        if self.chosen is None:
            self.chosen = replace(
                now,
                known=np.zeros_like(now.known),
                heard=np.zeros_like(now.heard),
                active=np.zeros_like(now.active),
            )
        moved = np.flatnonzero(before != after)
        if not len(moved):
            return ()
        changes: list[Reallocation] = []
        for tasks in _exchanges(moved, before, after):
            robots = np.flatnonzero(np.isin(before, list(tasks)) | np.isin(after, list(tasks)))
            own = {m: self._own(m, now, before, after) for m in tasks}
            found = [reason for reason in own.values() if reason]
            shared = min(found, key=lambda reason: reason.rank, default=None)
            if shared is None:
                shared = self._by_price(now, robots, before, after, swap_cost)
            for m in sorted(tasks):
                groups = [
                    tuple(sorted(self.model.robots[i] for i in np.flatnonzero(side == m)))
                    for side in (before, after)
                ]
                if groups[0] == groups[1]:
                    continue
                reason = own[m] or shared
                changes.append(
                    Reallocation(
                        time, self.model.tasks[m], groups[0], groups[1], reason.cause, reason.detail
                    )
                )
            self.chosen = self.chosen.updated(now, robots, tasks)
        return tuple(changes)

    def _own(
        self, m: int, now: Situation, before: np.ndarray, after: np.ndarray
    ) -> _Reason | None:
        """Find a reason in the task itself or in the robots of its group."""
        left = np.flatnonzero((before == m) & (after != m))
        joined = np.flatnonzero((after == m) & (before != m))
        stayed = np.flatnonzero((after == m) & (before == m))
        reasons = [
            *(self._loss(i, m, now) for i in left),
            *(self._loss(i, m, now) for i in stayed),
            *(self._gain(i, m, now) for i in joined),
            *(self._gain(i, m, now) for i in left if self._ordered_away(i, m, now)),
            self._task(m, now),
        ]
        return min(filter(None, reasons), key=lambda reason: reason.rank, default=None)

    def _ordered_away(self, i: int, m: int, now: Situation) -> bool:
        return bool((now.pinned[i] & ~self.chosen.pinned[i]).any())

    def _loss(self, i: int, m: int, now: Situation) -> _Reason | None:
        """Tell what took robot i from task m."""
        then, name, task = self.chosen, self.model.robots[i], self.model.tasks[m]
        if now.banned[i, m] and not then.banned[i, m]:
            return _Reason(0, Cause.PIN, f"{name} is banned from {task}")
        pins = np.flatnonzero(now.pinned[i] & ~then.pinned[i])
        if len(pins) and m not in pins:
            return _Reason(0, Cause.PIN, f"{name} is pinned to {self.model.tasks[pins[0]]}")
        if then.pinned[i, m] and not now.pinned[i, m]:
            return _Reason(6, Cause.PIN, f"{name} is no longer pinned to {task}")
        if then.heard[i] and not now.heard[i]:
            return _Reason(2, Cause.SILENT, f"{name} is silent")
        if now.suitability[i, m] < then.suitability[i, m] - NOTICEABLE:
            return _Reason(3, Cause.FEATURE, self._features(i, now, came_back=False))
        if then.enough[i, m] and not now.enough[i, m]:
            return _Reason(4, Cause.ENERGY, f"{name} has too little energy left for {task}")
        failed = now.barred[i, m] and not then.barred[i, m]
        floored = then.efficacy[i, m] - now.efficacy[i, m] > 0.5
        if failed or floored:
            return _Reason(5, Cause.EFFICACY, self._progress(i, m, now))
        return None

    def _gain(self, i: int, m: int, now: Situation) -> _Reason | None:
        """Tell what brought robot i to task m."""
        then, name, task = self.chosen, self.model.robots[i], self.model.tasks[m]
        if now.pinned[i, m] and not then.pinned[i, m]:
            return _Reason(0, Cause.PIN, f"{name} is pinned to {task}")
        if not then.known[i]:
            return _Reason(7, Cause.START, f"{name} reported for the first time")
        if not then.heard[i] and now.heard[i]:
            return _Reason(2, Cause.RETURNED, f"{name} is heard again")
        if now.suitability[i, m] > then.suitability[i, m] + NOTICEABLE:
            return _Reason(3, Cause.FEATURE, self._features(i, now, came_back=True))
        if now.enough[i, m] and not then.enough[i, m]:
            return _Reason(4, Cause.ENERGY, f"{name} has enough energy again for {task}")
        if then.banned[i, m] and not now.banned[i, m]:
            return _Reason(6, Cause.PIN, f"{name} is no longer banned from {task}")
        if then.barred[i, m] and not now.barred[i, m]:
            return _Reason(6, Cause.EFFICACY, f"{name} may try {task} again")
        return None

    def _task(self, m: int, now: Situation) -> _Reason | None:
        """Tell what changed about task m itself."""
        then, name = self.chosen, self.model.tasks[m]
        if then.active[m] and not now.active[m]:
            word = "finished" if name in now.finished else "switched off"
            return _Reason(1, Cause.TASK, f"{name} is {word}")
        if now.active[m] and not then.active[m]:
            if not then.heard.any():
                return _Reason(7, Cause.START, f"{name} begins")
            return _Reason(1, Cause.TASK, f"{name} is to be done now")
        if now.tasks[m] != then.tasks[m]:
            return _Reason(1, Cause.TASK, f"{name} was {_difference(then.tasks[m], now.tasks[m])}")
        return None

    def _by_price(
        self,
        now: Situation,
        robots: np.ndarray,
        before: np.ndarray,
        after: np.ndarray,
        swap_cost: np.ndarray,
    ) -> _Reason:
        """Find what made the new assignment cheaper than the old one."""
        then = self.chosen
        saving = self._saving(now.prices, robots, before, after, swap_cost)
        trusted = np.maximum(then.efficacy, 1e-3) / np.maximum(now.efficacy, 1e-3)
        worst = min(
            ((now.efficacy - then.efficacy)[i, before[i]], i) for i in robots if before[i] >= 0
        ) if (before[robots] >= 0).any() else (0.0, -1)
        if worst[0] < -NOTICEABLE and (
            self._saving(now.prices / trusted, robots, before, after, swap_cost) <= 0
        ):
            return _Reason(8, Cause.EFFICACY, self._progress(worst[1], before[worst[1]], now))
        dearer = now.dearness / then.dearness
        cheaper_then = now.prices / dearer[:, None]
        sags = robots[np.argmax(dearer[robots])]
        if dearer[sags] > 1.1 and (
            self._saving(cheaper_then, robots, before, after, swap_cost) <= 0
        ):
            return _Reason(8, Cause.ENERGY, f"the energy of {self.model.robots[sags]} runs low")
        return _Reason(9, Cause.CHEAPER, f"the new choice saves {max(saving, 0.0):.3g} Wh")

    @staticmethod
    def _saving(
        prices: np.ndarray,
        robots: np.ndarray,
        before: np.ndarray,
        after: np.ndarray,
        swap_cost: np.ndarray,
    ) -> float:
        old = sum(prices[i, before[i]] for i in robots if before[i] >= 0)
        new = sum(prices[i, after[i]] for i in robots if after[i] >= 0)
        changed = [i for i in robots if before[i] >= 0 and before[i] != after[i]]
        return float(old - new - swap_cost[changed].sum())

    def _progress(self, i: int, m: int, now: Situation) -> str:
        return (
            f"{self.model.robots[i]} makes too little progress on {self.model.tasks[m]}: "
            f"efficacy {self.chosen.efficacy[i, m]:.2f} → {now.efficacy[i, m]:.2f}"
        )

    def _features(self, i: int, now: Situation, *, came_back: bool) -> str:
        change = now.health[i] - self.chosen.health[i]
        changed = np.flatnonzero(change > 0 if came_back else change < 0)
        names = ", ".join(self.model.features[f] for f in changed)
        if came_back:
            return f"{self.model.robots[i]}: {names} works again"
        said = "; ".join(self.say_feature(i, f) for f in changed)
        return f"{self.model.robots[i]}: {names} failed ({said})"


def _exchanges(moved: np.ndarray, before: np.ndarray, after: np.ndarray) -> list[set[int]]:
    """Give the sets of tasks that robots were exchanged between."""
    sets: list[set[int]] = []
    for i in moved:
        touched = {int(m) for m in (before[i], after[i]) if m >= 0}
        for other in [known for known in sets if known & touched]:
            sets.remove(other)
            touched |= other
        sets.append(touched)
    return sets


def _difference(then: Task, now: Task) -> str:
    """Tell in a word how a task's definition changed."""
    if type(then) is not type(now):
        return "redefined"
    names = [
        name
        for name in type(now).__dataclass_fields__
        if getattr(then, name) != getattr(now, name)
    ]
    if set(names) <= {"at", "face", "heading", "waypoints"}:
        return "moved"
    return f"changed ({', '.join(names)})"
