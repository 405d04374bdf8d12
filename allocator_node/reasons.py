"""Why an assignment changed: what was true when it was chosen against what is true now."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np

from .decision import Cause, Reallocation
from .model import Model
from .tasks import Task
from .team import Target

NOTICEABLE = 0.05
"""Change of efficacy or suitability that can be a reason."""

PENDING = 5.0
"""Longest time for which an event explains what a search changes later, s."""

DEARER = 1.1
"""Factor by which energy must have become dearer to be a reason."""


@dataclass(frozen=True)
class Situation:
    """Everything that decides about an assignment, at one moment.

    Attributes:
        known, heard: Robots ever heard, heard now, shape (N,).
        health: φ, shape (N, F).
        suitability: a, shape (N, M).
        efficacy: η, shape (N, M).
        trusted: Pairs whose efficacy allows them (not failed, not waiting for the
            next try), shape (N, M).
        enough: Where the energy suffices, shape (N, M).
        way: Where there is a way, with room at its end, shape (N, M).
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
    trusted: np.ndarray
    enough: np.ndarray
    way: np.ndarray
    dearness: np.ndarray
    prices: np.ndarray
    pinned: np.ndarray
    banned: np.ndarray
    active: np.ndarray
    tasks: tuple[Task, ...]
    finished: frozenset[str]

    ROBOTS = (
        "known", "heard", "health", "suitability", "efficacy", "trusted",
        "enough", "way", "dearness", "prices", "pinned", "banned",
    )  # fmt: skip
    """Parts whose first axis is the robot."""

    PAIRS = (
        "suitability", "efficacy", "trusted", "enough", "way", "prices", "pinned", "banned",
    )  # fmt: skip
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
    """Explains changes.

    What happened since the last settled decision is looked at first: a failure, a
    return, an order. While a search goes on, an event may show only in a later period.
    If nothing happened, the reason crept in, and is found against the situation in
    which the robots and tasks concerned were last decided.
    """

    def __init__(self, model: Model, say_feature: Callable[[int, int], str]) -> None:
        """Begin with nothing decided.

        Args:
            model: The team.
            say_feature: Gives what the diagnostics say of robot i's feature f.
        """
        self.model = model
        self.say_feature = say_feature
        self.last: Situation | None = None
        self.chosen: Situation | None = None
        self.stood = np.full(0, -1)
        self.settled_at = -np.inf

    def retable(self, model: Model, kept: np.ndarray) -> None:
        """Go on with another task table.

        Args:
            model: The team with it.
            kept: Former index of each task, −1 for a new one, shape (M,).
        """
        self.model = model
        if self.chosen is not None and self.last is not None:
            tasks = tuple(model.team.tasks.values())
            self.chosen = self.chosen.retabled(kept, tasks)
            self.last = self.last.retabled(kept, tasks)
            new_index = np.full(max(kept.max(initial=-1), self.stood.max(initial=-1)) + 2, -1)
            new_index[kept[kept >= 0]] = np.flatnonzero(kept >= 0)
            self.stood = new_index[self.stood]

    def explain(
        self,
        now: Situation,
        before: np.ndarray,
        after: np.ndarray,
        swap_cost: np.ndarray,
        time: float,
        settled: bool = True,
    ) -> tuple[Reallocation, ...]:
        """Give one reallocation for each task whose group changed.

        Args:
            now: The present situation.
            before, after: Task of each robot, −1: none, shape (N,).
            swap_cost: ρ, Wh, shape (N,).
            time: s.
            settled: Whether no search goes on that may still change the assignment.
        """
        if self.chosen is None or self.last is None:
            self.stood = before
            self.last = self.chosen = replace(
                now,
                known=np.zeros_like(now.known),
                heard=np.zeros_like(now.heard),
                active=np.zeros_like(now.active),
            )
        moved = np.flatnonzero(before != after)
        changes: list[Reallocation] = []
        decided = self.chosen
        for tasks in _exchanges(moved, before, after):
            robots = np.flatnonzero(np.isin(before, list(tasks)) | np.isin(after, list(tasks)))
            own, shared = self._find(tasks, robots, now, before, after, swap_cost)
            for m in sorted(tasks):
                groups = [
                    tuple(sorted(self.model.robots[i] for i in np.flatnonzero(side == m)))
                    for side in (before, after)
                ]
                if groups[0] == groups[1]:
                    continue
                reason, task = own.get(m) or shared, self.model.tasks[m]
                changes.append(Reallocation(time, task, *groups, reason.cause, reason.detail))
            decided = decided.updated(now, robots, tasks)
        if settled or time - self.settled_at > PENDING:
            # Robots without a task are decided upon anew in every settled period.
            decided = decided.updated(now, np.flatnonzero(after < 0), ())
            self.last, self.stood, self.settled_at = now, after, time
        self.chosen = decided
        return tuple(changes)

    def _find(
        self,
        tasks: set[int],
        robots: np.ndarray,
        now: Situation,
        before: np.ndarray,
        after: np.ndarray,
        swap_cost: np.ndarray,
    ) -> tuple[dict[int, _Reason], _Reason]:
        """Find the reasons of single tasks, and the one that the others share."""
        for then in (self.last, self.chosen):
            found = {m: self._own(m, then, now, before, after) for m in tasks}
            own = {m: reason for m, reason in found.items() if reason}
            if own:
                return own, min(own.values(), key=lambda reason: reason.rank)
        return {}, self._by_price(now, robots, before, after, swap_cost)

    def _own(
        self, m: int, then: Situation, now: Situation, before: np.ndarray, after: np.ndarray
    ) -> _Reason | None:
        """Find a reason in the task itself or in the robots of its group."""
        left = np.flatnonzero(((before == m) | (self.stood == m)) & (after != m))
        joined = np.flatnonzero((after == m) & (before != m))
        stayed = np.flatnonzero((after == m) & (before == m))
        reasons = [
            *(self._loss(i, m, then, now) for i in (*left, *stayed)),
            *(self._gain(i, m, then, now) for i in joined),
            self._task(m, then, now),
        ]
        return min(filter(None, reasons), key=lambda reason: reason.rank, default=None)

    def _loss(self, i: int, m: int, then: Situation, now: Situation) -> _Reason | None:
        """Tell what took robot i from task m, or made it less able to do it."""
        name, task = self.model.robots[i], self.model.tasks[m]
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
            return _Reason(3, Cause.FEATURE, self._failed(i, then, now))
        if then.enough[i, m] and not now.enough[i, m]:
            return _Reason(4, Cause.ENERGY, f"{name} has too little energy left for {task}")
        if then.way[i, m] and not now.way[i, m]:
            return _Reason(5, Cause.TASK, f"{name} finds no way to {task} any more")
        if then.trusted[i, m] and not now.trusted[i, m]:
            return _Reason(5, Cause.EFFICACY, self._progress(i, m, now))
        return None

    def _gain(self, i: int, m: int, then: Situation, now: Situation) -> _Reason | None:
        """Tell what brought robot i to task m."""
        name, task = self.model.robots[i], self.model.tasks[m]
        if now.pinned[i, m] and not then.pinned[i, m]:
            return _Reason(0, Cause.PIN, f"{name} is pinned to {task}")
        if not then.known[i]:
            return _Reason(7, Cause.START, f"{name} is heard for the first time")
        if not then.heard[i] and now.heard[i]:
            return _Reason(2, Cause.RETURNED, f"{name} is heard again")
        if now.suitability[i, m] > then.suitability[i, m] + NOTICEABLE:
            return _Reason(3, Cause.FEATURE, self._works_again(i, then, now))
        if now.enough[i, m] and not then.enough[i, m]:
            return _Reason(4, Cause.ENERGY, f"{name} has enough energy again for {task}")
        if now.way[i, m] and not then.way[i, m]:
            return _Reason(6, Cause.TASK, f"{name} is the one to get to {task} now")
        if then.banned[i, m] and not now.banned[i, m]:
            return _Reason(6, Cause.PIN, f"{name} is no longer banned from {task}")
        if now.trusted[i, m] and not then.trusted[i, m]:
            return _Reason(6, Cause.EFFICACY, f"{name} may try {task} again")
        return None

    def _task(self, m: int, then: Situation, now: Situation) -> _Reason | None:
        """Tell what changed about task m itself."""
        name = self.model.tasks[m]
        if then.active[m] and not now.active[m]:
            if name in now.finished:
                return _Reason(1, Cause.TASK, f"{name} is finished")
            target = now.tasks[m].keeps_to
            if now.tasks[m].active and isinstance(target, Target) and target.task:
                return _Reason(1, Cause.TASK, f"{target.task}, which {name} keeps to, is over")
            return _Reason(1, Cause.TASK, f"{name} is switched off")
        if now.active[m] and not then.active[m]:
            if not then.heard.any():
                return _Reason(6, Cause.START, f"{name} gets its first robots")
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
        busy = [i for i in robots if before[i] >= 0]

        fall = {i: then.efficacy[i, before[i]] - now.efficacy[i, before[i]] for i in busy}
        worst = max(fall, key=fall.get, default=None)
        lost = np.maximum(now.efficacy, 1e-3) / np.maximum(then.efficacy, 1e-3)
        if worst is not None and fall[worst] > NOTICEABLE and (
            self._saving(now.prices * lost, robots, before, after, swap_cost) <= 0
        ):
            return _Reason(8, Cause.EFFICACY, self._progress(worst, before[worst], now))

        dearer = now.dearness / then.dearness
        sags = robots[np.argmax(dearer[robots])]
        if dearer[sags] > DEARER and (
            self._saving(now.prices / dearer[:, None], robots, before, after, swap_cost) <= 0
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

    def _failed(self, i: int, then: Situation, now: Situation) -> str:
        worse = np.flatnonzero(now.health[i] < then.health[i])
        names = ", ".join(self.model.features[f] for f in worse)
        said = "; ".join(self.say_feature(i, f) for f in worse)
        return f"{self.model.robots[i]}: {names} failed ({said})"

    def _works_again(self, i: int, then: Situation, now: Situation) -> str:
        better = np.flatnonzero(now.health[i] > then.health[i])
        names = ", ".join(self.model.features[f] for f in better)
        return f"{self.model.robots[i]}: {names} works again"


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
