r"""How long standing tasks can be held: on one charge, and for ever with charging.

For ever is a question of time shares. Robot i holds task m for the share x_im of all
time and charges for the share y_i. A stint on one charge lasts h_im and costs the way
there and back, t_im, on top; with usable energy U_i and charging power P_i,

.. math::

    \sum_m x_{im} (h_{im} + t_{im}) / h_{im} + y_i \le 1, \qquad
    \sum_m x_{im} U_i / h_{im} \le P_i y_i, \qquad
    \sum_{i \text{ at a dock}} y_i \le 1, \\
    \sum_i x_{im} c_{ik} \ge z_m T_{mk}, \qquad \sum_i x_{im} \ge z_m \min_m, \qquad 0 \le z \le 1

and Σ z is maximized class by class. It is an upper bound: a schedule could at best
reach these shares, no schedule more.
"""

from __future__ import annotations

from dataclasses import dataclass

import cvxpy as cp
import numpy as np

from ..belief.energy import SECONDS_PER_HOUR
from ..charging import dock_of
from ..decision import Decision
from ..model import Model
from ..program.problem import LEVELS
from ..team import Team
from ..work import Work
from .start import task_points

HELD = 1e-5
"""Share a class may lose to those below it: well above the solver's tolerance of 1e-7."""


@dataclass(frozen=True)
class Endurance:
    """How long one standing task can be held.

    Attributes:
        task: Name.
        robots: Its group at the start.
        hours: Until the first of them must leave, on the charge it starts with; None:
            nobody does the task.
        share: Share of all time it can be covered at best, taking turns at the docks.
    """

    task: str
    robots: tuple[str, ...]
    hours: float | None
    share: float


def endurance(team: Team, start: Decision) -> list[Endurance]:
    """Give the endurance of each standing task.

    Args:
        team: The team.
        start: Who starts where.
    """
    model = Model(team)
    lasting = np.array([not task.ends for task in team.tasks.values()], dtype=bool)
    standing = lasting & Work(team).active()
    hours, trips = stints(team, model, start)
    shares = _shares(model, start, standing, hours, trips)
    result = []
    for m in np.flatnonzero(standing):
        group = np.flatnonzero(start.assignment == m)
        shortest = float(hours[group, m].min()) if len(group) else None
        result.append(Endurance(model.tasks[m], start.group_of(m), shortest, float(shares[m])))
    return result


def stints(team: Team, model: Model, start: Decision) -> tuple[np.ndarray, np.ndarray]:
    """Give time at each task on a full charge and time on the way there and back, h, (N, M).

    The way leads from the dock (or the start) to the middle of the group's goals; to a
    task that nobody does it counts as no way at all.
    """
    homes = np.array([robot.dock or robot.start[:2] for robot in team.robots.values()])
    points = task_points(start)
    way = np.nan_to_num(np.linalg.norm(homes[:, None] - points[None], axis=2))
    trips = 2 * way / model.fleet.cruise[:, None] / SECONDS_PER_HOUR
    usable = (model.capacity * (1 - model.reserve))[:, None]
    full = (model.idle + model.drive)[:, None]
    effort = (model.fleet.cruise / model.fleet.max_speed)[:, None] * _moves(team)
    power = model.idle[:, None] + model.drive[:, None] * effort
    left = np.maximum(usable - trips * full, 0.0)
    return np.divide(left, power, out=np.full(left.shape, np.inf), where=power > 0), trips


def _moves(team: Team) -> np.ndarray:
    """Tell which tasks keep their robots driving, (M,): those without a place to arrive at."""
    return np.array([getattr(task, "tolerance", None) is None for task in team.tasks.values()])


def _shares(
    model: Model,
    start: Decision,
    standing: np.ndarray,
    hours: np.ndarray,
    trips: np.ndarray,
) -> np.ndarray:
    """Give z_m, (M,)."""
    robots, tasks = hours.shape
    able = start.able & standing & (hours > 0)
    if not able.any():
        return np.zeros(tasks)
    x = cp.Variable((robots, tasks), nonneg=True)
    y, z = cp.Variable(robots, nonneg=True), cp.Variable(tasks, nonneg=True)
    stint = np.where(able, hours, 1.0)
    time = np.where(np.isfinite(stint), 1 + trips / stint, 1.0)
    usable = model.capacity * (1 - model.reserve)
    used = usable[:, None] / stint
    capability = model.capability(model.declared.astype(float))
    rules = [
        cp.sum(cp.multiply(time, x), axis=1) + y <= 1,
        cp.sum(cp.multiply(used, x), axis=1) <= cp.multiply(model.charge, y),
        x[~able] == 0,
        z <= standing.astype(float),
        cp.sum(x, axis=0) >= cp.multiply(model.least, z),
        x.T @ capability >= cp.multiply(model.needs, z[:, None]),
    ]
    if not model.has_dock.all():
        rules.append(y[np.flatnonzero(~model.has_dock)] == 0)
    docks = dock_of(model)
    for dock in np.unique(docks[docks >= 0]):
        rules.append(cp.sum(y[np.flatnonzero(docks == dock)]) <= 1)
    for level in LEVELS:
        at = np.flatnonzero(standing & (model.priority == level))
        if len(at):
            problem = cp.Problem(cp.Maximize(cp.sum(z[at])), rules)
            problem.solve(solver=cp.SCIPY)
            rules.append(cp.sum(z[at]) >= problem.value - HELD)
    return np.clip(z.value, 0.0, 1.0)
