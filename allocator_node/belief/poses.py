"""Where the robots are at present: last poses carried forward, and who is silent."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..observation import Observation

SMOOTHING = 0.5
"""Time constant of the velocity taken from poses where none is measured, s."""


@dataclass(frozen=True)
class Places:
    """The team's places at one moment.

    Attributes:
        poses: x, y, z (m), heading (rad), carried to now, shape (N, 4); NaN: unknown.
        known: Robots ever heard, shape (N,).
        heard: Robots heard within the timeout, shape (N,).
        age: Age of the last pose, s, shape (N,); inf: never heard.
        velocities: m/s three times, rad/s, shape (N, 4); 0 for robots not heard.
    """

    poses: np.ndarray
    known: np.ndarray
    heard: np.ndarray
    age: np.ndarray
    velocities: np.ndarray


class PoseBelief:
    """Carries each robot's last pose forward by its last velocity."""

    def __init__(self, count: int) -> None:
        self.poses = np.full((count, 4), np.nan)
        self.times = np.full(count, np.nan)
        self.velocities = np.zeros((count, 4))

    def update(self, observation: Observation, now: float, timeout: float) -> Places:
        """Take in an observation and give the places at ``now``.

        Args:
            observation: What was heard.
            now: Time, s.
            timeout: Age from which a robot counts as silent, s.
        """
        times = np.where(np.isfinite(observation.poses).all(axis=1), observation.pose_times, np.nan)
        # A clock that was set back leaves poses from the future: they are forgotten.
        self.times[self.times > now + timeout] = np.nan
        fresh = np.isfinite(times) & ~(times <= self.times) & (times <= now + timeout)
        self._learn_velocity(observation, times, fresh)
        self.poses[fresh] = observation.poses[fresh]
        self.times[fresh] = times[fresh]

        known = np.isfinite(self.times)
        age = np.where(known, np.maximum(now - np.nan_to_num(self.times), 0.0), np.inf)
        heard = age <= timeout
        # A silent robot stands where it was last seen, within a circle that grows.
        ahead = np.where(heard, np.where(known, age, 0.0), 0.0)[:, None]
        carried = self.poses + ahead * self.velocities
        carried[:, 3] = np.angle(np.exp(1j * carried[:, 3]))
        velocities = np.where(heard[:, None], self.velocities, 0.0)
        return Places(carried, known, heard, age, velocities)

    def _learn_velocity(
        self, observation: Observation, times: np.ndarray, fresh: np.ndarray
    ) -> None:
        measured = fresh & np.isfinite(observation.velocities).all(axis=1)
        self.velocities[measured] = observation.velocities[measured]
        counted = fresh & ~measured & np.isfinite(self.times)
        if not counted.any():
            return
        step = (times - self.times)[counted]
        moved = observation.poses[counted] - self.poses[counted]
        moved[:, 3] = np.angle(np.exp(1j * moved[:, 3]))
        weight = (1 - np.exp(-step / SMOOTHING))[:, None]
        self.velocities[counted] += weight * (moved / step[:, None] - self.velocities[counted])
