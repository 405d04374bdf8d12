"""Places that edges of the site keep robots from: of tasks, and docks."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from ..belief.energy import DOCKED
from ..model import Model
from ..program import Safety
from ..program.ways import Ways
from ..settings import Settings
from ..team import Team


@dataclass(frozen=True)
class Tight:
    """A place a robot cannot come near enough to.

    Attributes:
        place: Name of the task, or "dock".
        robot: Name.
        within_m: How near it should come, m.
        kept_m: How near body and margin let it come, m.
    """

    place: str
    robot: str
    within_m: float
    kept_m: float


def tight(team: Team, settings: Settings) -> list[Tight]:
    """Give the places of tasks, and docks, that robots meant to go there cannot.

    Args:
        team: The team.
        settings: Gives the margin.
    """
    model = Model(team)
    ways = Ways(team, Safety(team, model, settings).reach + settings.margin)
    capability = model.capability(model.declared.astype(float))
    able = model.alone(capability) & (model.suitability(capability) > 0)
    found = []
    for m, task in enumerate(team.tasks.values()):
        if not task.stops:
            continue
        out = ~ways.admitted(task.stops)
        gaps = np.array([ways.gap(point) for point, _ in task.stops])
        worst = gaps.argmax(axis=0)
        found += [
            Tight(task.name, model.robots[i], task.stops[worst[i]][1], float(gaps[worst[i], i]))
            for i in np.flatnonzero(out & able[:, m])
        ]
    return found + list(_docks(team, model, ways))


def _docks(team: Team, model: Model, ways: Ways) -> Iterator[Tight]:
    for i, robot in enumerate(team.robots.values()):
        if robot.dock is not None and not ways.admitted(((robot.dock, DOCKED),))[i]:
            yield Tight("dock", robot.name, DOCKED, float(ways.gap(robot.dock)[i]))
