"""Who gets no nearer to its goal."""

from __future__ import annotations

import numpy as np

NEARER = 0.1
"""How much nearer to its goal a robot must be than ever before to have made headway, m."""

ELSEWHERE = 0.3
"""Distance by which a goal is another one, m."""

WANTS = 0.05
"""Share of its cruising speed from which a robot is to move."""


class Headway:
    """Counts for how long each robot that is to move has come no nearer to its goal.

    Attributes:
        stuck: That time, s, shape (N,).
    """

    def __init__(self, robots: int) -> None:
        self.stuck = np.zeros(robots)
        self._nearest = np.full(robots, np.inf)
        self._goals = np.full((robots, 2), np.nan)

    def update(
        self, goals: np.ndarray, distance: np.ndarray, wants: np.ndarray, dt: float
    ) -> None:
        """Take in a period.

        Args:
            goals: Goal points, m, shape (N, 2); NaN without one.
            distance: Way to them, m, shape (N,).
            wants: Robots that are to move, shape (N,).
            dt: Length of the period, s.
        """
        same = np.hypot(*(goals - self._goals).T) <= ELSEWHERE
        self._goals = np.where(same[:, None], self._goals, goals)
        gains = ~same | ~wants | (distance < self._nearest - NEARER)
        self._nearest = np.where(gains, distance, self._nearest)
        self.stuck = np.where(gains, 0.0, self.stuck + dt)
