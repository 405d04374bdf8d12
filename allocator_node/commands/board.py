"""What is known of a running allocator: filled by its messages, read by the screen."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from threading import Lock
from typing import Any

SPECIALIZATION = "specialization."
"""Prefix of the keys that give a robot's specialization for a task."""


@dataclass(frozen=True)
class Row:
    """One robot: name, task ("": none), specialization by task, charge 0..1 or NaN, state.

    The text is what the state says beyond the task; "" when all is well.
    """

    robot: str
    task: str
    specialization: Mapping[str, float]
    charge: float
    level: int
    text: str


@dataclass(frozen=True)
class Change:
    """One reallocation; ``t`` counts from the start of the run, s."""

    t: float
    task: str
    before: str
    after: str
    cause: str
    detail: str

    def __str__(self) -> str:
        groups = f"{self.before or 'nobody'} → {self.after or 'nobody'}"
        return f"{self.t:6.1f} s  {self.task}: {groups}  [{self.cause}] {self.detail}"


@dataclass(frozen=True)
class Lack:
    """Time without full cover so far, s, and what is uncovered now ("": nothing)."""

    seconds: float = 0.0
    now: str = ""


@dataclass
class Board:
    """Gathers messages, from the thread that hears them, for the thread that shows them.

    Attributes:
        started: Stamp of the first change, s; None until the allocator decides.
        rows: Present state of each robot, in the allocator's order.
        changes: All reallocations so far.
        lack: What was and is uncovered.
    """

    started: float | None = None
    rows: list[Row] = field(default_factory=list)
    changes: list[Change] = field(default_factory=list)
    lack: Lack = field(default_factory=Lack)
    lock: Lock = field(default_factory=Lock)

    def assigned(self, statuses: list[Mapping[str, Any]]) -> None:
        """Take the state of all robots."""
        rows = [row_of(status) for status in statuses]
        with self.lock:
            self.rows = rows

    def reallocated(self, status: Mapping[str, Any]) -> None:
        """Take one change."""
        values = status["values"]
        stamp = number(values.get("stamp", ""))
        with self.lock:
            if self.started is None or math.isnan(self.started):
                self.started = stamp
            change = Change(
                stamp - self.started,
                values.get("task", status["name"]),
                values.get("from", ""),
                values.get("to", ""),
                values.get("cause", ""),
                values.get("detail", status["text"]),
            )
            self.changes.append(change)

    def lacks(self, now: str, elapsed: float) -> None:
        """Take what is uncovered now, after a time in which the last news held."""
        with self.lock:
            seconds = self.lack.seconds + (elapsed if self.lack.now else 0.0)
            self.lack = Lack(seconds, now)


def row_of(status: Mapping[str, Any]) -> Row:
    """Give the row of one status of ``~/assignments``."""
    values, robot = status["values"], status["name"]
    task = values.get("task", "")
    known = f"{robot} does {task}" if task else f"{robot} has no task"
    return Row(
        robot=robot,
        task=task,
        specialization={
            key.removeprefix(SPECIALIZATION): number(value)
            for key, value in values.items()
            if key.startswith(SPECIALIZATION)
        },
        charge=number(values.get("energy", "")),
        level=status["level"],
        text=re.sub(r"^(,|;| and) ", "", status["text"].removeprefix(known)),
    )


def number(text: str) -> float:
    """Give the number a text starts with, NaN where it starts with none."""
    try:
        return float(text.split()[0].rstrip("%")) / (100 if "%" in text else 1)
    except (ValueError, IndexError):
        return math.nan
