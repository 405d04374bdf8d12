"""One period's program as numbers, in the symbols of the statement."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

LEVELS = (4, 3, 2, 1, 0)
"""Priority classes in the order they are served."""

DISCRETE = ("capability", "needs", "least", "most", "priority", "eligible", "pinned")
"""Parts of a problem a change of which makes an earlier proof worthless."""


@dataclass(frozen=True, kw_only=True)
class Problem:
    """Data of the allocation-and-control program; N robots, M tasks, K capabilities.

    Attributes:
        capability: c_ik, shape (N, K).
        needs: T_mk, shape (M, K); zero for tasks not active now.
        least: min_m, shape (M,); zero for tasks not active now.
        most: max_m, shape (M,).
        priority: Class of each task, 0..4, shape (M,).
        eligible: Where α_im may be 1, shape (N, M).
        pinned: Task a robot must do, −1: none, shape (N,); only eligible ones.
        previous: Task each robot has now, −1: none, shape (N,).
        swap_cost: ρ_i, Wh, shape (N,).
        energy: e_im, Wh, shape (N, M).
        limits: Greatest size of each command axis, shape (N, 4).
        gear: g_i where a robot turns only as it drives, |ω| / limit ≤ g_i vx / limit:
            1 forward, −1 in reverse; 0: no such bound; shape (N,).
        jacobians: G_i, shape (N, 3, 4).
        away: n_im, unit vector from goal to robot, shape (N, M, 3).
        closing: min(γ d_im, c_i), m/s, shape (N, M); 0 where the row is dropped.
        goal_speed: n_im · ṗ*_im, m/s, shape (N, M).
        kappa: κ, Wh.
        slack_weight: ℓ_i, s²/m², shape (N,).
        path: Way to each goal, m, shape (N, M); not part of the program, for comparisons.
    """

    capability: np.ndarray
    needs: np.ndarray
    least: np.ndarray
    most: np.ndarray
    priority: np.ndarray
    eligible: np.ndarray
    pinned: np.ndarray
    previous: np.ndarray
    swap_cost: np.ndarray
    energy: np.ndarray
    limits: np.ndarray
    gear: np.ndarray
    jacobians: np.ndarray
    away: np.ndarray
    closing: np.ndarray
    goal_speed: np.ndarray
    kappa: float
    slack_weight: np.ndarray
    path: np.ndarray | None = None

    @property
    def demand(self) -> np.ndarray:
        """Closing speed the task row demands of the command, m/s, shape (N, M)."""
        return np.where(self.closing > 0, self.closing - self.goal_speed, 0.0)

    @cached_property
    def situation(self) -> bytes:
        """The discrete data, as something that can be compared from period to period."""
        return b"".join(getattr(self, name).tobytes() for name in DISCRETE)

    @cached_property
    def settled(self) -> np.ndarray:
        """Robots that could go on with the task they have, shape (n,)."""
        busy = np.flatnonzero(self.previous >= 0)
        return busy[self.eligible[busy, self.previous[busy]]]

    @cached_property
    def holding(self) -> np.ndarray:
        """How many robots could go on with each task, shape (M,)."""
        return np.bincount(self.previous[self.settled], minlength=len(self.most))

    @cached_property
    def keeps_on(self) -> np.ndarray:
        """Where a robot could go on with the task it has, shape (N, M)."""
        keeps = np.zeros(self.eligible.shape, dtype=bool)
        keeps[self.settled, self.previous[self.settled]] = True
        return keeps
