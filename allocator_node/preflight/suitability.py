"""Which robot suits which task, and the way that gives it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..model import Model
from ..team import Team, Way


@dataclass(frozen=True)
class Fit:
    """How one robot suits one task.

    Attributes:
        robot, task: Names.
        suitability: a_im.
        ways: Capability to the number of the way that gives it, counted from 0; only
            those the task asks for.
        able: Whether the robot is eligible at the start.
    """

    robot: str
    task: str
    suitability: float
    ways: dict[str, int]
    able: bool


def fits(team: Team, able: np.ndarray) -> list[list[Fit]]:
    """Give for each robot its fit for each task; ``able``: eligibility, shape (N, M)."""
    model = Model(team)
    suitability = model.suitability(model.capability(model.declared.astype(float)))
    return [
        [
            Fit(
                robot.name,
                task.name,
                float(suitability[i, m]),
                {
                    name: way
                    for name in dict.fromkeys((*task.needs, *task.each))
                    if (way := best_way(robot.features, team.capabilities[name])) is not None
                },
                bool(able[i, m]),
            )
            for m, task in enumerate(team.tasks.values())
        ]
        for i, robot in enumerate(team.robots.values())
    ]


def best_way(features: tuple[str, ...], ways: tuple[Way, ...]) -> int | None:
    """Give the number of the best way these features allow; None: no way."""
    open_ways = [w for w, way in enumerate(ways) if set(way.features) <= set(features)]
    return max(open_ways, key=lambda w: ways[w].grade, default=None)
