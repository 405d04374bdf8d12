"""From beliefs and goals to the numbers of one period's program."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..belief.energy import SECONDS_PER_HOUR, way_energy
from ..model import Model
from ..settings import Settings
from ..tasks import Goals
from .guidance import offsets
from .problem import Problem
from .ways import Ways


class GoalTable:
    """The goals of all tasks as arrays (N, M, ...).

    Attributes are those of :class:`~allocator_node.tasks.Goals` but ``facing``; dwell is
    (M,), velocities are (1, M, 3) where nothing moves; a NaN path is straight to the
    goal; ``moving`` tells whether any goal moves.
    """

    def __init__(self, goals: list[Goals], robots: int) -> None:
        count = len(goals)
        points = np.empty((count, robots, 3))
        path = np.full((count, robots), np.nan)
        pace, tolerance = np.empty((count, robots)), np.empty((count, robots))
        self.moving = any(np.any(goal.velocities) for goal in goals)
        velocities = np.zeros((count, robots if self.moving else 1, 3))
        for m, goal in enumerate(goals):
            points[m] = goal.points
            if goal.path is not None:
                path[m] = goal.path
            pace[m], tolerance[m] = goal.pace, goal.tolerance
            if self.moving:
                velocities[m] = goal.velocities
        self.points, self.velocities = points.swapaxes(0, 1), velocities.swapaxes(0, 1)
        self.path, self.pace, self.tolerance = path.T, pace.T, tolerance.T
        self.dwell = np.array([goal.dwell for goal in goals])


@dataclass(frozen=True, kw_only=True)
class Known:
    """What the program is made of beside the goals.

    Attributes:
        poses, points, jacobians: As in the period's view; (N, 4), (N, 3), (N, 3, 4).
        gear: As in the program, shape (N,).
        heard: Robots heard from, shape (N,).
        capability, suitability, efficacy: c (N, K), a (N, M), η (N, M).
        trusted: Where the efficacy allows the pair, shape (N, M).
        spendable: Energy above the reserve, Wh, shape (N,).
        dearness: λ, shape (N,).
        restless: Factor of what another swap costs, for robots that were swapped lately,
            shape (N,).
        admitted: Where the robot can come near enough to the task's places, shape (N, M).
        active: Tasks to be done now, shape (M,).
        charging: Robots that are to charge first, shape (N,).
        pinned, banned: The operator's orders, shape (N, M).
        previous: Task each robot has, −1: none, shape (N,).
    """

    poses: np.ndarray
    points: np.ndarray
    jacobians: np.ndarray
    gear: np.ndarray
    heard: np.ndarray
    capability: np.ndarray
    suitability: np.ndarray
    efficacy: np.ndarray
    trusted: np.ndarray
    spendable: np.ndarray
    dearness: np.ndarray
    restless: np.ndarray
    admitted: np.ndarray
    active: np.ndarray
    charging: np.ndarray
    pinned: np.ndarray
    banned: np.ndarray
    previous: np.ndarray


@dataclass(frozen=True)
class Means:
    """What a pair needs beside ability: energy, a way, and room at its end; each (N, M)."""

    enough: np.ndarray
    way: np.ndarray
    admitted: np.ndarray


def formulate(
    model: Model, settings: Settings, known: Known, goals: list[Goals], ways: Ways
) -> tuple[Problem, Means]:
    """Put the period's program into numbers.

    Energy to reach the goal and serve there, E = (idle + drive) · path / c + idle ·
    dwell, becomes a price e = (λ E + urgency · path / (3600 c)) / s; a robot is
    eligible only where it could do that and still reach its dock with its reserve
    and the margin kept for that.

    Args:
        model: The team.
        settings: Weights and times.
        known: What is known.
        goals: Goals of each task.
        ways: Ways around the site's areas; a pair with none is not eligible.

    Returns:
        The program, and what each pair has of energy, way and room.
    """
    robots, tasks = known.suitability.shape
    table = GoalTable(goals, robots)
    may = (
        (known.suitability > 0)
        & known.trusted
        & known.heard[:, None]
        & ~known.charging[:, None]
        & ~known.banned
        & known.active
    )
    lead = ways.outlook(known.points, table.points, may)
    offset = offsets(model, known.poses, known.points, lead.steer)
    distance = np.hypot(lead.length, offset[..., 2])
    away = offset / -np.maximum(np.sqrt((offset**2).sum(axis=2)), 1e-9)[:, :, None]
    cruise = model.fleet.cruise[:, None]
    closing = table.pace * np.minimum(settings.gamma * distance, cruise)
    closing[distance <= table.tolerance] = 0.0
    path = np.where(np.isnan(table.path), distance, table.path)
    reachable = np.isfinite(path) & np.isfinite(lead.length)
    way = reachable & _has_room(model, known, may & reachable)
    path = np.where(reachable, path, 0.0)

    serving = way_energy(model, path) + model.idle[:, None] * table.dwell / SECONDS_PER_HOUR
    docks = np.column_stack([model.docks, np.zeros(robots)])
    home = ways.outlook(docks, table.points, may & model.has_dock[:, None], "home").length
    way_home = np.where(model.has_dock[:, None] & np.isfinite(home), home, 0.0)
    kept = known.spendable - settings.dock_margin * model.capacity * model.has_dock
    enough = serving + way_energy(model, way_home) <= kept[:, None]

    s = known.suitability * known.efficacy
    dearness = known.dearness[:, None]
    urgent = model.urgency * path / (SECONDS_PER_HOUR * cruise)
    eligible = may & enough & way
    pins = known.pinned & eligible
    pinned = np.full(robots, -1)
    if tasks:
        ordered = pins.any(axis=1)
        pinned[ordered] = pins[ordered].argmax(axis=1)
    swapped = way_energy(model, np.full(robots, settings.swap_distance))
    speed = (away * table.velocities).sum(axis=2) if table.moving else np.zeros(distance.shape)
    # No robot is asked for more than it can do, so nobody is dear for a goal that leaps.
    speed = np.maximum(speed, closing - model.fleet.max_speed[:, None])
    problem = Problem(
        capability=known.capability,
        needs=np.where(known.active[:, None], model.needs, 0.0),
        least=np.where(known.active, model.least, 0),
        most=model.most,
        priority=model.priority,
        eligible=eligible,
        pinned=pinned,
        previous=known.previous,
        swap_cost=known.dearness * swapped * known.restless,
        energy=np.where(eligible, dearness * serving + urgent, 0.0)
        / np.maximum(s, settings.s_min),
        limits=model.fleet.limits,
        gear=known.gear,
        jacobians=known.jacobians,
        away=away,
        closing=closing,
        goal_speed=speed,
        kappa=settings.kappa,
        slack_weight=settings.slack_weights(model.fleet.cruise),
        path=path,
    )
    return problem, Means(enough, way, known.admitted)


def _has_room(model: Model, known: Known, may: np.ndarray) -> np.ndarray:
    """Tell where a robot's size is no reason to leave a task to others, shape (N, M).

    It is one where the robot cannot come near enough, and another one can that would
    do alone. Where nobody can, getting as near as margins allow is the best there is.
    """
    if known.admitted.all():
        return known.admitted
    better = may & known.admitted & model.alone(known.capability)
    return known.admitted | ~better.any(axis=0) | known.pinned
