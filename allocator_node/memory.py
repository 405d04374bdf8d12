"""What survives a restart: efficacies, finished tasks, the assignment; plain JSON-able data."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from .belief import EfficacyBelief
from .model import Model


@dataclass(frozen=True)
class Memory:
    """What an earlier run left, by name.

    Attributes:
        learned: (robot, task, efficacy, failed tries, waiting for the next try).
        finished: Names of tasks that have come to their end.
        assignment: Robot to task.
    """

    learned: tuple[tuple[str, str, float, int, bool], ...]
    finished: tuple[str, ...]
    assignment: Mapping[str, str]

    @classmethod
    def read(cls, data: Mapping[str, Any]) -> Memory:
        """Read what :func:`remember` gave.

        Raises:
            ValueError: It is not of that form.
        """
        try:
            learned = tuple(
                (
                    str(entry["robot"]),
                    str(entry["task"]),
                    float(entry["value"]),
                    int(entry["failures"]),
                    bool(entry["barred"]),
                )
                for entry in data["efficacy"]
            )
            finished = tuple(str(name) for name in data["finished"])
            assignment = {str(robot): str(task) for robot, task in data["assignment"].items()}
        except (KeyError, TypeError, ValueError, AttributeError) as error:
            raise ValueError(f"not an allocator's memory: {error!r}") from error
        if not all(0 <= value <= 1 for _, _, value, _, _ in learned):
            raise ValueError("not an allocator's memory: an efficacy is not between 0 and 1")
        return cls(learned, finished, assignment)


def remember(
    model: Model, efficacy: EfficacyBelief, finished: frozenset[str], assignment: np.ndarray
) -> dict[str, Any]:
    """Give what should survive a restart; assignment (N,)."""
    robots, tasks = np.nonzero((efficacy.eta < 0.999) | (efficacy.failures > 0))
    return {
        "efficacy": [
            {
                "robot": model.robots[i],
                "task": model.tasks[m],
                "value": float(efficacy.eta[i, m]),
                "failures": int(efficacy.failures[i, m]),
                "barred": bool(efficacy.barred[i, m]),
            }
            for i, m in zip(robots, tasks, strict=True)
        ],
        "finished": sorted(finished),
        "assignment": {
            model.robots[i]: model.tasks[m] for i, m in enumerate(assignment) if m >= 0
        },
    }
