"""What survives a restart: what was learned, done, heard and decided; plain JSON-able data.

With the assignment goes what it rests on, failed features and charges: without them
the first decisions after a restart would be made as if all were well.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from .belief import EfficacyBelief
from .model import Model
from .observation import MovedGoal
from .work import Work

FARTHEST = 1e6
"""Coordinates beyond this, m, are no places of robots."""


@dataclass(frozen=True)
class Memory:
    """What an earlier run left, by name.

    Attributes:
        learned: (robot, task, efficacy, failed tries, waiting for the next try).
        finished: Tasks that have come to their end, with the fingerprint of their work; ""
            where it is not known.
        assignment: Robot to task.
        troubles: Diagnostic status that was not OK to its level and text.
        charges: Robot to charge, 0..1.
        charging: Robots that were charging or on their way to it.
        work: Task to what is done of it, in the form of its kind.
        places: Robot to where it was last: x, y, z (m), heading (rad). One that is silent
            after a restart is still in the way.
        hold: Whether all robots were told to stand.
        moved: Tasks whose place was moved, each with the fingerprint of its definition
            before.
    """

    learned: tuple[tuple[str, str, float, int, bool], ...]
    finished: Mapping[str, str]
    work: Mapping[str, Any]
    assignment: Mapping[str, str]
    troubles: Mapping[str, tuple[int, str]]
    charges: Mapping[str, float]
    charging: tuple[str, ...]
    places: Mapping[str, tuple[float, ...]]
    hold: bool
    moved: tuple[tuple[MovedGoal, str], ...]

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
            prints = data.get("fingerprints", {})
            finished = {str(name): str(prints.get(name, "")) for name in data["finished"]}
            work = {str(name): saved for name, saved in data.get("work", {}).items()}
            assignment = {str(robot): str(task) for robot, task in data["assignment"].items()}
            troubles = {
                str(name): (int(level), str(text))
                for name, (level, text) in data.get("troubles", {}).items()
            }
            charges = {str(k): float(charge) for k, charge in data.get("charges", {}).items()}
            charging = tuple(str(name) for name in data.get("charging", ()))
            places = {
                str(name): tuple(map(float, pose)) for name, pose in data.get("places", {}).items()
            }
            hold = bool(data.get("hold", False))
            moved = tuple(
                (MovedGoal(str(name), *_goal(entry["at"], entry["heading"])), str(entry["from"]))
                for name, entry in data.get("moved", {}).items()
            )
        except (LookupError, TypeError, ValueError, AttributeError, OverflowError) as error:
            raise ValueError(f"not an allocator's memory: {error!r}") from error
        if not all(0 <= value <= 1 for value in (*(row[2] for row in learned), *charges.values())):
            raise ValueError("not an allocator's memory: an efficacy or charge is not within 0..1")
        if not all(len(p) == 4 and all(abs(v) <= FARTHEST for v in p) for p in places.values()):
            raise ValueError("not an allocator's memory: a place is not x, y, z, heading")
        return cls(
            learned, finished, work, assignment, troubles, charges, charging, places, hold, moved
        )


def _goal(at: Any, heading: Any) -> tuple[tuple[float, float, float], float | None]:
    """Read where a task was moved to.

    Raises:
        TypeError, ValueError: It is no place.
    """
    x, y, z = map(float, at)
    turn = None if heading is None else float(heading)
    if not all(abs(value) <= FARTHEST for value in (x, y, z, turn or 0.0)):
        raise ValueError("a goal is not x, y, z and heading")
    return (x, y, z), turn


def remember(
    model: Model,
    efficacy: EfficacyBelief,
    work: Work,
    assignment: np.ndarray,
    troubles: Mapping[str, tuple[int, str]],
    charge: np.ndarray,
    charging: np.ndarray,
    poses: np.ndarray,
    hold: bool,
    moved: Mapping[str, tuple[MovedGoal, str]],
) -> dict[str, Any]:
    """Give what should survive a restart; assignment, charge and charging are (N,).

    Poses are (N, 4), NaN where not known; moved tasks come with the fingerprint of what
    they were before.
    """
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
        "finished": sorted(work.finished()),
        "fingerprints": {name: work.fingerprint(name) for name in sorted(work.finished())},
        "work": work.saved(),
        "assignment": {
            model.robots[i]: model.tasks[m] for i, m in enumerate(assignment) if m >= 0
        },
        "troubles": {name: list(status) for name, status in sorted(troubles.items())},
        "charges": {
            name: round(float(share), 4)
            for name, share in zip(model.robots, charge, strict=True)
        },
        "charging": [model.robots[i] for i in np.flatnonzero(charging)],
        "places": {
            name: [round(float(value), 3) for value in pose]
            for name, pose in zip(model.robots, poses, strict=True)
            if np.isfinite(pose).all()
        },
        "hold": hold,
        "moved": {
            name: {"at": list(goal.at), "heading": goal.heading, "from": origin}
            for name, (goal, origin) in sorted(moved.items())
        },
    }
