r"""Which extra feature on which robot would remove the most weak points.

A weak point is a task that some case leaves uncovered: no loss at all, or one single
loss. With candidates j = (robot, feature), cases ℓ and the capabilities c' a robot
would have with the extra,

.. math::

    \max \sum_{ℓm} z_{ℓm} \quad \text{s.t.} \quad
    \sum_j x_j \le 1, \qquad y_{ℓjm} \le x_j, \qquad
    \sum_m α_{ℓim} + \sum_{j \in i} \sum_m y_{ℓjm} \le [i \text{ is there in } ℓ], \\
    \sum_i α_{ℓim} c_{ℓik} + \sum_j y_{ℓjm} c'_{ℓjk} \ge T_{mk} z_{ℓm}, \qquad
    \min_m z_{ℓm} \le \sum_i α_{ℓim} + \sum_j y_{ℓjm} \le \max_m, \\
    z_{ℓm} = 1 \text{ where the case covers } m \text{ as it is}

over binary x, y, α, z: y is a robot at work with its extra, α one without.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import cvxpy as cp
import numpy as np

from ..model import Model
from ..settings import Settings
from ..team import Robot, Team
from .losses import Loss, without
from .standing import decide

LARGEST = 60_000
"""Most binaries the program may have; a larger one is not worth the wait."""

TIME_LIMIT = 60.0
"""Longest search, s; the best found until then is taken."""


@dataclass(frozen=True)
class Extra:
    """A feature worth adding.

    Attributes:
        robot, feature: What to add where.
        removed: Weak points it removes.
        of: Weak points there are.
    """

    robot: str
    feature: str
    removed: int
    of: int


@dataclass(frozen=True)
class Case:
    """A loss (None: nothing is lost) and the tasks it leaves uncovered."""

    loss: Loss | None
    uncovered: frozenset[str]


class TooLarge(Exception):
    """The program would have too many binaries to be solved while somebody waits."""


def best_extra(
    team: Team, settings: Settings, cases: Sequence[Case], excluded: Sequence[Extra] = ()
) -> Extra | None:
    """Give the extra feature that removes the most weak points; None: none removes any.

    Args:
        team: The team.
        settings: Weights and times.
        cases: Cases that leave something uncovered.
        excluded: Extras not to be given again.

    Raises:
        TooLarge: The program has more than :data:`LARGEST` binaries.
    """
    taken = {(extra.robot, extra.feature) for extra in excluded}
    candidates = [c for c in _candidates(team) if (c[0].name, c[1]) not in taken]
    if not cases or not candidates:
        return None
    model = Model(team)
    enough = _enough(team, settings)
    parts = [_Part(model, team, settings, case, candidates, enough) for case in cases]
    size = sum(part.size for part in parts)
    if size > LARGEST:
        raise TooLarge(f"{size} binaries, more than {LARGEST}")
    x = cp.Variable(len(candidates), boolean=True)
    gained, rules = 0, [cp.sum(x) <= 1]
    for part in parts:
        gain, more = part.stated(x)
        gained, rules = gained + gain, rules + more
    # Equal gains are decided by the order in the file.
    order = np.arange(len(candidates)) / (2 * len(candidates))
    problem = cp.Problem(cp.Maximize(gained - order @ x), rules)
    # HiGHS by way of SciPy: by way of highspy it prints a banner into a command's output.
    try:
        problem.solve(solver=cp.SCIPY, scipy_options={"time_limit": TIME_LIMIT})
    except cp.SolverError:  # not one solution within the time
        return None
    if x.value is None or gained.value < 0.5:
        return None
    robot, feature = candidates[int(np.argmax(x.value))]
    weak = sum(len(case.uncovered) for case in cases)
    return Extra(robot.name, feature, round(float(gained.value)), weak)


def with_feature(team: Team, robot: str, feature: str) -> Team:
    """Give the team with one more feature on a robot."""
    changed = replace(team.robots[robot], features=(*team.robots[robot].features, feature))
    return replace(team, robots={**team.robots, robot: changed})


def _candidates(team: Team) -> list[tuple[Robot, str]]:
    """Give the robots with the features they lack that are in some way to a capability."""
    useful = dict.fromkeys(f for ways in team.capabilities.values() for w in ways
                           for f in w.features)  # fmt: skip
    return [(r, f) for r in team.robots.values() for f in useful if f not in r.features]


def _enough(team: Team, settings: Settings) -> np.ndarray:
    """Tell where nothing but a feature could be missing: energy, activity; (N, M)."""
    every = {f for robot in team.robots.values() for f in robot.features} | {
        f for ways in team.capabilities.values() for way in ways for f in way.features
    }
    robots = {
        name: replace(robot, features=tuple(sorted(every)), health=())
        for name, robot in team.robots.items()
    }
    return decide(replace(team, robots=robots), settings).able


class _Part:
    """One case's share of the program."""

    def __init__(
        self,
        model: Model,
        team: Team,
        settings: Settings,
        case: Case,
        candidates: Sequence[tuple[Robot, str]],
        enough: np.ndarray,
    ) -> None:
        self._model = model
        lost = case.loss.silent if case.loss else ()
        left = without(team, case.loss) if case.loss else team
        self._there = np.array([name not in lost for name in model.robots])
        self._active = enough.any(axis=0)
        health = _health(model, list(left.robots.values()))
        self._c = model.capability(health)
        able = (model.suitability(self._c) >= settings.s_min) & enough & self._there[:, None]
        self._owner = np.array([model.robots.index(robot.name) for robot, _ in candidates])
        self._extra_c = np.zeros((len(candidates), len(model.capabilities)))
        open_now = np.zeros((len(candidates), len(model.tasks)), dtype=bool)
        for feature in {feature for _, feature in candidates}:
            # Robots do not depend on each other: give the feature to all at once.
            more = health.copy()
            more[:, model.features.index(feature)] = 1.0
            c = model.capability(more)
            fits = (model.suitability(c) >= settings.s_min) & enough & self._there[:, None]
            given = [j for j, (_, other) in enumerate(candidates) if other == feature]
            self._extra_c[given], open_now[given] = c[self._owner[given]], fits[self._owner[given]]
        gains = (self._extra_c - self._c[self._owner]) @ (model.needs.T > 0) > 0
        self._alpha = np.argwhere(able & self._active)
        self._y = np.argwhere(open_now & (gains | ~able[self._owner]) & self._active)
        self._covered = np.array([name not in case.uncovered for name in model.tasks])
        self.size = len(self._alpha) + len(self._y)

    def stated(self, x: cp.Variable) -> tuple[cp.Expression, list[cp.Constraint]]:
        """State this case; give the weak points it loses, and its constraints."""
        model, tasks = self._model, len(self._model.tasks)
        alpha = cp.Variable(max(len(self._alpha), 1), boolean=True)
        y = cp.Variable(max(len(self._y), 1), boolean=True)
        z = cp.Variable(tasks, boolean=True)
        by_robot = _sum_over(self._alpha[:, 0], len(model.robots), alpha.size)
        by_owner = _sum_over(self._owner[self._y[:, 0]], len(model.robots), y.size)
        by_task, y_task = (
            _sum_over(pairs[:, 1], tasks, variable.size)
            for pairs, variable in ((self._alpha, alpha), (self._y, y))
        )
        heads = by_task @ alpha + y_task @ y
        least = np.where(self._active, model.least, 0)
        rules = [
            by_robot @ alpha + by_owner @ y <= self._there.astype(float),
            heads <= model.most,
            heads >= cp.multiply(least, z),
            z >= self._covered.astype(float),
        ]
        if len(self._y):
            rules.append(y <= x[self._y[:, 0]])
        else:
            rules.append(y == 0)
        for k in range(len(model.capabilities)):
            need = np.where(self._active, model.needs[:, k], 0.0)
            if need.any():
                brought = _weighted(by_task, self._c[self._alpha[:, 0], k]) @ alpha
                brought += _weighted(y_task, self._extra_c[self._y[:, 0], k]) @ y
                rules.append(brought >= cp.multiply(need * (1 - 1e-9), z))
        return cp.sum(z[np.flatnonzero(~self._covered)]), rules


def _health(model: Model, robots: list[Robot]) -> np.ndarray:
    return np.array([[f in robot.features for f in model.features] for robot in robots], float)


def _sum_over(groups: np.ndarray, count: int, width: int) -> np.ndarray:
    """Give the matrix (count, width) that sums entries by group; spare columns are zero."""
    matrix = np.zeros((count, width))
    matrix[groups, np.arange(len(groups))] = 1.0
    return matrix


def _weighted(matrix: np.ndarray, weights: np.ndarray) -> np.ndarray:
    weighted = matrix.copy()
    weighted[:, : len(weights)] *= weights
    return weighted
