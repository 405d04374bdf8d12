"""Who would start where, and why."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from ..belief.energy import way_energy
from ..decision import Decision
from ..model import Model


@dataclass(frozen=True)
class Place:
    """One robot's start.

    Attributes:
        robot, task: Names.
        distance_m: Straight to its first goal, m.
        energy_wh: What that way takes, Wh.
        why: The reason in words.
    """

    robot: str
    task: str
    distance_m: float
    energy_wh: float
    why: str


def places(model: Model, start: Decision) -> list[Place]:
    """Give the start of each robot that has a task."""
    return [
        _place(model, start, i) for i in np.flatnonzero(start.assignment >= 0)
    ]


def task_points(start: Decision) -> np.ndarray:
    """Give the middle of each group's goals, (M, 2), m; NaN where nobody does the task."""
    points = np.full((len(start.tasks), 2), np.nan)
    for m in range(len(start.tasks)):
        group = start.assignment == m
        if group.any():
            points[m] = start.goals[group, :2].mean(axis=0)
    return points


def _place(model: Model, start: Decision, i: int) -> Place:
    m = start.assignment[i]
    apart = start.goals[i] - start.poses[i, :3]
    distance = float(np.linalg.norm(apart[np.isfinite(apart)]))
    energy = float(way_energy(model, np.full(len(model.robots), distance))[i])
    return Place(
        model.robots[i], model.tasks[m], distance, energy, _why(model, start, i, m, distance)
    )


def _why(model: Model, start: Decision, i: int, m: int, distance: float) -> str:
    able = np.flatnonzero(start.able[:, m])
    if len(able) == 1:
        return "the only one able"
    if (start.assignment[able] == m).all():
        return f"all {len(able)} able are needed"
    away = np.linalg.norm(start.poses[able, :2] - start.goals[i, :2], axis=1)
    nearer = [j for j, way in zip(able, away, strict=True) if way < distance - 0.05 and j != i]
    nearer = [j for j in nearer if start.assignment[j] != m]
    text = f"one of {len(able)} able"
    if not nearer:
        return f"{text}, the nearest"
    idle = [model.robots[j] for j in nearer if start.assignment[j] < 0]
    if idle:
        return f"{text}; nearer but dearer: {_listed(idle)}"
    busy = (f"{model.robots[j]} (on {model.tasks[start.assignment[j]]})" for j in nearer)
    return f"{text}; nearer but busy: {_listed(busy)}"


def _listed(names: Iterable[str]) -> str:
    names = list(names)
    return ", ".join(names[:2]) + (f" and {len(names) - 2} more" if len(names) > 2 else "")
